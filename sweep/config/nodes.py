"""The nodes of a plain axis from each of the forms in which it may be given."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

from sweep.config.coordinates import (
    count_steps,
    is_whole,
    space_by_count,
    space_by_ratio,
    space_by_step,
)
from sweep.config.findings import Findings, describe
from sweep.config.reading import Reader
from sweep.errors import QuantityError
from sweep.quantities import CONTEXT, describe_unit, format_quantity, split_quantity

MAX_NODES = 1_000_000
"""Most nodes of one axis."""


@dataclass(frozen=True)
class GivenForm:
    """What a config says about the nodes of one plain axis."""

    form: str
    """``values``, ``range`` or ``centre``."""
    place: str
    """Where the axis stands in the config."""
    keys: Mapping[str, Any]
    """Its keys whose values are of the right type."""
    present: frozenset[str]
    """All keys that were given; the type of those missing from ``keys`` is noted already."""
    reader: Reader
    """Reads its values and notes what is wrong."""

    def shown(self, name: str) -> str:
        """What stands under a key, for messages."""
        return describe(self.keys[name])

    def add(self, name: str, expected: str, remedy: str, found: str = "") -> None:
        """Note a mistake in one of the keys."""
        self.reader.findings.add(
            f"{self.place}.{name}", found or self.shown(name), expected, remedy
        )

    def needs(self, name: str) -> bool:
        """Whether a key that the form needs can be read; notes it when it was left out."""
        if name in self.keys:
            return True
        if name not in self.present:
            expected = "a value, which this form of an axis needs"
            self.add(name, expected, f"add `{name}`", found="nothing")
        return False

    def read(self, name: str) -> Decimal | None:
        """Read a value of the parameter."""
        return (
            self.reader.read(self.keys[name], f"{self.place}.{name}") if self.needs(name) else None
        )


def show(value: Decimal, reader: Reader) -> str:
    """Write a value in the unit in which the axis is given, digit for digit."""
    return format_quantity(value, reader.target.spec.unit, digits=None)


def refuse_count(place: str, found: str, findings: Findings) -> None:
    """Note that an axis has too many nodes."""
    findings.add(place, found, f"at most {MAX_NODES:,} nodes an axis", "take fewer nodes")


def build_nodes(form: GivenForm) -> list[Decimal] | None:
    """Compute the nodes in the written unit, increasing, before any are pinned.

    Returns
    -------
    The nodes, or ``None`` when mistakes were noted.
    """
    if form.form == "values":
        return _from_values(form)
    return _from_range(form) if form.form == "range" else _from_centre(form)


def _from_values(form: GivenForm) -> list[Decimal] | None:
    values = form.keys.get("values")
    if values is None:
        return None
    if not values:
        form.add("values", "at least one value", "give the nodes")
        return None
    if len(values) > MAX_NODES:
        refuse_count(f"{form.place}.values", f"{len(values)} values", form.reader.findings)
        return None
    read = form.reader.read
    numbers = [read(value, f"{form.place}.values[{i}]") for i, value in enumerate(values)]
    sound = [number for number in numbers if number is not None]
    if len(sound) < len(numbers):
        return None
    for position in range(1, len(sound)):
        if sound[position] <= sound[position - 1]:
            expected = f"more than the value before it, {describe(values[position - 1])}"
            remedy = "list distinct values from small to large"
            form.add(f"values[{position}]", expected, remedy, found=describe(values[position]))
            return None
    return sound


def _from_range(form: GivenForm) -> list[Decimal] | None:
    start, stop = form.read("start"), form.read("stop")
    chosen = _choose_spacing(form)
    if start is None or stop is None:
        return None
    if stop <= start:
        remedy = "exchange the two, or give a single node by `values`"
        form.add("stop", f"more than `start`, {form.shown('start')}", remedy)
        return None
    if chosen == "step":
        return _by_step(form, start, stop)
    count = _read_count(form) if chosen else None
    if count is None:
        return None
    if form.keys.get("spacing") != "log":
        return space_by_count(start, stop, count)
    if start <= 0:
        remedy = 'raise `start`, or write spacing = "linear"'
        form.add("start", "above 0, because the spacing is logarithmic", remedy)
        return None
    return space_by_ratio(start, stop, count)


def _choose_spacing(form: GivenForm) -> str | None:
    """Which of `count` and `step` decides the spacing; ``None`` when that is a mistake."""
    given = [name for name in ("count", "step") if name in form.present]
    if len(given) != 1:
        found = "both `count` and `step`" if given else "neither `count` nor `step`"
        findings = form.reader.findings
        findings.add(form.place, found, "exactly one of them", "keep or add one of the two")
        return None
    if given == ["step"] and form.keys.get("spacing") == "log":
        form.add("step", "`count`, because the spacing is logarithmic", "give `count` instead")
        return None
    return given[0]


def _by_step(form: GivenForm, start: Decimal, stop: Decimal) -> list[Decimal] | None:
    step = _read_positive_distance(form, "step")
    if step is None:
        return None
    steps = count_steps(start, stop, step)
    if steps > MAX_NODES - 1:
        found = f"{form.shown('step')}, which makes about {steps:.3g} nodes"
        refuse_count(f"{form.place}.step", found, form.reader.findings)
        return None
    whole = int(steps.to_integral_value())
    if whole and is_whole(steps):
        return space_by_step(start, stop, step, whole)
    below = int(steps)
    near = [CONTEXT.fma(step, Decimal(n), start) for n in (below, below + 1) if n]
    stops = " or ".join(show(value, form.reader) for value in near)
    expected = f"a whole number of steps of {form.shown('step')} from `start`"
    form.add("stop", expected, f"stop at {stops}")
    return None


def _from_centre(form: GivenForm) -> list[Decimal] | None:
    centre, count = form.read("centre"), _read_count(form)
    within = _read_within(form, centre)
    if centre is None or count is None or within is None:
        return None
    start, stop = CONTEXT.subtract(centre, within), CONTEXT.add(centre, within)
    if not form.reader.is_legal(start):
        found = f"{form.shown('within')}, which reaches down to {show(start, form.reader)}"
        expected = f"an axis of legal values: {form.reader.describe()}"
        form.add("within", expected, "narrow it, or give `start` and `stop`", found=found)
        return None
    return space_by_count(start, stop, count)


def _read_within(form: GivenForm, centre: Decimal | None) -> Decimal | None:
    """Half the axis' length; a percentage is always one of the centre."""
    percentage = read_percentage(form.keys.get("within"))
    if percentage is None:
        return _read_positive_distance(form, "within")
    if centre is None:
        return None
    share = CONTEXT.divide(percentage, Decimal(100))
    within = CONTEXT.multiply(CONTEXT.abs(centre), share)
    return within if _is_positive(form, "within", within) else None


def read_percentage(value: object) -> Decimal | None:
    """Read a text such as ``"10 %"``; ``None`` for anything else."""
    if not isinstance(value, str):
        return None
    try:
        quantity = split_quantity(value)
    except QuantityError:
        return None
    return quantity.number if quantity.unit == "%" else None


def _read_positive_distance(form: GivenForm, name: str) -> Decimal | None:
    if not form.needs(name):
        return None
    distance = form.reader.read_distance(form.keys[name], f"{form.place}.{name}")
    return distance if distance is not None and _is_positive(form, name, distance) else None


def _is_positive(form: GivenForm, name: str, distance: Decimal) -> bool:
    if distance > 0:
        return True
    expected = f"{describe_unit(form.reader.target.spec.unit, decibels=False)}, above 0"
    form.add(name, expected, "give a positive distance; an axis runs from small to large")
    return False


def _read_count(form: GivenForm) -> int | None:
    if not form.needs("count"):
        return None
    count: int = form.keys["count"]
    if 2 <= count <= MAX_NODES:
        return count
    remedy = "take fewer nodes" if count > 2 else "give a single node by `values`"
    form.add("count", f"a whole number of nodes from 2 to {MAX_NODES:,}", remedy)
    return None
