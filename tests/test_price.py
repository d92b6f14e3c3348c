"""The price of tolerances, against plain loops over every node of every narrowed box."""

from __future__ import annotations

import numpy as np
import pytest
from choose_by_hand import ByHand, questions
from hypothesis import given, settings
from memory_atlas import atlas, axis, rows

from sweep.query.choosing.choose import choose_designs
from sweep.query.memo import Memo
from sweep.query.question import make_demand
from sweep.views.price_table import price_sentence


def nominal_in(one, nodes):
    return min(nodes, key=lambda node: (abs(node - one.nominal), node))


def halved(one, nodes):
    """Nodes of half the range about the nominal, the next outward where it ends between two."""
    x, nominal = one.coordinates, nominal_in(one, nodes)
    low = x[nominal] - (x[nominal] - x[nodes[0]]) / 2
    high = x[nominal] + (x[nodes[-1]] - x[nominal]) / 2
    first = max(node for node in nodes if x[node] <= low)
    last = min(node for node in nodes if x[node] >= high)
    return list(range(first, last + 1))


def ends_of(one, nodes):
    if one.labels is not None:
        return tuple(one.labels[node] for node in nodes)
    return float(one.coordinates[nodes[0]]), float(one.coordinates[nodes[-1]])


def check(outcome, asked, name, nodes):
    by_hand = ByHand(asked, box=asked.box | {name: nodes})
    found = by_hand.outcome()
    assert (outcome.meets, outcome.best, outcome.slowest_s) == found
    assert outcome.share == found[0] / len(by_hand.designs)
    assert outcome.over == {name: ends_of(asked.atlas.grid.axis(name), nodes)}
    return found


@settings(max_examples=100)
@given(questions())
def test_every_price_is_what_plain_loops_over_the_narrowed_box_find(asked):
    answer = choose_designs(
        asked.atlas.stored,
        asked.demand(),
        best=asked.best,
        at=asked.fixed(),
        within=asked.limited(),
        price=True,
    )
    several = [name for name, nodes in asked.box.items() if len(nodes) > 1]
    assert sorted(price.axis for price in answer.price) == sorted(several)
    whole = ByHand(asked).outcome()
    for price in answer.price:
        one, nodes = asked.atlas.grid.axis(price.axis), asked.box[price.axis]
        assert price.nodes == len(nodes)
        outcomes = [check(price.removed, asked, price.axis, [nominal_in(one, nodes)])]
        if one.labels is not None:
            assert price.halved is None
            assert not price.halved_is_whole
        else:
            outcomes.append(check(price.halved, asked, price.axis, halved(one, nodes)))
            assert price.halved_is_whole == (halved(one, nodes) == nodes)
        # a narrower range of the period is no gain in the slowest one
        told = 2 if price.axis == "sample_period" else 3
        assert price.brings_nothing == all(found[:told] == whole[:told] for found in outcomes)
    gains = [(p.removed.meets, p.halved.meets if p.halved else 0) for p in answer.price]
    assert gains == sorted(gains, reverse=True)


def two_tolerances(levels):
    axes = [
        axis("kp", [0, 1], sets="controller.kp"),
        axis("damping", [0, 1, 2, 3, 4], role="tolerance", nominal=2),
        axis("bus", [0, 1], sets="delay.bus", role="tolerance", nominal=0),
    ]
    return atlas(axes, levels)


STABLE = make_demand((), "", None, None, None)


def test_the_dearest_tolerance_comes_first_and_the_sentence_says_so():
    levels = np.full((2, 5, 2), -0.1)
    levels[1, 0] = 0.1
    answer = choose_designs(two_tolerances(levels).stored, STABLE, price=True)
    assert [price.axis for price in answer.price] == ["damping", "bus"]
    assert [price.brings_nothing for price in answer.price] == [False, True]
    damping = answer.price[0]
    assert damping.halved.over == {"damping": (1.0, 3.0)}
    assert (answer.base.meets, damping.halved.meets, damping.removed.meets) == (1, 2, 2)
    assert price_sentence(answer) == "tighten damping first; bus brings nothing"
    assert answer.price[1].halved_is_whole


