"""Connected regions, against a flood that walks from node to node."""

from __future__ import annotations

import hypothesis.extra.numpy as hnp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweep.query.regions import count_regions


def count_by_walking(meets, unordered):
    left = set(map(tuple, np.argwhere(meets).tolist()))
    regions = 0
    while left:
        regions += 1
        reached = [left.pop()]
        while reached:
            node = reached.pop()
            for axis in set(range(meets.ndim)) - set(unordered):
                for step in (-1, 1):
                    beside = (*node[:axis], node[axis] + step, *node[axis + 1 :])
                    if beside in left:
                        left.remove(beside)
                        reached.append(beside)
    return regions


@given(
    hnp.arrays(bool, hnp.array_shapes(min_dims=1, max_dims=4, min_side=1, max_side=5)),
    st.sets(st.integers(0, 3)),
)
def test_it_counts_what_a_walk_along_the_ordered_axes_reaches(meets, unordered):
    unordered = sorted(axis for axis in unordered if axis < meets.ndim)
    assert count_regions(meets, unordered=unordered) == count_by_walking(meets, unordered)


@pytest.mark.parametrize("meets", [True, False])
def test_without_axes_there_is_the_node_or_nothing(meets):
    assert count_regions(np.array(meets)) == meets


def test_an_axis_without_nodes_has_no_region():
    assert count_regions(np.zeros((3, 0), dtype=bool)) == 0


def test_an_axis_that_is_not_there_is_refused():
    with pytest.raises(ValueError, match="expected within 0 to 1"):
        count_regions(np.ones((2, 2), dtype=bool), unordered=[-1])
