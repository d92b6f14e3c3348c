"""What is required of one design, line by line, each beside the worst that the box does to it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from sweep.config import Requirement
from sweep.grid import Grid
from sweep.query.answers.judge import Line
from sweep.query.blocks import Readable
from sweep.query.derived import spec_of
from sweep.query.extremes import Extreme, find_extremes
from sweep.query.requirement import is_violated, requirement_name, requirement_text
from sweep.query.scope import Scope
from sweep.query.select import Value, value_at
from sweep.query.verdicts import NAMES, decide
from sweep.query.worst import find_excluded
from sweep.vocabulary import LoopStructure

PROCESSOR_TIME = "processor_time"
"""The line that says whether the loop can be built."""


def find_lines(
    block: Readable, structure: LoopStructure, scope: Scope, requirements: Sequence[Requirement]
) -> tuple[Line, ...]:
    """Every line of the verdict on one design: stability first, the processor's time last.

    Parameters
    ----------
    block
        The atlas, or the part of it that holds the box.
    structure
        Of its loop.
    scope
        One design and its box.
    requirements
        What is required, stability first.
    """
    lines = [_line(block, scope, requirement) for requirement in requirements]
    lines = [
        replace(line, at=lines[0].at) if is_lost(line.require, line.worst) else line
        for line in lines
    ]
    if "compute" in dict(structure.delay_parts):
        lines.append(_processor_line(structure, scope))
    return tuple(lines)


def is_lost(quantity: str, worst: float) -> bool:
    """Whether a decay time is unbounded: of all nodes that are not stable the worst is named."""
    return quantity.endswith("decay_time") and worst == math.inf


def _line(block: Readable, scope: Scope, requirement: Requirement) -> Line:
    extreme = Extreme(requirement.quantity, requirement.sense)
    (found,) = find_extremes(block, scope, [extreme])
    worst = found.worst[extreme]
    code = decide(is_violated(requirement, worst), found.unknown > 0)
    nodes = scope.box_node(int(found.which[extreme].item()))
    return Line(
        require=requirement_name(requirement),
        text=requirement_text(requirement),
        unit=spec_of(requirement.quantity).unit,
        limit=requirement.limit,
        worst=float(worst.item()),
        at=_place(scope.grid, nodes),
        unknown=found.unknown_nodes,
        verdict=NAMES[int(code.item())],
    )


def _processor_line(structure: LoopStructure, scope: Scope) -> Line:
    """Whether the processor is done within the period, at every node of the box."""
    in_samples = dict(structure.delay_parts)["compute"] == "samples"
    compute = scope.parameter("delay.compute")
    periods = compute if in_samples else compute / scope.parameter("sample_period")
    worst = np.unravel_index(int(periods.argmax()), periods.shape)
    nodes = {i: int(scope.spans[i][worst[i]]) for i in scope.box if periods.shape[i] > 1}
    late = bool(find_excluded(structure, scope).any())
    return Line(
        require=PROCESSOR_TIME,
        text="processor time at most one sample period",
        unit="samples",
        limit=1.0,
        worst=float(periods[worst]),
        at=_place(scope.grid, nodes),
        unknown=0,
        verdict="fails" if late else "meets",
    )


def _place(grid: Grid, nodes: Mapping[int, int]) -> dict[str, Value]:
    return {grid.axes[i].name: value_at(grid.axes[i], nodes[i]) for i in sorted(nodes)}
