"""What a design has in hand and which tolerances it accepts, against loops over every node."""

from __future__ import annotations

import itertools
import json
import math
import time
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from memory_atlas import axis, rows

from sweep.query.judging.tolerance import find_acceptance, find_in_hand
from sweep.query.verdicts import EXCLUDED, FAILS, MEETS, UNKNOWN

M, F, U, X = MEETS, FAILS, UNKNOWN, EXCLUDED
NEVER = Fraction(10**9)


def codes(values):
    return np.array(values, np.int8)


def tolerance(name, coordinates, nominal=0):
    return axis(name, coordinates, sets=f"plant.{name}", role="tolerance", nominal=nominal)


def nodes(*which):
    return np.array(which, np.intp)


@st.composite
def one_axis(draw, name):
    count = draw(st.integers(1, 5))
    if draw(st.booleans()) and draw(st.booleans()):
        inside = draw(st.sets(st.integers(0, count - 1), min_size=1))
        table = rows(name, [f"{name}{i}" for i in range(count)], {f"plant.{name}": range(count)})
        return table, nodes(*sorted(inside)), -math.inf
    steps = draw(st.lists(st.sampled_from([1, 2, 3]), min_size=count, max_size=count))
    first = draw(st.sampled_from([0.0, 1.0]))
    coordinates = first + np.cumsum([0, *steps[1:]])
    low, high = sorted(draw(st.tuples(*[st.integers(0, count - 1)] * 2)))
    made = tolerance(name, coordinates, draw(st.integers(0, count - 1)))
    return made, np.arange(low, high + 1), draw(st.sampled_from([0.0, -math.inf]))


@st.composite
def grids(draw):
    """Axes, the box on them, the floors, and a verdict on every node."""
    count = draw(st.integers(1, 4))
    axes, box, floors = zip(*[draw(one_axis(f"a{i}")) for i in range(count)], strict=True)
    rng = np.random.default_rng(draw(st.integers(0, 1 << 32)))
    shares = draw(
        st.sampled_from([(1, 0, 0, 0), (0.8, 0.1, 0.1, 0), (0.9, 0.06, 0, 0.04), (0.2, 0.8, 0, 0)])
    )
    shape = [len(one) for one in axes]
    return axes, box, floors, rng.choice(codes([M, F, U, X]), shape, p=shares)


class Grown:
    """A box at one factor, by its definition, in exact arithmetic."""

    def __init__(self, grid, factor):
        self.axes, self.box, self.floors, self.verdict = grid
        self.left, spans, self.within = [], [], []
        for one, inside, floor in zip(self.axes, self.box, self.floors, strict=True):
            if one.is_row_axis:
                spans.append(list(inside))
                self.within.append(set(map(int, inside)))
                continue
            x = [Fraction(float(value)) for value in one.coordinates]
            nominal = x[min(max(one.nominal, inside[0]), inside[-1])]
            low = nominal - factor * (nominal - x[inside[0]])
            high = nominal + factor * (x[inside[-1]] - nominal)
            if x[0] <= floor:
                low = max(low, x[0])
            if low < x[0] or high > x[-1]:
                self.left.append(one.name)
            self.within.append({i for i in range(len(x)) if low <= x[i] <= high})
            first = max((i for i in range(len(x)) if x[i] <= low), default=0)
            last = min((i for i in range(len(x)) if x[i] >= high), default=len(x) - 1)
            spans.append(list(range(first, last + 1)))
        self.taken = [self.verdict[node] for node in itertools.product(*spans)]

    def verdict_of_it(self):
        if F in self.taken or X in self.taken:
            return "fails"
        if U in self.taken:
            return "unknown"
        return "axis_end" if self.left else "meets"

    def holds(self, node):
        return all(i in within for i, within in zip(node, self.within, strict=True))


def factors_of(grid):
    """Every factor at which a bound reaches a node, with 0, and one past each of them."""
    found = {Fraction(0), NEVER}
    for one, inside, _ in zip(*grid[:3], strict=True):
        if not one.is_row_axis:
            x = [Fraction(float(value)) for value in one.coordinates]
            nominal = x[min(max(one.nominal, inside[0]), inside[-1])]
            for width in (x[inside[0]] - nominal, x[inside[-1]] - nominal):
                found |= {(value - nominal) / width for value in x if width}
    ordered = sorted(factor for factor in found if factor >= 0)
    return ordered, [(a + b) / 2 for a, b in itertools.pairwise(ordered)]


