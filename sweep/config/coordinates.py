"""Coordinates in decimal arithmetic: evenly or logarithmically spaced, with pinned values.

Everything here is pure and takes decimals in one unit; the caller has checked counts and signs.
"""

from __future__ import annotations

import bisect
import decimal
from collections.abc import Sequence
from decimal import Decimal

from sweep.quantities import CONTEXT

BILLIONTH = Decimal("1e-9")
"""Share of an axis' span within which two values are the same node."""

_WHOLE = Decimal("1e-30")
"""Distance from a whole number of steps that the arithmetic itself may leave."""

_GUARD_DIGITS = 25


def space_by_count(start: Decimal, stop: Decimal, count: int) -> list[Decimal]:
    """Space ``count`` >= 2 nodes evenly from ``start`` to ``stop``, both included.

    >>> space_by_count(Decimal(1), Decimal(2), 3)
    [Decimal('1'), Decimal('1.5'), Decimal('2')]
    """
    with decimal.localcontext(CONTEXT):
        span, last = stop - start, Decimal(count - 1)
        return [*(start + span * i / last for i in range(count - 1)), stop]


def count_steps(start: Decimal, stop: Decimal, step: Decimal) -> Decimal:
    """Count the steps from ``start`` to ``stop``; whole when `is_whole` says so."""
    return CONTEXT.divide(CONTEXT.subtract(stop, start), step)


def is_whole(steps: Decimal) -> bool:
    """Whether a number of steps is whole, but for the last digits of the arithmetic."""
    with decimal.localcontext(CONTEXT):
        return abs(steps - steps.to_integral_value()) <= _WHOLE * max(abs(steps), Decimal(1))


def space_by_step(start: Decimal, stop: Decimal, step: Decimal, steps: int) -> list[Decimal]:
    """Space ``steps`` + 1 nodes ``step`` apart; the last is ``stop`` itself.

    >>> space_by_step(Decimal(0), Decimal("0.3"), Decimal("0.1"), 3)[2]
    Decimal('0.2')
    """
    with decimal.localcontext(CONTEXT):
        return [*(start + step * i for i in range(steps)), stop]


def space_by_ratio(start: Decimal, stop: Decimal, count: int) -> list[Decimal]:
    """Space ``count`` >= 2 nodes by a constant ratio from ``start`` > 0 to ``stop`` > 0.

    The ratio is multiplied up with guard digits, whose loss over a million nodes stays far below
    the 40 digits that are kept.

    >>> space_by_ratio(Decimal(1), Decimal(1000), 4) == [1, 10, 100, 1000]
    True
    """
    wide = CONTEXT.copy()
    wide.prec = CONTEXT.prec + _GUARD_DIGITS
    with decimal.localcontext(wide):
        ratio = ((stop / start).ln() / (count - 1)).exp()
        value = start
        nodes = [start]
        for _ in range(count - 2):
            value *= ratio
            nodes.append(value)
    return [*(CONTEXT.plus(node) for node in nodes), stop]


def pin(nodes: Sequence[Decimal], pins: Sequence[Decimal]) -> list[Decimal]:
    """Make every pin a node: it takes the place of a node nearby, or joins.

    Parameters
    ----------
    nodes
        Increasing, at least one.
    pins
        In any order. Of two within a billionth of the span of each other the later one counts.

    >>> pin([Decimal(0), Decimal(1)], [Decimal("0.25"), Decimal("0.9999999999")])
    [Decimal('0'), Decimal('0.25'), Decimal('0.9999999999')]
    """
    with decimal.localcontext(CONTEXT):
        tolerance = (nodes[-1] - nodes[0]) * BILLIONTH
        kept, joined = list(nodes), []
        for value in pins:
            near = nearest(nodes, value)
            if abs(nodes[near] - value) <= tolerance:
                kept[near] = value
            else:
                joined.append(value)
        return sorted(kept + _without_twins(joined, tolerance))


def _without_twins(pins: list[Decimal], tolerance: Decimal) -> list[Decimal]:
    """Of values closer than ``tolerance`` keep the one that was given last."""
    ranked = sorted(enumerate(pins), key=lambda item: item[1])
    kept: list[tuple[int, Decimal]] = []
    for order, value in ranked:
        if kept and value - kept[-1][1] <= tolerance:
            kept[-1] = max(kept[-1], (order, value))
        else:
            kept.append((order, value))
    return [value for _, value in kept]


def nearest(nodes: Sequence[Decimal], value: Decimal) -> int:
    """Find the index of the node nearest to ``value``; the lower one of two equally near.

    >>> nearest([Decimal(0), Decimal(1), Decimal(5)], Decimal(4))
    2
    """
    right = bisect.bisect_left(nodes, value)
    if right == 0:
        return 0
    if right == len(nodes):
        return right - 1
    with decimal.localcontext(CONTEXT):
        return right if nodes[right] - value < value - nodes[right - 1] else right - 1


def is_within(nodes: Sequence[Decimal], value: Decimal) -> bool:
    """Whether ``value`` lies between the ends, or within a billionth of the span of one."""
    with decimal.localcontext(CONTEXT):
        tolerance = (nodes[-1] - nodes[0]) * BILLIONTH
        return nodes[0] - tolerance <= value <= nodes[-1] + tolerance
