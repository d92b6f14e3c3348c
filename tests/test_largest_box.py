"""The largest box of meeting nodes, against exhaustive search and on masks of real size."""

from __future__ import annotations

import itertools
import math
import time
from unittest import mock

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweep.query import largest_box
from sweep.query.largest_box import find_largest_box


def largest_by_trial(meets, around=None, single=()):
    """Every box there is, in the order in which equal ones are preferred: (nodes, low, high)."""
    best = None
    spans = [list(itertools.combinations_with_replacement(range(n), 2)) for n in meets.shape]
    for axis in single:
        spans[axis] = [(a, b) for a, b in spans[axis] if a == b]
    for axis, (low, high) in enumerate(zip(*around, strict=True) if around else ()):
        spans[axis] = [(a, b) for a, b in spans[axis] if a <= low and high <= b]
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
    shape = draw(st.tuples(*[st.integers(1, {1: 20, 2: 8, 3: 5, 4: 3}[rank])] * rank))
    dense = draw(st.sampled_from([0.0, 0.4, 0.7, 0.9, 0.97]))
    rng = np.random.default_rng(draw(st.integers(0, 1 << 32)))
    meets = rng.random(shape) < dense
    ends = [st.tuples(st.integers(0, n - 1), st.integers(0, n - 1)).map(sorted) for n in shape]
    near = [pair.map(lambda ab: (ab[0], min(ab[1], ab[0] + 1))) for pair in ends]
    around = draw(st.none() | st.tuples(*near).map(lambda box: tuple(zip(*box, strict=True))))
    single = draw(st.sets(st.integers(0, rank - 1)))
    return meets, around, tuple(sorted(single))


@given(questions(), st.sampled_from([1, 2, 64]))
def test_it_is_the_box_that_exhaustive_search_finds(question, together):
    meets, around, single = question
    with mock.patch.object(largest_box, "MOST_TOGETHER", together):
        found = find_largest_box(meets, around=around, single=single)
    wanted = largest_by_trial(meets, around, single)
    if wanted is None:
        assert found is None
    else:
        assert (found.nodes, found.low, found.high) == wanted
        assert found.exact
        assert found.at_most == found.nodes


@pytest.mark.parametrize("budget", [0, 1, 30, 100, 300, 1000, 3000])
def test_a_spent_budget_leaves_a_box_that_meets_and_a_bound_that_holds(budget):
    near = [np.linspace(0, 1, n).reshape(np.roll((n, 1, 1, 1), k)) for k, n in enumerate(RIDGE)]
    meets = sum(abs(a - b) for a, b in itertools.pairwise(near)) < 0.5
    best = find_largest_box(meets, budget=100_000)
    found = find_largest_box(meets, budget=budget)
    assert meets[within(found.low, found.high)].all()
    assert found.nodes == nodes_in(zip(found.low, found.high, strict=True))
    assert found.nodes <= best.nodes <= found.at_most
    assert found.exact == (found.nodes == found.at_most)
    assert best.exact
    assert found.exact == (budget >= 1000)


RIDGE = (14, 15, 16, 17)


def banded_mask(shape, seed=0):
    """Like a sampled loop's stable region: bands that fold, islands, ragged edges, specks."""
    rng = np.random.default_rng(seed)
    period = np.linspace(0.05, 1, shape[0])[:, None, None]
    gain = np.linspace(0, 1, shape[1])[:, None]
    slope = np.linspace(0, 1, shape[2])
    fold = np.cos(6.4 * np.pi * period) + 0.4 * np.sin(9 * period * (1 + gain))
    level = slope * (0.6 + 0.5 * fold) - 0.75 * gain * period * (1 + 0.5 * fold)
    level += 0.12 - 0.45 * slope**2 * period * (1.6 + fold)
    meets = level + 0.005 * rng.standard_normal(shape) > 0.02
    for _ in range(int(meets.size**0.25)):
        reach = int(rng.integers(1, 6))
        middle = [int(rng.integers(n)) for n in shape]
        meets[tuple(slice(max(0, at - reach), at + reach) for at in middle)] ^= True
    return meets & (rng.random(shape) > 1e-4)


def largest_by_sums(meets):
    """Nodes in the largest box of three axes, from the sums of all boxes."""
    sums = np.zeros([n + 1 for n in meets.shape], dtype=int)
    sums[1:, 1:, 1:] = meets.cumsum(0).cumsum(1).cumsum(2)
    for axis in range(3):
        first, last = np.triu_indices(sums.shape[axis], 1)
        sums = np.take(sums, last, axis) - np.take(sums, first, axis)
    lengths = [np.subtract(*np.triu_indices(n + 1, 1)[::-1]) for n in meets.shape]
    size = lengths[0][:, None, None] * lengths[1][:, None] * lengths[2]
    return int(size[sums == size].max(initial=0))