@given(grids())
@example(([tolerance("a0", [0.0, 1.0], 1)], [nodes(0, 1)], [0.0], codes([M, M])))
def test_in_hand_is_what_growing_the_box_step_by_step_finds(grid):
    axes, box, floors, verdict = grid
    found = find_in_hand(axes, box, verdict, floors)
    growing = [a.name for a, b in zip(axes, box, strict=True) if len(b) > 1 and not a.is_row_axis]
    if not growing:
        assert found is None
        return
    assert list(found.growing) == growing
    reached, past = factors_of(grid)

    # the first factor past which the verdict is not "meets"; between two factors nothing changes
    ends = [
        (factor, Grown(grid, between).verdict_of_it())
        for factor, between in zip(reached[:-1], past, strict=True)
    ]
    holds_to, end = next((one for one in ends if one[1] != "meets"), (math.inf, "floor"))
    assert (found.holds_to, found.end) == (pytest.approx(float(holds_to), rel=1e-15), end)
    assert found.percent == pytest.approx(100 * (float(holds_to) - 1))
    for factor in reached:
        if 0 < factor <= holds_to and factor < NEVER:
            assert Grown(grid, factor).verdict_of_it() == "meets"

    failing = [n for n in np.ndindex(verdict.shape) if verdict[n] in (F, X)]
    lies_at = {n: next((s for s in reached if Grown(grid, s).holds(n)), math.inf) for n in failing}
    first = min(lies_at.values(), default=math.inf)
    assert found.factor == pytest.approx(float(first), rel=1e-15)
    if first == math.inf:
        assert found.at is found.axis is None
    else:
        node = next(n for n in failing if lies_at[n] == first)
        assert found.at == named(axes, node)
        before = Grown(grid, first - Fraction(1, 10**6))
        outside = [
            one.name
            for one, i, span in zip(axes, node, before.within, strict=True)
            if i not in span
        ]
        assert found.axis == (outside[0] if first else None)


@given(grids())
def test_a_box_has_something_in_hand_exactly_when_it_meets(grid):
    axes, box, floors, verdict = grid
    found = find_in_hand(axes, box, verdict, floors)
    if found:
        assert (found.holds_to >= 1) == (verdict[np.ix_(*box)] == M).all()
        assert found.factor >= found.holds_to


@given(grids())
def test_what_stops_the_box_is_a_node_that_is_taken_in_just_there(grid):
    axes, box, floors, verdict = grid
    found = find_in_hand(axes, box, verdict, floors)
    if found is None or found.stopped_at is None:
        return
    node = next(n for n in np.ndindex(verdict.shape) if named(axes, n) == found.stopped_at)
    assert verdict[node] in {"fails": (F, X), "unknown": (U,)}[found.end]
    if found.stopped_by is None:
        plain = [k for k, one in enumerate(axes) if not one.is_row_axis]
        assert all(node[k] == min(max(axes[k].nominal, box[k][0]), box[k][-1]) for k in plain)
    else:
        assert found.stopped_by in found.growing


def named(axes, node):
    return {
        one.name: one.labels[i] if one.is_row_axis else one.coordinates[i]
        for one, i in zip(axes, node, strict=True)
    }


def test_an_unknown_node_stops_the_box_before_one_that_fails():
    gain = tolerance("gain", [0, 1, 2, 3, 4, 5], 0)
    found = find_in_hand([gain], [nodes(0, 1, 2)], codes([M, M, M, M, U, F]), [-math.inf])
    assert (found.holds_to, found.end, found.stopped_at) == (1.5, "unknown", {"gain": 4.0})
    assert (found.factor, found.at, found.axis) == (2.5, {"gain": 5.0}, "gain")


def test_a_case_that_fails_has_less_than_nothing_in_hand():
    gain = tolerance("gain", [0, 1, 2, 3, 4], 0)
    found = find_in_hand([gain], [np.arange(5)], codes([M, M, M, F, M]), [-math.inf])
    assert (found.holds_to, found.percent, found.factor) == (0.5, -50.0, 0.75)


def test_a_nominal_that_fails_holds_to_nothing():
    gain = tolerance("gain", [0, 1, 2], 1)
    found = find_in_hand([gain], [np.arange(3)], codes([M, F, M]), [-math.inf])
    assert (found.holds_to, found.factor, found.at) == (0.0, 0.0, {"gain": 1.0})
    assert found.axis is None
    assert found.stopped_by is None


