"""Yield over the rows of a table: which share of them meets, and what that says of the next."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.config.findings import find_near
from sweep.errors import QuestionError
from sweep.grid import Axis
from sweep.query.answers.plain import plain
from sweep.query.blocks import Indices
from sweep.query.verdicts import EXCLUDED, FAILS, MEETS, NAMES, UNKNOWN, Codes, Verdict, decide

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class WorstRow:
    """The row that comes nearest to losing stability, or is furthest past it."""

    row: str
    """Its label."""
    log_radius: float
    """The largest that is known of it over the box."""
    verdict: Verdict
    """On the whole row; ``unknown`` warns that it may be worse than the known nodes tell."""


@dataclass(frozen=True)
class Yield:
    """How many rows of a table meet, with the interval that their number alone supports.

    The interval is about the population that the rows stand for, and supposes that they are a
    random sample of it, drawn without looking at the outcome. For units picked by hand, or a list
    of operating points, read the share and leave the interval. It is an interval of the count:
    weights play no part in it. Unknown rows count as failing, so that ``low`` and ``at_least`` err
    on the safe side; with unknown rows ``high`` is no upper bound.
    """

    axis: str
    """The row axis."""
    rows: int
    """Rows in the box."""
    meets: int
    """Rows that meet at every node of the box of all other tolerances."""
    fails: int
    """Rows that fail at some node."""
    unknown: int
    """Rows that fail at none and are unknown at some."""
    share: float
    """``meets`` of ``rows``: unknown rows count as failing."""
    low: float
    """Lower end of the two-sided exact interval of the share."""
    high: float
    """Upper end of it."""
    at_least: float
    """One-sided exact lower bound of the share, at the same confidence."""
    confidence: float
    """Of the interval and of the bound, between 0 and 1."""
    worst: WorstRow | None
    """The row with the largest known log_radius over the box; ``None`` when none is known."""
    weighted_share: float | None = None
    """Weight of the rows that meet, of the weight of all rows in the box; ``None`` without weights.
    It is of these rows as they are, without an interval."""

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        document: dict[str, Any] = plain(vars(self) | {"worst": self.worst and vars(self.worst)})
        return document


def clopper_pearson(meets: int, rows: int, confidence: float = 0.95) -> tuple[float, float]:
    """The exact two-sided interval of a share, of which ``meets`` of ``rows`` were seen.

    Parameters
    ----------
    meets
        From 0 to ``rows``.
    rows
        At least 1.
    confidence
        Above 0 and below 1; half of what is left lies beyond either end.

    Returns
    -------
    Lower and upper end, between 0 and 1.

    Raises
    ------
    ValueError
        Outside those ranges.

    References
    ----------
    C. J. Clopper, E. S. Pearson, The use of confidence or fiducial limits illustrated in the case
    of the binomial, Biometrika 26 (1934), 404-413.

    Examples
    --------
    >>> low, high = clopper_pearson(19, 20)
    >>> f"{low:.4f} {high:.4f}"
    '0.7513 0.9987'
    """
    _check(meets, rows, confidence)
    beyond = (1.0 - confidence) / 2.0
    # what does not meet is a share as well: its lower bound is the other end
    return _lower_bound(meets, rows, beyond), 1.0 - _lower_bound(rows - meets, rows, beyond)


def at_least(meets: int, rows: int, confidence: float = 0.95) -> float:
    """The exact one-sided lower bound of a share, of which ``meets`` of ``rows`` were seen.

    Parameters
    ----------
    meets
        From 0 to ``rows``.
    rows
        At least 1.
    confidence
        Above 0 and below 1.

    Raises
    ------
    ValueError
        Outside those ranges.

    References
    ----------
    C. J. Clopper, E. S. Pearson, as for `clopper_pearson`. When all of n meet, the bound is the
    n-th root of 1 - confidence: S. S. Wilks, Determination of sample sizes for setting tolerance
    limits, Annals of Mathematical Statistics 12 (1941), 91-96.

    Examples
    --------
    >>> f"{at_least(59, 59):.4f} {at_least(58, 58):.4f}"
    '0.9505 0.9497'
    """
    _check(meets, rows, confidence)
    return _lower_bound(meets, rows, 1.0 - confidence)


def find_yields(
    axes: Sequence[Axis],
    box: Sequence[Indices],
    verdict: Codes,
    log_radius: FloatArray,
    confidence: float = 0.95,
    weights: Mapping[str, Mapping[str, float]] | None = None,
) -> tuple[Yield, ...]:
    """The share of rows that meet, one answer for each row axis.

    A row meets when it does at every node of the box along all other axes, other tables included.

    Parameters
    ----------
    axes
        Every tolerance axis.
    box
        For each axis the nodes of the box, at least one.
    verdict
        One code for each node of all axes, in their order. What cannot be built counts as failing.
    log_radius
        Same shape; NaN where unknown.
    confidence
        Above 0 and below 1.
    weights
        By row axis, the weight of each row by label, 0 or more, such as how often it occurs. Rows
        outside the box may have one too.

    Returns
    -------
    In the order of the axes. The interval is that of the count and supposes that the rows are a
    random sample; see `Yield`. The worst row is the one with the largest log_radius that is known
    anywhere in the box, of equal ones the first; unknown nodes cannot outdo it, which is why its
    verdict and the number of unknown rows stand beside it.

    Raises
    ------
    QuestionError
        When a row of the box has no weight, a weight is not a finite number of 0 or more, all of
        them are 0, or a weight is for no row axis or no row of it.
    ValueError
        When the confidence is out of its range.
    """
    tables = {axis.name: position for position, axis in enumerate(axes) if axis.is_row_axis}
    check_tables(tables, weights or {})
    inside = np.ix_(*box)
    codes, radii = verdict[inside], log_radius[inside]
    found = []
    for name, position in tables.items():
        axis, nodes = axes[position], box[position]
        by_row = _by_row(codes, position)
        failing = (by_row == FAILS) | (by_row == EXCLUDED)
        rows = decide(failing.any(axis=1), (by_row == UNKNOWN).any(axis=1))
        worst = _worst_row(axis, nodes, rows, _by_row(radii, position))
        weighted = None
        if weights and name in weights:
            weighted = _weighted_share(rows == MEETS, _weights_of(axis, nodes, weights[name]))
        found.append(_yield(name, rows, confidence, worst, weighted))
    return tuple(found)


def _yield(
    name: str, rows: Codes, confidence: float, worst: WorstRow | None, weighted: float | None
) -> Yield:
    count, meets = len(rows), int(np.count_nonzero(rows == MEETS))
    low, high = clopper_pearson(meets, count, confidence)
    return Yield(
        axis=name,
        rows=count,
        meets=meets,
        fails=int(np.count_nonzero(rows == FAILS)),
        unknown=int(np.count_nonzero(rows == UNKNOWN)),
        share=meets / count,
        low=low,
        high=high,
        at_least=at_least(meets, count, confidence),
        confidence=confidence,
        worst=worst,
        weighted_share=weighted,
    )


def _by_row(values: NDArray[Any], position: int) -> NDArray[Any]:
    """Shape (rows, all other nodes)."""
    return np.moveaxis(values, position, 0).reshape(values.shape[position], -1)


def _worst_row(axis: Axis, nodes: Indices, rows: Codes, radii: FloatArray) -> WorstRow | None:
    largest = np.where(np.isnan(radii), -np.inf, radii).max(axis=1)
    place = int(largest.argmax())
    if largest[place] == -np.inf or axis.labels is None:
        return None
    label = axis.labels[int(nodes[place])]
    return WorstRow(label, float(largest[place]), NAMES[int(rows[place])])


def _weighted_share(meets: NDArray[np.bool_], weights: FloatArray) -> float:
    # scaled by a power of 2, which is exact: a sum of finite weights may not be finite
    scaled = np.ldexp(weights, -math.frexp(weights.max())[1])
    return math.fsum(scaled[meets]) / math.fsum(scaled)


def _weights_of(axis: Axis, nodes: Indices, given: Mapping[str, float]) -> FloatArray:
    """The weight of each row in the box, shape (rows,), checked."""
    labels = axis.labels or ()
    for label, weight in given.items():
        _check_label(axis, label)
        _check_weight(axis, label, weight)
    inside = [labels[int(node)] for node in nodes]
    missing = [label for label in inside if label not in given]
    if missing:
        raise QuestionError(
            f"weighting the rows of {axis.name}: {len(missing)} of {len(inside)} rows in the box "
            f"have no weight, {missing[0]} first",
            where=[axis.name, *missing[:8]],
            remedy=f"give {missing[0]} a weight, 0 if it is not to count",
        )
    weights = np.array([float(given[label]) for label in inside])
    if not weights.any():
        raise QuestionError(
            f"weighting the rows of {axis.name}: every row in the box has a weight of 0",
            where=[axis.name],
            remedy="give at least one row of the box a weight above 0",
        )
    return weights


def check_tables(tables: Collection[str], weights: Mapping[str, object]) -> None:
    """Refuse weights of what is not among the row axes.

    Raises
    ------
    QuestionError
        Names the first.
    """
    for name in weights:
        if name not in tables:
            raise QuestionError(
                f"weighting the rows of {name}: it is no table of tolerances here; "
                f"those are {', '.join(tables) or 'none'}",
                where=[name],
                remedy="weigh the rows of a row axis that nature chooses from",
            )


def _check_label(axis: Axis, label: str) -> None:
    labels = axis.labels or ()
    if label in labels:
        return
    near = find_near(label, labels)
    raise QuestionError(
        f"weighting the rows of {axis.name}: it has no row {label}",
        where=[axis.name, label],
        remedy=f"write {near}, which was probably meant" if near else "name rows by their labels",
    )


def _check_weight(axis: Axis, label: str, weight: float) -> None:
    if not (math.isfinite(weight) and weight >= 0.0):
        raise QuestionError(
            f"weighting the rows of {axis.name}: the weight of {label} is {weight:g}; expected a "
            "finite number of 0 or more",
            where=[axis.name, label],
            remedy=f"give {label} its share or its number of occurrences",
        )


def _lower_bound(meets: int, rows: int, beyond: float) -> float:
    """The share at which ``meets`` or more of ``rows`` have the probability ``beyond``."""
    from scipy.special import betaincinv

    return float(betaincinv(meets, rows - meets + 1, beyond)) if meets else 0.0


def _check(meets: int, rows: int, confidence: float) -> None:
    if not (0 <= meets <= rows and rows >= 1 and 0.0 < confidence < 1.0):
        raise ValueError(
            f"{meets} of {rows} at a confidence of {confidence}: expected 0 <= meets <= rows, "
            "rows >= 1 and a confidence above 0 and below 1"
        )