@pytest.mark.parametrize("seed", range(12))
def test_bands_islands_and_ragged_edges_give_what_the_sums_of_all_boxes_give(seed):
    shape = [(13, 14, 12), (9, 11, 20), (24, 9, 7)][seed % 3]
    meets = banded_mask(shape, seed) if seed < 8 else random_mask(shape, seed)
    found = find_largest_box(meets)
    assert meets[within(found.low, found.high)].all()
    assert found.nodes == largest_by_sums(meets)


def random_mask(shape, seed):
    rng = np.random.default_rng(seed)
    return rng.random(shape) < [0.5, 0.9, 0.99, 0.999][seed % 4]


def test_the_order_of_the_axes_changes_nothing_but_which_of_equal_boxes_comes_first():
    meets = banded_mask((30, 31, 25), 3)
    nodes = {
        find_largest_box(meets.transpose(order)).nodes for order in itertools.permutations(range(3))
    }
    assert len(nodes) == 1


def test_three_axes_are_searched_to_the_end_whatever_the_budget():
    assert find_largest_box(banded_mask((30, 31, 25), 4), budget=0).exact


def test_a_mask_of_real_size_is_searched_to_the_end(capsys):
    meets = banded_mask((198, 201, 161))
    start = time.thread_time()
    found = find_largest_box(meets)
    spent = time.thread_time() - start
    with capsys.disabled():
        print(f"\n{meets.shape}: {spent:.2f} s, largest box {found.nodes} nodes")
    assert found.exact
    assert meets[within(found.low, found.high)].all()
    around = np.pad(meets, 1)
    for axis, beside in itertools.product(range(3), (-1, 1)):
        face = list(within(np.add(found.low, 1), np.add(found.high, 1)))
        face[axis] = found.low[axis] if beside < 0 else found.high[axis] + 2
        assert not around[tuple(face)].all()


def test_a_count_of_256_failing_nodes_is_not_taken_for_none():
    meets = np.ones((16, 17, 20, 20), dtype=bool)
    meets[:, :16, 5, 5] = False
    found = find_largest_box(meets)
    assert (found.low, found.high) == ((0, 0, 0, 6), (15, 16, 19, 19))


@pytest.mark.parametrize("shape", [(254, 256), (255, 255), (256, 256), (300, 1, 300), (70_000,)])
def test_an_area_above_two_bytes_is_counted_in_full(shape):
    assert find_largest_box(np.ones(shape, dtype=bool)).nodes == math.prod(shape)


def test_positions_may_be_numpy_numbers():
    found = find_largest_box(np.ones((2, 3, 4), dtype=bool), around=(np.array([1, 2, 3]),) * 2)
    assert {type(i) for i in (*found.low, *found.high, found.nodes, found.at_most)} == {int}
    assert type(found.exact) is bool


def test_of_many_equal_boxes_it_is_the_first():
    meets = np.indices((66, 67, 68)).sum(axis=0) % 2 == 1
    found = find_largest_box(meets)
    assert (found.low, found.high) == ((0, 0, 1), (0, 0, 1))


def test_nothing_that_meets_has_no_box():
    assert find_largest_box(np.zeros((3, 0, 2), dtype=bool)) is None
    assert find_largest_box(np.zeros((3, 4), dtype=bool)) is None


def test_one_node_without_axes_is_a_box():
    assert find_largest_box(np.array(True)).nodes == 1


@pytest.mark.parametrize(
    "around",
    [((0,), (0,)), ((0, 4), (0, 5)), ((0, -1), (0, 0)), ((0, 2), (0, 1)), ((0, 0, 0),) * 2],
)
def test_a_box_off_the_grid_is_refused(around):
    with pytest.raises(ValueError, match="expected within a grid"):
        find_largest_box(np.ones((2, 5), dtype=bool), around=around)


def test_an_axis_that_is_not_there_is_refused():
    with pytest.raises(ValueError, match="expected within 0 to 1"):
        find_largest_box(np.ones((2, 5), dtype=bool), single=[2])


def test_the_mask_is_left_as_it_was():
    meets = np.random.default_rng(1).random((5, 6, 7)) < 0.8
    meets[2, 3, 3] = True
    before = meets.copy()
    find_largest_box(meets, around=((2, 3, 3), (2, 3, 3)))
    assert (meets == before).all()