def test_a_delay_stays_at_zero_while_other_sides_grow_on():
    delay = tolerance("delay", [0.0, 1.0, 2.0, 3.0, 4.0], 1)
    found = find_in_hand([delay], [nodes(0, 1, 2)], codes([M] * 5), [0.0])
    assert (found.holds_to, found.end, found.stopped_by) == (3.0, "axis_end", "delay")
    unbounded = find_in_hand([delay], [nodes(0, 1, 2)], codes([M] * 5), [-math.inf])
    assert unbounded.holds_to == 1.0


def test_the_nominal_moves_to_the_nearest_end_of_a_box_beside_it():
    gain = tolerance("gain", [0, 1, 2, 3, 4, 5], 0)
    found = find_in_hand([gain], [nodes(2, 3)], codes([F, F, M, M, M, M]), [-math.inf])
    assert (found.holds_to, found.end, found.factor) == (3.0, "axis_end", math.inf)


def test_what_takes_a_node_in_and_what_reaches_it_may_be_two_axes():
    near, far = tolerance("near", [0, 2, 3, 3.25]), tolerance("far", [0, 2, 4])
    verdict = np.full((4, 3), M, np.int8)
    verdict[3, 2] = F
    found = find_in_hand([near, far], [nodes(0, 1), nodes(0, 1)], verdict, [0.0, 0.0])
    assert (found.holds_to, found.stopped_by) == (1.5, "near")
    assert (found.factor, found.axis) == (2.0, "far")
    assert found.at == found.stopped_at == {"near": 3.25, "far": 4.0}


def test_of_axes_that_reach_a_node_together_the_first_is_named():
    first, second = tolerance("first", [0, 1, 2]), tolerance("second", [0, 3, 6])
    verdict = np.full((3, 3), M, np.int8)
    verdict[2, 2] = F
    found = find_in_hand([first, second], [nodes(0, 1), nodes(0, 1)], verdict, [0.0, 0.0])
    assert found.axis == found.stopped_by == "first"


@pytest.mark.parametrize("code", [F, U])
def test_of_nodes_taken_in_together_the_nearest_to_the_nominal_is_named(code):
    first, second = tolerance("first", [0, 1, 2]), tolerance("second", [0, 1, 5])
    verdict = np.full((3, 3), M, np.int8)
    verdict[0, 2] = verdict[2, 0] = code
    found = find_in_hand([first, second], [nodes(0, 1), nodes(0, 1)], verdict, [0.0, 0.0])
    assert (found.holds_to, found.stopped_at) == (1.0, {"first": 2.0, "second": 0.0})
    assert found.stopped_by == "first"


def test_rows_outside_the_box_never_count():
    gain = tolerance("gain", [0, 1, 2, 3, 4], 0)
    unit = rows("unit", "abc", {"plant.damping": [1, 2, 3]})
    verdict = codes([[M] * 5, [M, M, M, M, F], [F] * 5])
    found = find_in_hand([unit, gain], [nodes(0, 1), nodes(0, 1, 2)], verdict, [-math.inf] * 2)
    assert (found.factor, found.at) == (2.0, {"unit": "b", "gain": 4.0})


def test_what_cannot_be_built_counts_as_failing():
    gain = tolerance("gain", [0, 1, 2, 3], 0)
    found = find_in_hand([gain], [nodes(0, 1)], codes([M, M, M, X]), [-math.inf])
    assert (found.holds_to, found.end, found.factor) == (2.0, "fails", 3.0)
    assert find_acceptance([gain], [nodes(0, 1)], codes([M, M, M, X])).fails == 1


def test_nothing_is_in_hand_where_nothing_can_grow():
    gain = tolerance("gain", [0, 1], 0)
    unit = rows("unit", "ab", {"plant.damping": [1, 2]})
    assert find_in_hand([gain], [nodes(1)], codes([M, M]), [-math.inf]) is None
    assert find_in_hand([unit], [nodes(0, 1)], codes([M, M]), [-math.inf]) is None
    assert find_in_hand([], [], np.array(M, np.int8), []) is None


def test_the_documents_hold_no_number_that_json_lacks():
    gain = tolerance("gain", [0.0, 1.0], 1)
    found = find_in_hand([gain], [nodes(0, 1)], codes([M, M]), [0.0])
    document = found.to_json()
    assert json.dumps(document, allow_nan=False)
    assert (document["factor"], document["holds_to"], document["percent"]) == ("inf",) * 3
    accepted = find_acceptance([gain], [nodes(0, 1)], codes([M, M])).to_json()
    assert json.loads(json.dumps(accepted, allow_nan=False))["largest_box"] == {"gain": [0.0, 1.0]}


