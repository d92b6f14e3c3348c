"""Axes as they are computed: nodes, nominal and what a value on them is."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from decimal import Decimal

import numpy as np

from sweep.config.coordinates import is_within, nearest, pin
from sweep.config.drafts import AxisDraft
from sweep.config.findings import Findings, describe, listed, suggest
from sweep.config.nodes import MAX_NODES, GivenForm, build_nodes, refuse_count, show
from sweep.config.reading import Reader, find_display_unit, period_target, rate_target
from sweep.config.rows import RowTable
from sweep.grid import Axis, FloatArray
from sweep.quantities import format_quantity, reciprocal, to_float


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
