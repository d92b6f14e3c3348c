"""Axes: which parameter each sweeps, in which form it is given, and its nodes."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np

from sweep.config.coordinates import is_within, nearest, pin
from sweep.config.findings import Findings, describe, key_path, listed, suggest
from sweep.config.loop import LoopDraft
from sweep.config.nodes import (
    MAX_NODES,
    GivenForm,
    build_nodes,
    read_percentage,
    refuse_count,
    show,
)
from sweep.config.reading import (
    Reader,
    Target,
    check_name,
    delay_target,
    find_display_unit,
    period_target,
    rate_target,
)
from sweep.config.rows import RowTable, read_row_table
from sweep.config.shapes import AxisShape, check_shape
from sweep.grid import Axis, FloatArray, Role
from sweep.quantities import format_quantity, reciprocal, to_float

_FORM_OF = {
    "values": "values",
    "start": "range",
    "stop": "range",
    "centre": "centre",
    "within": "centre",
    "rows": "rows",
    "table": "rows",
}
_ANY_FORM = {"role", "nominal"}
_KEYS = {
    "values": {"values", "sets", "include", *_ANY_FORM},
    "range": {"start", "stop", "count", "step", "spacing", "sets", "include", *_ANY_FORM},
    "centre": {"centre", "within", "count", "sets", "include", *_ANY_FORM},
    "rows": {"rows", "table", "ordered", *_ANY_FORM},
}
_FORMS = (
    "`values`; or `start` and `stop` with `count` or `step`; or `centre`, `within` and `count`; "
    "or `rows`; or `table`"
)


@dataclass(frozen=True)
class AxisDraft:
    """An axis whose form and parameters are known, but not yet its nodes."""

    name: str
    """Name of the stored dimension."""
    place: str
    """Where it stands in the config, such as ``axes.kp``."""
    form: str
    """``values``, ``range``, ``centre`` or ``rows``."""
    present: frozenset[str]
    """Keys that were given, sound or not."""
    keys: Mapping[str, Any]
    """The sound ones with their values."""
    targets: tuple[Target, ...]
    """Parameters that it sets; empty when that is itself a mistake."""
    role: Role | None
    """Who decides; ``None`` when that is itself a mistake."""
    rows: RowTable | None = None
    """The table of a row axis."""

    def given_values(self, path: str) -> Iterator[tuple[str, Any]]:
        """Every value given for parameter ``path``, each with its place in the config."""
        if self.rows is not None:
            yield from self.rows.columns.get(path, ())
            return
        for name in ("start", "stop", "step", "centre", "within", "nominal"):
            relative = name == "within" and read_percentage(self.keys.get(name)) is not None
            if name in self.keys and not relative:
                yield f"{self.place}.{name}", self.keys[name]
        for name in ("values", "include"):
            for position, value in enumerate(self.keys.get(name) or ()):
                yield f"{self.place}.{name}[{position}]", value

    def only(self, path: str) -> AxisDraft:
        """Reduce a row axis to one of its columns."""
        if self.rows is None:
            return self
        return replace(self, rows=replace(self.rows, columns={path: self.rows.columns[path]}))


@dataclass(frozen=True)
class BuiltAxis:
    """A finished axis together with what reads further values of it."""

    draft: AxisDraft
    """What the config says."""
    axis: Axis
    """Its nodes."""
    reader: Reader | None
    """Reads a value of its parameter; ``None`` on a row axis, which is addressed by labels."""

    def reader_of(self, spelled: str) -> Reader | None:
        """Get the reader of a value whose key is the axis' name or sample_period or sample_rate."""
        if self.reader is None or self.axis.name != "sample_period":
            return self.reader
        target = rate_target() if spelled == "sample_rate" else period_target()
        return replace(self.reader, target=target)

    def name_pin(self, number: Decimal, reader: Reader, value: object) -> str:
        """Write the `include` that would make a value a node.

        Parameters
        ----------
        number
            The value as ``reader`` read it.
        reader
            What read it.
        value
            As it stands in the config.
        """
        own = self.reader or reader
        text = describe(value)
        if own.target.is_rate != reader.target.is_rate:
            unit = own.target.spec.unit
            text = f'"{format_quantity(to_float(reciprocal(number)), unit, digits=None)}"'
        return f"`include = [{text}]` in [{self.draft.place}]"


def draft_axes(
    sections: Mapping[str, Any], loop: LoopDraft, folder: Path, findings: Findings
) -> list[AxisDraft]:
    """Read the form of every axis and find its parameters."""
    drafts = []
    for name, data in sections.items():
        place = key_path("axes", name)
        named = check_name(name, place, "axis", findings)
        keys = check_shape(AxisShape, data, ("axes", name), findings)
        if not isinstance(data, dict):
            continue
        form = _find_form(data, place, findings)
        if form is None or not named:
            drafts.append(AxisDraft(name, place, "", frozenset(data), keys, (), None))
        else:
            drafts.append(_draft_axis(name, form, data, keys, loop, folder, findings))
    return drafts


