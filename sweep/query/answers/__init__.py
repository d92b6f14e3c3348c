"""Answers: frozen records that print themselves for people and write themselves for programs."""

from __future__ import annotations

from sweep.query.answers.choose import ChooseAnswer, ChooseRow, DelayLeft, Outcome, Price
from sweep.query.answers.judge import (
    DesignVerdict,
    Distance,
    GainFall,
    Hurt,
    JudgeAnswer,
    Line,
    Reached,
)
from sweep.query.answers.limits import (
    CrossingKind,
    End,
    EndKind,
    Interval,
    LimitsAnswer,
    LimitsRow,
)
from sweep.query.answers.plain import plain, show_value
from sweep.query.answers.plane import Mark, PlaneAnswer
from sweep.query.answers.point import PointAnswer
from sweep.query.answers.robust import LargestBox, RobustAnswer, WorstNode

__all__ = [
    "ChooseAnswer",
    "ChooseRow",
    "CrossingKind",
    "DelayLeft",
    "DesignVerdict",
    "Distance",
    "End",
    "EndKind",
    "GainFall",
    "Hurt",
    "Interval",
    "JudgeAnswer",
    "LargestBox",
    "LimitsAnswer",
    "LimitsRow",
    "Line",
    "Mark",
    "Outcome",
    "PlaneAnswer",
    "PointAnswer",
    "Price",
    "Reached",
    "RobustAnswer",
    "WorstNode",
    "plain",
    "show_value",
]
