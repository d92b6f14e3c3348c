"""Honesty about the grid: how far log_radius jumps from node to node where an answer ends.

A boundary between neighbours that differ by 0.01 is resolved; between neighbours that differ by 2
it is a guess that happens to lie in the right cell.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray


def find_largest_jump(
    log_radius: NDArray[np.floating], inside: NDArray[np.bool_], unordered: Sequence[int] = ()
) -> float | None:
    """The largest difference of log_radius between neighbours of which one is inside.

    Parameters
    ----------
    log_radius
        Any shape; NaN where unknown, which is no neighbour.
    inside
        The same shape: nodes that an answer holds.
    unordered
        Dimensions along which neighbours mean nothing.

    Returns
    -------
    `None` where no known node inside has a known neighbour outside.

    Examples
    --------
    >>> find_largest_jump(np.array([-0.5, -0.1, 0.3]), np.array([True, True, False]))
    0.4
    """
    largest = None
    for dimension in range(log_radius.ndim):
        if dimension in unordered or log_radius.shape[dimension] < 2:
            continue
        crossed = np.diff(inside, axis=dimension)
        here = _halves(log_radius, dimension)
        jumps = np.abs(here[1][crossed].astype(np.float64) - here[0][crossed])
        known = jumps[~np.isnan(jumps)]
        if known.size:
            largest = max(float(known.max()), largest or 0.0)
    return largest


def _halves(
    values: NDArray[np.floating], dimension: int
) -> tuple[NDArray[np.floating], NDArray[np.floating]]:
    """All nodes but the last, and all but the first, along one dimension."""
    moved = np.moveaxis(values, dimension, 0)
    low, high = moved[:-1], moved[1:]
    return np.moveaxis(low, 0, dimension), np.moveaxis(high, 0, dimension)