@given(grids())
def test_acceptance_is_what_counting_node_by_node_finds(grid):
    axes, box, _, verdict = grid
    plain = [k for k, one in enumerate(axes) if not one.is_row_axis]
    found = find_acceptance(axes, box, verdict)
    if not plain:
        assert found is None
        return
    spans = [b if a.is_row_axis else range(len(a)) for a, b in zip(axes, box, strict=True)]
    seen = {}
    for node in itertools.product(*spans):
        seen.setdefault(tuple(node[k] for k in plain), []).append(verdict[node])
    worst = {
        node: F if F in all_rows or X in all_rows else U if U in all_rows else M
        for node, all_rows in seen.items()
    }
    counts = [list(worst.values()).count(code) for code in (M, F, U)]
    assert [found.meets, found.fails, found.unknown] == counts
    nominal = tuple(axes[k].nominal for k in plain)
    names = [axes[k].name for k in plain]
    biggest = largest_by_trial(worst, [len(axes[k]) for k in plain])
    assert found.nodes == found.at_most == biggest
    assert found.exact
    assert found.around_nominal_exact
    around = largest_by_trial(worst, [len(axes[k]) for k in plain], nominal)
    assert found.around_nominal_nodes == around
    assert found.holds_nominal <= (around == biggest)
    for bounds, count in (
        (found.largest_box, found.nodes),
        (found.around_nominal, found.around_nominal_nodes),
    ):
        if not count:
            assert bounds is None
            continue
        assert list(bounds) == names
        inside = [
            n
            for n in worst
            if all(
                low <= axes[k].coordinates[i] <= high
                for k, i, (low, high) in zip(plain, n, bounds.values(), strict=True)
            )
        ]
        assert len(inside) == count
        assert all(worst[n] == M for n in inside)
        if bounds is found.largest_box:
            assert found.holds_nominal == (nominal in inside)
        else:
            assert nominal in inside


def largest_by_trial(worst, shape, around=None):
    best = 0
    ends = [itertools.combinations_with_replacement(range(n), 2) for n in shape]
    for sides in itertools.product(*ends):
        if around and not all(a <= i <= b for i, (a, b) in zip(around, sides, strict=True)):
            continue
        inside = list(itertools.product(*(range(a, b + 1) for a, b in sides)))
        if len(inside) > best and all(worst[n] == M for n in inside):
            best = len(inside)
    return best


def test_acceptance_names_the_rows_it_holds_for():
    gain = tolerance("gain", [0, 1, 2], 0)
    unit = rows("unit", "abc", {"plant.damping": [1, 2, 3]})
    verdict = codes([[F, M, M], [F, F, F], [M, M, M]])
    found = find_acceptance([unit, gain], [nodes(0, 2), nodes(0)], verdict)
    assert found.rows == {"unit": ("a", "c")}
    assert (found.largest_box, found.holds_nominal) == ({"gain": (1.0, 2.0)}, False)
    assert (found.around_nominal, found.around_nominal_nodes) == (None, 0)


@pytest.mark.parametrize("shape", [(1000, 1000), (100, 100, 100), (32, 32, 32, 32)])
def test_a_million_nodes_are_a_matter_of_seconds(shape):
    axes = [tolerance(f"a{i}", np.linspace(0.5, 1.5, n), n // 2) for i, n in enumerate(shape)]
    spans = [np.arange(n // 4, 3 * n // 4) for n in shape]
    spread = np.ix_(*(one.coordinates - 1.0 for one in axes))
    verdict = np.where(sum(x * x for x in spread) < 0.22, M, F).astype(np.int8)
    start = time.perf_counter()
    found = find_in_hand(axes, spans, verdict, [0.0] * len(axes))
    middle = time.perf_counter()
    accepted = find_acceptance(axes, spans, verdict)
    print(shape, f"in hand {middle - start:.2f} s, box {time.perf_counter() - middle:.2f} s")
    # the corner of the grown box is the first to leave the ball of meeting nodes
    assert found.end == "fails"
    first = axes[0].coordinates
    width = first[len(first) // 2] - first[spans[0][0]]
    step = 1.0 / (min(shape) - 1)
    assert abs(found.holds_to * width - math.sqrt(0.22 / len(shape))) < 2 * step
    assert accepted.holds_nominal
