"""The sections that say what will be asked: designs, cases and measures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from sweep.config.axes import BuiltAxis
from sweep.config.drafts import AxisDraft
from sweep.config.findings import Findings, below, describe, key_path, listed, suggest
from sweep.config.model import Case, Design, Range, Requirement
from sweep.config.reading import check_name
from sweep.config.requirement import read_requirement
from sweep.config.shapes import CaseShape, MeasuresShape, check_shape
from sweep.errors import QuantityError
from sweep.grid import Axis
from sweep.quantities import format_quantity
from sweep.vocabulary import ALWAYS_COMPUTED, DERIVED, MEASURES


@dataclass(frozen=True)
class Question:
    """What designs and cases are checked against."""

    drafts: Mapping[str, AxisDraft]
    """Every axis by stored name, also those with mistakes."""
    built: Mapping[str, BuiltAxis]
    """The sound ones."""
    findings: Findings
    """Where mistakes are noted."""
    notes: list[str]
    """Where values between nodes are noted."""

    @property
    def is_complete(self) -> bool:
        """Whether every axis is known, so that an unknown name is a mistake of its own."""
        return all(draft.targets for draft in self.drafts.values())

    def remedy(self, spelled: str, wanted: list[str]) -> str:
        """Say what to write instead of a name that is no axis."""
        for name, draft in self.drafts.items():
            if draft.rows and spelled in {t.path.rpartition(".")[2] for t in draft.targets}:
                return f"the rows of {name} set it: name labels of {name} instead"
        return suggest(spelled, wanted) or "remove it"

    def names(self, role: str) -> list[str]:
        """Names of the axes with a role."""
        return [name for name, draft in self.drafts.items() if draft.role == role]


def read_designs(sections: Mapping[str, Any], question: Question) -> list[Design]:
    """Read the designs: each names every design axis and nothing else."""
    designs = []
    for name, data in sections.items():
        place = key_path("designs", name)
        named = check_name(name, place, "design", question.findings)
        if not isinstance(data, dict):
            expected = "a section of axis = value, one for every design axis"
            question.findings.add(place, describe(data), expected, f"write [{place}]")
            continue
        given = _by_stored_name(data, place, question)
        _check_axes_named(given, place, question)
        values = {axis: _read_value(axis, *given[axis], place, question) for axis in given}
        sound = {axis: value for axis, value in values.items() if value is not None}
        if named and len(sound) == len(values):
            designs.append(Design(name, sound))
    return designs


def _by_stored_name(
    data: Mapping[str, Any], place: str, question: Question
) -> dict[str, tuple[str, Any]]:
    """By axis name: how the axis is spelled and what is given; sample_rate is sample_period."""
    given: dict[str, tuple[str, Any]] = {}
    for spelled, value in data.items():
        axis = "sample_period" if spelled == "sample_rate" else spelled
        if axis in given:
            expected = "one of sample_period and sample_rate"
            question.findings.add(f"{place}.{spelled}", describe(value), expected, "keep one")
        given[axis] = (spelled, value)
    return given


def _check_axes_named(given: Mapping[str, tuple[str, Any]], place: str, question: Question) -> None:
    wanted = question.names("design")
    for axis in wanted:
        if axis not in given:
            expected = f"a value for every design axis: {listed(wanted)}"
            question.findings.add(f"{place}.{axis}", "nothing", expected, f"add `{axis}`")
    for axis, (spelled, value) in given.items():
        draft = question.drafts.get(axis)
        is_fine = draft.role != "tolerance" if draft else not question.is_complete
        if is_fine:
            continue
        expected = f"design axes only: {listed(wanted) if wanted else 'here there are none'}"
        remedy = question.remedy(spelled, wanted)
        if draft is not None:
            remedy = f"nature chooses {axis}: put it into a case, or give the axis a design role"
        question.findings.add(below(place, spelled), describe(value), expected, remedy)


def _read_value(
    name: str, spelled: str, value: object, place: str, question: Question
) -> float | str | None:
    built = question.built.get(name)
    where = below(place, spelled)
    if built is None:
        return None
    if built.reader is None:
        return _read_label(built, value, where, question.findings)
    return _read_coordinate(built, spelled, value, where, question)


def _read_label(built: BuiltAxis, value: object, where: str, findings: Findings) -> str | None:
    labels = built.axis.labels or ()
    if isinstance(value, str) and value in labels:
        return value
    remedy = suggest(value, labels) or "write a row's label, as a text"
    findings.add(where, describe(value), f"a label of {built.axis.name}: {listed(labels)}", remedy)
    return None


def _read_coordinate(
    built: BuiltAxis, spelled: str, value: object, where: str, question: Question
) -> float | None:
    """A value on a plain axis: the node itself when it is one, and a note when it lies between."""
    reader = built.reader_of(spelled)
    number = reader.read(value, where) if reader else None
    if reader is None or number is None:
        return None
    axis, coordinates = built.axis, built.axis.coordinates
    stored = reader.store(number)
    meant = float(axis.snapped(np.array(stored)))
    if meant in coordinates:
        return meant
    low, high = coordinates[0], coordinates[-1]
    if not low <= stored <= high:
        expected = f"a value on the axis {axis.name}, {_show(low, axis)} to {_show(high, axis)}"
        question.findings.add(where, describe(value), expected, "lengthen the axis, or move it")
        return None
    right = int(np.searchsorted(coordinates, stored))
    between = f"{_show(coordinates[right - 1], axis)} and {_show(coordinates[right], axis)}"
    question.notes.append(
        f"{where} = {describe(value)} lies between the nodes {between}; "
        f"{built.name_pin(number, reader, value)} makes it a node"
    )
    return stored


def _show(value: float, axis: Axis) -> str:
    return format_quantity(value, axis.unit, axis.display_unit)


def read_cases(sections: Mapping[str, Any], question: Question) -> list[Case]:
    """Read the cases: tolerance boxes with their requirements."""
    cases = []
    for name, data in sections.items():
        place = key_path("cases", name)
        named = check_name(name, place, "case", question.findings)
        before = len(question.findings)
        keys = check_shape(CaseShape, data, ("cases", name), question.findings)
        over = _read_over(keys.get("over", {}), f"{place}.over", question)
        requirements = _read_requirements(keys.get("require", {}), place, question.findings)
        if named and len(question.findings) == before:
            cases.append(Case(name, over, requirements))
    return cases


def _read_over(data: Mapping[str, Any], place: str, question: Question) -> dict[str, Range]:
    wanted = question.names("tolerance")
    over: dict[str, Range] = {}
    for axis, (spelled, value) in _by_stored_name(data, place, question).items():
        where = below(place, spelled)
        draft = question.drafts.get(axis)
        if draft is None and not question.is_complete:
            continue
        if draft is None or draft.role == "design":
            expected = f"tolerance axes only: {listed(wanted) if wanted else 'here there are none'}"
            remedy = question.remedy(spelled, wanted)
            if draft is not None:
                remedy = f"the engineer chooses {axis}: put it into a design"
            question.findings.add(where, describe(value), expected, remedy)
        elif axis in question.built:
            bounds = _read_bounds(question.built[axis], spelled, value, where, question)
            if bounds is not None:
                over[axis] = bounds
    return over


def _read_bounds(
    built: BuiltAxis, spelled: str, value: object, where: str, question: Question
) -> Range | None:
    items = value if isinstance(value, list) else [value]
    places = [f"{where}[{i}]" if isinstance(value, list) else where for i in range(len(items))]
    if built.reader is None:
        return _read_labels(built, items, places, where, question.findings)
    if len(items) not in (1, 2):
        expected = "two values, [lowest, highest]"
        question.findings.add(where, describe(value), expected, "give the ends of the range")
        return None
    ends = [
        _read_coordinate(built, spelled, item, at, question)
        for item, at in zip(items, places, strict=True)
    ]
    sound = [end for end in ends if end is not None]
    if len(sound) < len(ends):
        return None
    if spelled == "sample_rate":
        sound.reverse()
    if sound[-1] < sound[0]:
        question.findings.add(where, describe(value), "[lowest, highest]", "exchange the two")
        return None
    return sound[0], sound[-1]


def _read_labels(
    built: BuiltAxis, items: Sequence[object], places: list[str], where: str, findings: Findings
) -> tuple[str, ...] | None:
    if not items:
        findings.add(where, "an empty array", "at least one label", "leave it out for all rows")
        return None
    found = [_read_label(built, item, at, findings) for item, at in zip(items, places, strict=True)]
    labels = [label for label in found if label is not None]
    if len(labels) < len(found):
        return None
    if len(set(labels)) < len(labels):
        findings.add(where, "a label twice", "each label at most once", "remove the second")
        return None
    return tuple(labels)


def _read_requirements(
    data: Mapping[str, Any], place: str, findings: Findings
) -> tuple[Requirement, ...]:
    requirements = []
    for name, value in data.items():
        try:
            requirements.append(read_requirement(name, value))
        except QuantityError as error:
            where = below(f"{place}.require", name)
            findings.add(where, error.found, error.expected, error.remedy)
    return tuple(requirements)


def read_measures(
    section: Mapping[str, Any], cases: Sequence[Case], findings: Findings
) -> tuple[str, ...]:
    """Find what is computed: always two, then what is named, then what the cases require."""
    named = check_shape(MeasuresShape, section, ("measures",), findings).get("names", [])
    for position, name in enumerate(named):
        place = f"measures.names[{position}]"
        if name in DERIVED:
            remedy = "remove it: it follows from what is always computed, and is never stored"
            findings.add(place, describe(name), f"a measure: {listed(MEASURES)}", remedy)
        elif name not in MEASURES:
            remedy = suggest(name, MEASURES) or "leave it out"
            findings.add(place, describe(name), f"a measure: {listed(MEASURES)}", remedy)
        elif name in named[:position]:
            findings.add(place, describe(name), "each measure once", "remove the second")
    required = [
        requirement.quantity
        for case in cases
        for requirement in case.requirements
        if requirement.quantity in MEASURES
    ]
    return tuple(dict.fromkeys((*ALWAYS_COMPUTED, *named, *required)))
