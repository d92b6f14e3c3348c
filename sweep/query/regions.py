"""How many separate regions the nodes that meet make up."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray


def count_regions(meets: NDArray[np.bool_], *, unordered: Sequence[int] = ()) -> int:
    """The number of connected regions of nodes that meet.

    Parameters
    ----------
    meets
        Any number of axes: whether each node meets.
    unordered
        Positions of the axes along which neighbours mean nothing: nodes at different places along
        them do not touch.

    Returns
    -------
    Regions of nodes joined along one axis at a time; a corner or an edge does not join.

    Raises
    ------
    ValueError
        When ``unordered`` is not a set of axes of ``meets``.

    Examples
    --------
    >>> count_regions(np.array([[True, False], [False, True]]))
    2
    """
    from scipy.ndimage import generate_binary_structure, label

    if not set(unordered) <= set(range(meets.ndim)):
        raise ValueError(f"axes {tuple(unordered)} expected within 0 to {meets.ndim - 1}")
    if meets.ndim == 0:
        return int(meets)
    touching = generate_binary_structure(meets.ndim, 1)
    for axis in unordered:
        np.moveaxis(touching, axis, 0)[[0, 2]] = False
    _, regions = label(meets, structure=touching)
    return int(regions)
