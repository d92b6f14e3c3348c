"""Axes as they are given: in which form, and which parameters each of them sweeps."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from sweep.config.findings import Findings, describe, key_path, listed, suggest
from sweep.config.loop import LoopDraft
from sweep.config.nodes import read_percentage
from sweep.config.reading import Target, check_name, delay_target
from sweep.config.rows import RowTable, read_row_table
from sweep.config.shapes import AxisShape, check_shape
from sweep.grid import Role

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


def draft_axes(
    sections: Mapping[str, Any], loop: LoopDraft, folder: Path, findings: Findings
) -> list[AxisDraft]:
    """Read the form of every axis and find its parameters."""
    drafts = []
    for name, data in sections.items():
        place = key_path("axes", name)
        named = check_name(name, place, "axis", findings)
        keys = check_shape(AxisShape, data, ("axes", name), findings)
        form = _find_form(data, place, findings) if isinstance(data, dict) else None
        if form is None or not named:
            present = frozenset(data) if isinstance(data, dict) else frozenset()
            drafts.append(AxisDraft(name, place, "", present, keys, (), None))
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
    by_name = loop.find(path) or loop.find(part)
    choices = [*loop.targets, "delay.NAME"]
    near = suggest(path, choices) or "write one of these paths"
    remedy = f'write "{by_name.path}"' if by_name else near
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
