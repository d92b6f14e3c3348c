"""Yield over the rows of a table: exact intervals, the worst row, weights, unknown rows."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from memory_atlas import axis, rows
from scipy import special, stats

from sweep.errors import QuestionError
from sweep.query.judging.yields import WorstRow, at_least, clopper_pearson, find_yields
from sweep.query.verdicts import EXCLUDED, FAILS, MEETS, UNKNOWN

M, F, U, X = MEETS, FAILS, UNKNOWN, EXCLUDED
PAIRS = [
    *((meets, count) for count in range(1, 26) for meets in range(count + 1)),
    *((meets, 1000) for meets in (0, 1, 3, 500, 997, 999, 1000)),
    *((meets, 200_000) for meets in (0, 2, 100_000, 199_998, 200_000)),
]


def codes(values):
    return np.array(values, np.int8)


def table(name="unit", labels="abc"):
    return rows(name, labels, {f"plant.{name}": range(len(labels))})


def every(*axes):
    return [np.arange(len(one)) for one in axes]


@pytest.mark.parametrize("confidence", [0.5, 0.9, 0.95, 0.999])
def test_the_interval_is_that_of_scipys_exact_binomial_test(confidence):
    for meets, count in PAIRS[::7]:
        wanted = stats.binomtest(meets, count).proportion_ci(confidence, method="exact")
        found = clopper_pearson(meets, count, confidence)
        # its root finder stops within 2e-12 of the root
        assert found == pytest.approx((wanted.low, wanted.high), rel=1e-9, abs=5e-12)


@pytest.mark.parametrize("confidence", [0.5, 0.9, 0.95, 0.999])
def test_the_bounds_are_quantiles_of_the_beta_distribution(confidence):
    beyond = (1 - confidence) / 2
    meets, count = np.array(PAIRS).T
    found = [(*clopper_pearson(*pair, confidence), at_least(*pair, confidence)) for pair in PAIRS]
    low, high, one_sided = np.array(found).T
    some, short = meets > 0, meets < count
    side = meets[some], (count - meets + 1)[some]
    assert low[some] == pytest.approx(stats.beta.ppf(beyond, *side), rel=1e-9)
    assert one_sided[some] == pytest.approx(stats.beta.ppf(1 - confidence, *side), rel=1e-9)
    side = (meets + 1)[short], (count - meets)[short]
    assert high[short] == pytest.approx(stats.beta.ppf(1 - beyond, *side), rel=1e-9)
    assert not low[~some].any()
    assert not one_sided[~some].any()
    assert (high[~short] == 1.0).all()


def test_59_of_59_show_at_least_95_percent_and_58_of_58_do_not():
    assert at_least(59, 59) >= 0.95 > at_least(58, 58)
    assert at_least(59, 59) == pytest.approx(0.05 ** (1 / 59), rel=1e-12)


@given(st.integers(1, 300), st.data(), st.floats(0.01, 0.999))
def test_bounds_enclose_the_share_and_mirror_each_other(count, data, confidence):
    meets = data.draw(st.integers(0, count))
    low, high = clopper_pearson(meets, count, confidence)
    assert 0 <= low <= meets / count <= high <= 1
    mirrored = clopper_pearson(count - meets, count, confidence)
    assert (1 - high, 1 - low) == pytest.approx(mirrored, abs=1e-12)
    # the definition: at the bound, as many or more are as likely as what is left of confidence
    bound = at_least(meets, count, confidence)
    assert low <= bound
    if meets:
        assert special.bdtrc(meets - 1, count, bound) == pytest.approx(1 - confidence, rel=1e-6)


@pytest.mark.parametrize(
    ("meets", "count", "confidence"),
    [(1, 0, 0.95), (3, 2, 0.95), (-1, 2, 0.95), (1, 2, 0.0), (1, 2, 1.0), (1, 2, math.nan)],
)
def test_impossible_counts_and_confidences_are_refused(meets, count, confidence):
    for ask in (clopper_pearson, at_least):
        with pytest.raises(ValueError, match="expected 0 <= meets <= rows"):
            ask(meets, count, confidence)


@st.composite
def grids(draw):
    """Axes with at least one table, the box, verdicts and radii on every node, weights."""
    kinds = draw(st.permutations([True, *draw(st.lists(st.booleans(), max_size=2))]))
    axes, box = [], []
    for place, is_table in enumerate(kinds):
        count = draw(st.integers(1, 4))
        name = f"a{place}"
        made = table(name, [f"r{i}" for i in range(count)]) if is_table else None
        axes.append(made or axis(name, range(count), role="tolerance"))
        box.append(np.array(sorted(draw(st.sets(st.integers(0, count - 1), min_size=1)))))
    rng = np.random.default_rng(draw(st.integers(0, 1 << 32)))
    shape = [len(one) for one in axes]
    verdict = rng.choice(codes([M, F, U, X]), shape, p=[0.7, 0.1, 0.15, 0.05])
    radius = rng.integers(-4, 3, shape).astype(float)
    radius[(verdict == U) & (rng.random(shape) < 0.7)] = np.nan
    weights = {
        one.name: dict(zip(one.labels, rng.integers(1, 9, len(one)).tolist(), strict=True))
        for one in axes
        if one.is_row_axis and rng.random() < 0.5
    }
    return axes, box, verdict, radius, weights


@given(grids())
def test_yields_are_what_counting_row_by_row_finds(grid):
    axes, box, verdict, radius, weights = grid
    found = {one.axis: one for one in find_yields(axes, box, verdict, radius, 0.9, weights)}
    tables = [k for k, one in enumerate(axes) if one.is_row_axis]
    assert list(found) == [axes[k].name for k in tables]
    for k in tables:
        labels, mine = axes[k].labels, found[axes[k].name]
        state, largest = {}, {}
        for row in box[k]:
            inside = [
                n
                for n in np.ndindex(verdict.shape)
                if n[k] == row and all(i in b for i, b in zip(n, box, strict=True))
            ]
            seen = [verdict[n] for n in inside]
            state[row] = "fails" if F in seen or X in seen else "unknown" if U in seen else "meets"
            known = [radius[n] for n in inside if not np.isnan(radius[n])]
            largest[row] = max(known, default=-math.inf)
        states = list(state.values())
        assert (mine.rows, mine.meets) == (len(box[k]), states.count("meets"))
        assert (mine.fails, mine.unknown) == (states.count("fails"), states.count("unknown"))
        assert mine.share == mine.meets / mine.rows
        assert (mine.low, mine.high) == clopper_pearson(mine.meets, mine.rows, 0.9)
        assert mine.at_least == at_least(mine.meets, mine.rows, 0.9)
        row = next(r for r in box[k] if largest[r] == max(largest.values()))
        if largest[row] == -math.inf:
            assert mine.worst is None
        else:
            assert mine.worst == WorstRow(labels[row], largest[row], state[row])
        given_weights = weights.get(axes[k].name)
        if given_weights is None:
            assert mine.weighted_share is None
        else:
            total = sum(given_weights[labels[r]] for r in box[k])
            good = sum(given_weights[labels[r]] for r in box[k] if state[r] == "meets")
            assert mine.weighted_share == pytest.approx(good / total, rel=1e-14)


def ask(weights, box=None, labels="abc"):
    unit = table(labels=labels)
    verdict = codes([M, F, M])[: len(labels)]
    radius = np.array([-0.3, 0.1, -0.2])[: len(labels)]
    return find_yields([unit], box or every(unit), verdict, radius, weights=weights)[0]


def test_an_unknown_row_counts_as_failing_and_is_named_unknown():
    unit = table()
    radius = np.array([-0.3, np.nan, -0.2])
    (found,) = find_yields([unit], every(unit), codes([M, U, M]), radius)
    assert (found.meets, found.fails, found.unknown, found.share) == (2, 0, 1, 2 / 3)
    assert found.at_least == at_least(2, 3)
    assert found.worst == WorstRow("c", -0.2, "meets")


def test_weights_move_the_weighted_share_alone():
    bare, weighted = ask(None), ask({"unit": {"a": 6, "b": 1, "c": 1}})
    assert weighted.weighted_share == 7 / 8
    assert (bare.share, bare.low, bare.high) == (weighted.share, weighted.low, weighted.high)
    assert ask({"unit": {"a": 0, "b": 3, "c": 0}}).weighted_share == 0.0
    assert ask({"unit": dict.fromkeys("abc", 1.5e308)}).weighted_share == 2 / 3
    assert ask({"unit": dict.fromkeys("abc", 5e-324)}).weighted_share == 2 / 3


def test_weights_of_rows_outside_the_box_do_not_count():
    only = [np.array([0, 1])]
    assert ask({"unit": {"a": 1, "b": 1, "c": 98}}, only).weighted_share == 0.5
    assert ask({"unit": {"a": 1, "b": 1}}, only).weighted_share == 0.5


@pytest.mark.parametrize(
    ("weights", "message", "remedy"),
    [
        ({"unit": {"a": 1, "b": 1}}, "1 of 3 rows in the box have no weight, c first", "give c"),
        ({"unit": {"a": 0, "b": 0, "c": 0}}, "a weight of 0", "above 0"),
        ({"unit": {"a": 1, "b": -1, "c": 1}}, "the weight of b is -1", "give b"),
        ({"unit": {"a": 1, "b": 1, "c": math.nan}}, "the weight of c is nan", "give c"),
        ({"unit": {"a": math.inf, "b": 1, "c": 1}}, "the weight of a is inf", "give a"),
        ({"unit": {"a": 1, "b": 1, "c": 1, "d": 1}}, "it has no row d", "by their labels"),
        ({"load": {"a": 1}}, "those are unit", "row axis"),
    ],
)
def test_bad_weights_are_refused_with_what_to_do(weights, message, remedy):
    with pytest.raises(QuestionError, match=message) as caught:
        ask(weights)
    assert remedy in caught.value.remedy


def test_the_document_has_every_key_that_programs_rely_on():
    document = json.loads(json.dumps(ask(None).to_json(), allow_nan=False))
    assert document.pop("worst") == {"row": "b", "log_radius": 0.1, "verdict": "fails"}
    assert list(document) == [
        *("axis", "rows", "meets", "fails", "unknown", "share", "low", "high", "at_least"),
        *("confidence", "weighted_share"),
    ]
    assert document["weighted_share"] is None


def test_without_a_table_there_is_no_yield():
    gain = axis("gain", [1.0, 2.0], role="tolerance")
    assert find_yields([gain], every(gain), codes([M, M]), np.array([-1.0, -1.0])) == ()
