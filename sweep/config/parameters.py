"""Every parameter of the loop exactly once: fixed, swept, or left at its default."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from decimal import Decimal
from functools import cached_property
from typing import Any

from sweep.config.axes import BuiltAxis, build_axis
from sweep.config.drafts import AxisDraft
from sweep.config.findings import Findings, find_near
from sweep.config.loop import LoopDraft
from sweep.config.reading import (
    Reader,
    Target,
    delay_target,
    find_delay_unit,
    find_display_unit,
    is_bare_delay,
)
from sweep.config.shapes import describe_parameter
from sweep.grid import FixedParameter
from sweep.quantities import reciprocal

_FREQUENCY = "plant.natural_frequency"


def check_given_once(loop: LoopDraft, drafts: Sequence[AxisDraft], findings: Findings) -> None:
    """Note every parameter that is given twice, or not at all though it has no default."""
    places: dict[str, str] = {}
    for path, place in _all_given(loop, drafts):
        if path in places:
            expected = f"{path} exactly once; it also stands at {places[path]}"
            findings.add(place, f"a second place for {path}", expected, "remove one of the two")
        places.setdefault(path, place)
    excused = loop.misspelt | _claimed_by_broken_axes(loop, drafts)
    for path in sorted(loop.required - places.keys() - excused):
        section, _, name = path.rpartition(".")
        where = f"in [{section}]" if section else "at the top, before any section"
        remedy = f"write `{name}` {where}, or sweep it in [axes.{name}]"
        findings.add(path, "nothing", describe_parameter(loop.targets[path].spec), remedy)


def _all_given(loop: LoopDraft, drafts: Sequence[AxisDraft]) -> Iterator[tuple[str, str]]:
    for given in loop.fixed:
        yield given.target.path, given.place
    for draft in drafts:
        for target in draft.targets:
            yield target.path, draft.place


def _claimed_by_broken_axes(loop: LoopDraft, drafts: Sequence[AxisDraft]) -> frozenset[str]:
    """Paths that an axis with a mistake of its own probably sets; not to be called missing."""
    broken = [draft for draft in drafts if not draft.targets]
    if any({"rows", "table"} & draft.present for draft in broken):
        return loop.required
    names = [name for draft in broken for name in (draft.name, draft.keys.get("sets", ""))]
    found = [loop.find(name) or loop.find(find_near(name, loop.names())) for name in names if name]
    return frozenset(target.path for target in found if target)


class LoopValues:
    """The numbers of a loop, read once it is known how each parameter is given.

    Parameters
    ----------
    loop
        What the loop's sections say.
    drafts
        The axes.
    findings
        Where mistakes are noted.
    """

    def __init__(self, loop: LoopDraft, drafts: Sequence[AxisDraft], findings: Findings) -> None:
        self._loop = loop
        self._drafts = drafts
        self._findings = findings
        self._labels = _gain_labels(loop)
        self._fixed = {given.target.path: given for given in loop.fixed}

    @cached_property
    def delay_units(self) -> dict[str, str]:
        """Unit of every delay part, ``s`` or ``samples``, by dotted path."""
        given = _all_given(self._loop, self._drafts)
        paths = sorted({path for path, _ in given if path.startswith("delay.")})
        return {path: find_delay_unit(value for _, value in self._given(path)) for path in paths}

    @property
    def bare_delays(self) -> list[str]:
        """Delay parts with a value other than 0 that has no unit, by dotted path."""
        return [
            path
            for path in self.delay_units
            if any(is_bare_delay(value) for _, value in self._given(path))
        ]

    def _given(self, path: str) -> Iterator[tuple[str, Any]]:
        """Every value of a parameter with its place."""
        if path in self._fixed:
            yield self._fixed[path].place, self._fixed[path].value
        for draft in self._drafts:
            if path in {target.path for target in draft.targets}:
                yield from draft.given_values(path)

    @cached_property
    def _natural_period_s(self) -> Decimal | None:
        """Nominal natural period; mistakes in the frequency are left to its own reading."""
        silent = Findings("")
        if _FREQUENCY in self._fixed:
            given = self._fixed[_FREQUENCY]
            number = Reader(given.target, silent).read(given.value, given.place)
            return reciprocal(number) if number else None
        for draft in self._drafts:
            readers = {target.path: Reader(target, silent) for target in draft.targets}
            if _FREQUENCY not in readers:
                continue
            built = build_axis(draft.only(_FREQUENCY), readers, {}, silent)
            if built is not None:
                nominal_hz = built.axis.values_of(_FREQUENCY)[built.axis.nominal]
                return reciprocal(Decimal(repr(float(nominal_hz))))
        return None

    def _reader(self, target: Target) -> Reader:
        if target.is_delay:
            name = target.path.removeprefix("delay.")
            return Reader(delay_target(name, self.delay_units[target.path]), self._findings)
        if target.path == "sample_period" and not target.is_rate:
            return Reader(target, self._findings, self._natural_period_s)
        return Reader(target, self._findings)

    def build_axes(self) -> dict[str, BuiltAxis]:
        """Compute every axis without a mistake, by name, in the order of the config."""
        built = {}
        for draft in self._drafts:
            readers = {target.path: self._reader(target) for target in draft.targets}
            axis = build_axis(draft, readers, self._labels, self._findings)
            if axis is not None:
                built[draft.name] = axis
        return built

    def fix_parameters(self) -> tuple[FixedParameter, ...]:
        """Read what is fixed and add the defaults of what is not given at all."""
        swept = {target.path for draft in self._drafts for target in draft.targets}
        targets = {**self._loop.targets}
        targets |= {path: self._fixed[path].target for path in self._fixed}
        fixed = [self._fix(target) for path, target in targets.items() if path not in swept]
        return tuple(one for one in fixed if one is not None)

    def _fix(self, target: Target) -> FixedParameter | None:
        given = self._fixed.get(target.path)
        reader = self._reader(target)
        spec = reader.target.stored_spec
        value = spec.default
        if given is not None:
            number = reader.read(given.value, given.place)
            value = None if number is None else reader.store(number)
        if value is None:
            return None
        display = find_display_unit(spec, [given.value] if given else [])
        display = self._labels.get(target.path) or display
        return FixedParameter(target.path, value, spec.unit, display, spec.long_name)


def _gain_labels(loop: LoopDraft) -> dict[str, str]:
    """Units of the gains for people: plant input per plant output, where both are named."""
    if not all(loop.labels):
        return {}
    output, source = (f"({name})" if set(name) & set(" /") else name for name in loop.labels)
    return {
        "controller.kp": f"{source}/{output}",
        "controller.ki": f"{source}/{output}/s",
        "controller.kd": f"{source} s/{output}",
    }