def _find_form(data: Mapping[str, Any], place: str, findings: Findings) -> str | None:
    leading = [name for name in _FORM_OF if name in data]
    forms = {_FORM_OF[name] for name in leading}
    if len(forms) != 1 or {"rows", "table"} <= data.keys():
        found = " and ".join(f"`{name}`" for name in leading) or "no nodes"
        findings.add(place, found, f"one form: {_FORMS}", "keep one of these forms")
        return None
    form = forms.pop()
    for name in data:
        if name in AxisShape.model_fields and name not in _KEYS[form]:
            expected = f"the keys of this form: {listed(sorted(_KEYS[form]))}"
            remedy = "remove it"
            if name == "sets":
                remedy = "remove it: the names in the rows say which parameters they set"
            findings.add(f"{place}.{name}", describe(data[name]), expected, remedy)
    return form


def _draft_axis(
    name: str,
    form: str,
    data: Mapping[str, Any],
    keys: Mapping[str, Any],
    loop: LoopDraft,
    folder: Path,
    findings: Findings,
) -> AxisDraft:
    place, present = f"axes.{name}", frozenset(data)
    if form == "rows":
        rows = read_row_table(keys, place, loop, folder, findings)
        targets = rows.targets if rows else ()
        role = _find_row_role(keys, place, targets, "role" in present, findings)
        return AxisDraft(name, place, form, present, keys, targets, role, rows)
    target = _find_target(name, data, keys, loop, findings)
    stored_name = "sample_period" if name == "sample_rate" else name
    if target is None:
        return AxisDraft(stored_name, place, form, present, keys, (), keys.get("role"))
    role = keys.get("role", target.role)
    return AxisDraft(stored_name, place, form, present, keys, (target,), role)


def _find_target(
    name: str,
    data: Mapping[str, Any],
    keys: Mapping[str, Any],
    loop: LoopDraft,
    findings: Findings,
) -> Target | None:
    """The parameter of a plain axis, by its name or by ``sets``."""
    own = loop.find(name)
    if "sets" not in data:
        if own is None:
            expected = (
                f"the name of a parameter ({listed(loop.names())}), or a free name with `sets`"
            )
            remedy = suggest(name, loop.names()) or f'add sets = "delay.{name}" for a delay part'
            findings.add(f"axes.{name}", describe(name), expected, remedy)
        return own
    if "sets" not in keys:
        return None
    if name == "sample_rate":
        found, expected = describe(keys["sets"]), "no `sets` on an axis called sample_rate"
        findings.add("axes.sample_rate.sets", found, expected, "remove it, or rename the axis")
        return own
    target = find_by_path(keys["sets"], f"axes.{name}.sets", loop, findings)
    if target and own and own.path != target.path and not own.is_delay:
        findings.add(
            f"axes.{name}.sets",
            describe(keys["sets"]),
            f'"{own.path}", the parameter that the axis is named after, or another axis name',
            "rename the axis",
        )
    return target


def find_by_path(path: str, place: str, loop: LoopDraft, findings: Findings) -> Target | None:
    """Find a parameter by its full dotted path, a new delay part included."""
    if path in loop.targets:
        return loop.targets[path]
    section, _, part = path.partition(".")
    if section == "delay" and part:
        return delay_target(part) if check_name(part, place, "delay part", findings) else None
    by_name = loop.find(path)
    choices = [*loop.targets, "delay.NAME"]
    remedy = f'write "{by_name.path}"' if by_name else suggest(path, choices)
    findings.add(place, describe(path), f"the path of a parameter: {listed(choices)}", remedy)
    return None


def _find_row_role(
    keys: Mapping[str, Any],
    place: str,
    targets: tuple[Target, ...],
    given: bool,
    findings: Findings,
) -> Role | None:
    if given:
        return keys.get("role")
    roles = {target.role for target in targets}
    if len(roles) > 1:
        expected = '"design" or "tolerance", because its rows set parameters of both roles'
        findings.add(f"{place}.role", "nothing", expected, "say who decides which row it is")
        return None
    return roles.pop() if roles else None


def build_axis(
    draft: AxisDraft,
    readers: Mapping[str, Reader],
    labels: Mapping[str, str],
    findings: Findings,
) -> BuiltAxis | None:
    """Compute an axis' nodes.

    Parameters
    ----------
    draft
        The axis.
    readers
        One for each of its parameters, by dotted path.
    labels
        Units of gains for people, by dotted path, where the config names the plant's units.
    findings
        Where mistakes are noted; then the result is ``None``.
    """
    if draft.role is None or not draft.targets:
        return None
    if draft.rows is not None:
        return _build_row_axis(draft, draft.rows, readers, findings)
    return _build_plain_axis(draft, readers[draft.targets[0].path], labels, findings)


