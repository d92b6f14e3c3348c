"""What lies around a chosen design: ends of axes, ends of the ranges asked for, what does not meet.

Along rows without an order neighbours mean nothing, so that nothing is said of them.
"""

from __future__ import annotations

from sweep.query.gaps import unordered_dimensions
from sweep.query.largest_box import Box
from sweep.query.scope import Scope
from sweep.query.verdicts import MEETS
from sweep.query.worst import WorstCases


def find_axis_ends(scope: Scope, design: tuple[int, ...]) -> tuple[str, ...]:
    """Axes with several nodes to choose from at whose end a design lies.

    Parameters
    ----------
    scope
        Of the question.
    design
        Place along every free axis.
    """
    ends = []
    for dimension, position in _chosen_from(scope):
        axis = scope.grid.axes[position]
        if scope.spans[position][design[dimension]] in (0, len(axis) - 1):
            ends.append(axis.name)
    return tuple(ends)


def find_range_ends(scope: Scope, design: tuple[int, ...]) -> tuple[str, ...]:
    """Axes that go on beside a design, where the range asked for does not.

    Parameters
    ----------
    scope
        Of the question.
    design
        Place along every free axis.
    """
    ends = []
    for dimension, position in _limited(scope):
        node = int(scope.spans[position][design[dimension]])
        if any(_goes_on(scope, position, beside) for beside in (node - 1, node + 1)):
            ends.append(scope.grid.axes[position].name)
    return tuple(ends)


def find_box_range_ends(
    scope: Scope, box: Box, period_dimension: int | None
) -> tuple[tuple[str, str], ...]:
    """Axes and sides at which a gain box ends with the range asked for, though the axis goes on.

    Parameters
    ----------
    scope
        Of the question.
    box
        Places along every free axis but the sample period's.
    period_dimension
        Which of the free axes that is; `None` for none of them.
    """
    others = [d for d in range(len(scope.free)) if d != period_dimension]
    corners = dict(zip(others, zip(box.low, box.high, strict=True), strict=True))
    ends = []
    for dimension, position in _limited(scope):
        if dimension in corners:
            low, high = (int(scope.spans[position][place]) for place in corners[dimension])
            name = scope.grid.axes[position].name
            sides = (("low", low - 1), ("high", high + 1))
            ends += [(name, side) for side, node in sides if _goes_on(scope, position, node)]
    return tuple(ends)


def find_beside_failing(cases: WorstCases, design: tuple[int, ...]) -> tuple[str, ...]:
    """Axes along which a neighbour of a design is not known to meet.

    Parameters
    ----------
    cases
        The verdict on every design.
    design
        Place along every free axis.
    """
    scope, codes, beside = cases.scope, cases.verdict, []
    for dimension, position in _chosen_from(scope):
        place, last = design[dimension], codes.shape[dimension] - 1
        around = [i for i in (place - 1, place + 1) if 0 <= i <= last]
        before, after = design[:dimension], design[dimension + 1 :]
        if any(codes[(*before, i, *after)] != MEETS for i in around):
            beside.append(scope.grid.axes[position].name)
    return tuple(beside)


def _chosen_from(scope: Scope) -> list[tuple[int, int]]:
    """Dimension and position of the free axes with several nodes whose neighbours count."""
    return [pair for pair in _ordered(scope) if len(scope.spans[pair[1]]) > 1]


def _limited(scope: Scope) -> list[tuple[int, int]]:
    """Dimension and position of the free axes of which a range was asked for."""
    return [
        (dimension, position)
        for dimension, position in _ordered(scope)
        if scope.grid.axes[position].name not in scope.at
        and len(scope.spans[position]) < len(scope.grid.axes[position])
    ]


def _ordered(scope: Scope) -> list[tuple[int, int]]:
    unordered = unordered_dimensions(scope)
    return [pair for pair in enumerate(scope.free) if pair[0] not in unordered]


def _goes_on(scope: Scope, position: int, node: int) -> bool:
    """Whether an axis holds a node that the question leaves out."""
    return 0 <= node < len(scope.grid.axes[position]) and node not in scope.spans[position]
