"""The largest box of meeting nodes, against exhaustive search and on masks of real size."""

from __future__ import annotations

import itertools
import math

import hypothesis.extra.numpy as hnp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweep.query.largest_box import find_largest_box


def largest_by_trial(meets, around=None, single=()):
    """Every box there is, in the order in which equal ones are preferred: (nodes, low, high)."""
    best = None
    spans = [list(itertools.combinations_with_replacement(range(n), 2)) for n in meets.shape]
    for axis in single:
        spans[axis] = [(a, b) for a, b in spans[axis] if a == b]
    for axis, place in enumerate(around or ()):
        spans[axis] = [(a, b) for a, b in spans[axis] if a <= place <= b]
    for box in itertools.product(*spans):
        if meets[within(*zip(*box, strict=True))].all():
            order = -nodes_in(box), *zip(*box, strict=True)
            best = order if best is None else min(best, order)
    return best and (-best[0], *best[1:])


def nodes_in(box):
    return math.prod(b - a + 1 for a, b in box)


def within(low, high):
    return tuple(slice(a, b + 1) for a, b in zip(low, high, strict=True))


@st.composite
def questions(draw):
    rank = draw(st.integers(1, 4))
    shape = draw(st.tuples(*[st.integers(1, {1: 12, 2: 6, 3: 4, 4: 3}[rank])] * rank))
    dense = draw(st.booleans())
    meets = draw(hnp.arrays(bool, shape, elements=st.booleans(), fill=st.just(dense)))
    around = draw(st.none() | st.tuples(*(st.integers(0, n - 1) for n in shape)))
    single = draw(st.sets(st.integers(0, rank - 1)))
    return meets, around, tuple(sorted(single))


@given(questions())
def test_it_is_the_box_that_exhaustive_search_finds(question):
    meets, around, single = question
    found = find_largest_box(meets, around=around, single=single)
    wanted = largest_by_trial(meets, around, single)
    if wanted is None:
        assert found is None
    else:
        assert (found.nodes, found.low, found.high) == wanted
        assert found.exact
        assert found.at_most == found.nodes


@given(questions(), st.integers(1, 6))
def test_a_spent_budget_leaves_a_box_that_meets_and_a_bound_that_holds(question, budget):
    meets, around, single = question
    found = find_largest_box(meets, around=around, single=single, budget=budget)
    wanted = largest_by_trial(meets, around, single)
    if found is None:
        assert wanted is None
        return
    assert meets[within(found.low, found.high)].all()
    assert found.nodes == nodes_in(zip(found.low, found.high, strict=True))
    assert found.nodes <= wanted[0] <= found.at_most
    assert found.exact == (found.nodes == found.at_most)


def test_nothing_that_meets_has_no_box():
    assert find_largest_box(np.zeros((3, 0, 2), dtype=bool)) is None
    assert find_largest_box(np.zeros((3, 4), dtype=bool)) is None


def test_one_node_without_axes_is_a_box():
    assert find_largest_box(np.array(True)).nodes == 1


@pytest.mark.parametrize("around", [(0,), (0, 5), (0, -1), (0, 0, 0)])
def test_a_node_off_the_grid_is_refused(around):
    with pytest.raises(ValueError, match="expected within a grid"):
        find_largest_box(np.ones((2, 5), dtype=bool), around=around)


def test_an_axis_that_is_not_there_is_refused():
    with pytest.raises(ValueError, match="expected within 0 to 1"):
        find_largest_box(np.ones((2, 5), dtype=bool), single=[2])


def test_the_mask_is_left_as_it_was():
    meets = np.random.default_rng(1).random((5, 6, 7)) < 0.8
    meets[2, 3, 3] = True
    before = meets.copy()
    find_largest_box(meets, around=(2, 3, 3))
    assert (meets == before).all()