def _build_plain_axis(
    draft: AxisDraft, reader: Reader, labels: Mapping[str, str], findings: Findings
) -> BuiltAxis | None:
    form = GivenForm(draft.form, draft.place, draft.keys, draft.present, reader)
    spaced = build_nodes(form)
    pins, nominal = _read_pins(draft, reader, spaced, findings)
    if spaced is None or pins is None:
        return None
    finished = pin(spaced, pins)
    coordinates = np.array([reader.store(value) for value in finished])
    index = (len(finished) - 1) // 2 if nominal is None else nearest(finished, nominal)
    if reader.target.is_rate:
        coordinates = coordinates[::-1].copy()
        index = index if nominal is None else len(finished) - 1 - index
    if not _fits(coordinates, draft.place, findings):
        return None
    spec = reader.target.stored_spec
    written = (value for _, value in draft.given_values(reader.target.path))
    axis = Axis(
        name=draft.name,
        sets=(reader.target.path,),
        coordinates=coordinates,
        role=draft.role or reader.target.role,
        nominal=index,
        unit=spec.unit,
        display_unit=labels.get(reader.target.path) or find_display_unit(spec, written),
        long_name=spec.long_name,
    )
    return BuiltAxis(draft, axis, reader)


def _fits(coordinates: FloatArray, place: str, findings: Findings) -> bool:
    if len(coordinates) > MAX_NODES:
        refuse_count(place, f"{len(coordinates)} nodes with its pins", findings)
        return False
    if np.any(np.diff(coordinates) <= 0):
        expected = "nodes that differ in double precision"
        findings.add(place, "nodes that coincide", expected, "take fewer nodes or a longer axis")
        return False
    return True


def _read_pins(
    draft: AxisDraft, reader: Reader, spaced: list[Decimal] | None, findings: Findings
) -> tuple[list[Decimal] | None, Decimal | None]:
    """Values of `include` and `nominal`; ``None`` for the list when one of them is a mistake."""
    given = [
        (f"{draft.place}.include[{position}]", value)
        for position, value in enumerate(draft.keys.get("include") or ())
    ]
    if "nominal" in draft.keys:
        given.append((f"{draft.place}.nominal", draft.keys["nominal"]))
    pins: list[Decimal] = []
    for place, value in given:
        number = reader.read(value, place)
        if number is None or spaced is None:
            continue
        if is_within(spaced, number):
            pins.append(number)
        else:
            ends = f"{show(spaced[0], reader)} to {show(spaced[-1], reader)}"
            remedy = "lengthen the axis or move the value"
            findings.add(place, describe(value), f"a value on the axis, {ends}", remedy)
    sound = len(pins) == len(given) and {"include", "nominal"} & draft.present <= set(draft.keys)
    return (pins if sound else None), (pins[-1] if pins and "nominal" in draft.keys else None)


def _build_row_axis(
    draft: AxisDraft, rows: RowTable, readers: Mapping[str, Reader], findings: Findings
) -> BuiltAxis | None:
    columns: dict[str, FloatArray] = {}
    for path, cells in rows.columns.items():
        numbers = [readers[path].read(value, place) for place, value in cells]
        sound = [readers[path].store(number) for number in numbers if number is not None]
        if len(sound) == len(rows.labels):
            columns[path] = np.array(sound)
    nominal = _find_nominal_row(draft, rows.labels, findings)
    if nominal is None or len(columns) < len(rows.columns) or draft.role is None:
        return None
    axis = Axis(
        name=draft.name,
        sets=tuple(columns),
        coordinates=np.arange(len(rows.labels), dtype=np.float64),
        role=draft.role,
        nominal=nominal,
        long_name=f"row of {draft.name}",
        labels=rows.labels,
        ordered=draft.keys.get("ordered", False),
        columns=columns,
        column_units={path: readers[path].target.stored_spec.unit for path in columns},
    )
    return BuiltAxis(draft, axis, None)


def _find_nominal_row(draft: AxisDraft, labels: tuple[str, ...], findings: Findings) -> int | None:
    if "nominal" not in draft.present:
        return (len(labels) - 1) // 2
    nominal = draft.keys.get("nominal")
    if nominal in labels:
        return labels.index(nominal)
    expected = f"the label of a row: {listed(labels)}"
    remedy = suggest(nominal, labels) or "write one of the labels, as a text"
    findings.add(f"{draft.place}.nominal", describe(nominal), expected, remedy)
    return None