def test_a_box_without_ranges_has_no_prices():
    demand = make_demand((), "", {"damping": 0.0, "bus": 0.0}, None, None)
    answer = choose_designs(two_tolerances(np.full((2, 5, 2), -0.1)).stored, demand, price=True)
    assert answer.price == ()
    assert answer.to_json()["price"] == []
    assert choose_designs(two_tolerances(np.ones((2, 5, 2))).stored, STABLE).price is None


def test_every_block_is_read_once_whatever_is_priced():
    plain, priced = (two_tolerances(np.full((2, 5, 2), -0.1)) for _ in range(2))
    demand = make_demand((), "", None, {"max_decay_time": 1e-9}, None)
    choose_designs(plain.stored, demand)
    choose_designs(priced.stored, demand, price=True)
    assert priced.stored.nodes_read == plain.stored.nodes_read == [20]


def test_a_narrower_box_excludes_fewer_designs():
    """The processor's time is a tolerance: at its nominal the design can be built."""
    from sweep.vocabulary import LoopStructure

    compute = axis("compute", [0, 1e-3, 2e-3], sets="delay.compute", role="tolerance", unit="s")
    found = atlas(
        [axis("sample_period", [1.5e-3], unit="s"), compute],
        [[-0.1] * 3],
        structure=LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),)),
    )
    answer = choose_designs(found.stored, STABLE, price=True)
    assert (answer.excluded, answer.base.meets) == (1, 0)
    assert answer.rows[0].design is None
    assert answer.rows[0].meets is False
    assert answer.price[0].removed.meets == answer.price[0].halved.meets == 1


def test_the_slowest_period_of_a_narrowed_box_is_the_largest_in_it():
    clock = axis("clock", [0.01, 0.02, 0.03], sets="sample_period", role="tolerance", unit="s")
    found = atlas([clock, axis("kp", [0, 1], sets="controller.kp")], np.full((3, 2), -0.1))
    answer = choose_designs(found.stored, STABLE, best="log_radius", price=True)
    (price,) = answer.price
    assert answer.base.slowest_s == 0.03
    assert (price.halved.slowest_s, price.removed.slowest_s) == (0.02, 0.01)
    assert price.brings_nothing


def test_rows_are_removed_to_the_nominal_row():
    table = rows("unit", ["A", "B", "C"], {"plant.gain": [1, 2, 3]})
    found = atlas([axis("kp", [0, 1], sets="controller.kp"), table], [[-0.1, -0.1, 0.1]] * 2)
    (price,) = choose_designs(found.stored, STABLE, price=True).price
    assert price.removed.over == {"unit": ("A",)}
    assert price.halved is None
    assert (price.removed.meets, price.brings_nothing) == (2, False)


@pytest.mark.usefixtures("memo_is_on")
def test_prices_from_the_memo_are_the_prices(tmp_path, monkeypatch):
    monkeypatch.setattr("sweep.query.choosing.price.WORTH_KEEPING", 1)
    monkeypatch.setattr("sweep.query.worst.WORTH_KEEPING", 1)
    levels = np.full((2, 5, 2), -0.1)
    levels[1, 0] = 0.1
    found = two_tolerances(levels)

    class Objects:
        def signature(self, measure):
            return measure

    found.stored.objects = Objects()
    memo = Memo(tmp_path)
    first = choose_designs(found.stored, STABLE, price=True, memo=memo).to_json()
    again = choose_designs(found.stored, STABLE, price=True, memo=memo).to_json()
    assert found.stored.nodes_read.count(20) == 2
    third = choose_designs(found.stored, STABLE, price=True, memo=memo).to_json()
    assert first == again == third
    assert found.stored.nodes_read.count(20) == 2
