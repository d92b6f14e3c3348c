"""The latency that is left: how much later than its box a delay may be before stability is lost."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from sweep.grid import Axis
from sweep.query.answers.choose import DelayLeft
from sweep.query.answers.limits import End
from sweep.query.blocks import Indices, Readable
from sweep.query.scope import Scope
from sweep.query.shake import Window
from sweep.query.stability.limits import find_limits
from sweep.query.stability.walk import LimitsQuestion

PROCESSOR = "delay.compute"
"""The processor's time, which a sample period has to hold."""


def delay_axes(scope: Scope) -> tuple[int, ...]:
    """Positions of the tolerance axes that are delays; tables of rows are not among them."""
    return tuple(
        position
        for position in scope.tolerances
        if not scope.grid.axes[position].is_row_axis
        and scope.grid.axes[position].sets[0].startswith("delay.")
    )


def find_delay_left(
    stored: Readable, scope: Scope, windows: Iterable[Window], design: tuple[int, ...]
) -> tuple[DelayLeft, ...] | None:
    """How much of each delay is left to a design that is stable throughout the box.

    Every other tolerance counts at its worst over the box, and so do the neighbours that a bracket
    or a shaken axis takes in. Between nodes the boundary is interpolated, and the processor's time
    is bounded by the sample period itself rather than by the last node below it.

    Parameters
    ----------
    stored
        The atlas.
    scope
        Designs and box.
    windows
        Neighbours to take in along free axes.
    design
        Place along every free axis.

    Returns
    -------
    One for each delay axis of the box; `None` when there is none.
    """
    delays = delay_axes(scope)
    if not delays:
        return None
    spans = list(scope.spans)
    for axis, place in zip(scope.free, design, strict=True):
        spans[axis] = spans[axis][place : place + 1]
    for window in windows:
        place = design[scope.free.index(window.axis)]
        spans[window.axis] = np.arange(window.first[place], window.last[place] + 1, dtype=np.intp)
    joined = sorted({*scope.box, *(window.axis for window in windows)})
    return tuple(_left_along(stored, scope, spans, joined, along) for along in delays)


def _left_along(
    stored: Readable, scope: Scope, spans: list[Indices], joined: list[int], along: int
) -> DelayLeft:
    axis = scope.grid.axes[along]
    asked = list(spans)
    asked[along] = np.arange(len(axis), dtype=np.intp)
    box = tuple(position for position in joined if position != along)
    question = LimitsQuestion(scope.grid, along, tuple(asked), box, {}, (), ())
    (row,) = find_limits(stored, stored.atlas_id, question, 1).rows
    upper = float(axis.coordinates[spans[along][-1]])
    (end,) = [i.high for i in row.intervals if _value(i.low) <= upper <= _value(i.high)]
    return _as_left(axis, upper, end, _latest(scope, spans, axis))


def _as_left(axis: Axis, upper: float, end: End, latest: float) -> DelayLeft:
    if latest < _value(end):
        return DelayLeft(axis.name, max(0.0, latest - upper), latest, "excluded", axis.unit)
    to = _value(end)
    return DelayLeft(axis.name, to - upper, to, end.end, axis.unit, end.kind, end.hz)


def _value(end: End) -> float:
    return float(end.value)


def _latest(scope: Scope, spans: list[Indices], axis: Axis) -> float:
    """The longest that the processor may take, in the unit of the axis; else no bound."""
    if axis.sets != (PROCESSOR,):
        return np.inf
    if axis.unit == "samples":
        return 1.0
    at_hand = Scope(scope.grid, tuple(spans), (), {})
    return float(at_hand.parameter("sample_period").min())
