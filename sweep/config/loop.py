"""The sections of the loop itself: plant, controller, delay and a fixed sample period."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sweep.config.findings import Findings, describe, find_near, key_path, listed, suggest
from sweep.config.reading import Target, check_name, delay_target, period_target, rate_target
from sweep.config.shapes import Section, check_shape, controller_shape, plant_shape
from sweep.vocabulary import (
    CODE_PERIOD,
    CONTROLLERS,
    PLANTS,
    Kind,
    coordinate_name,
)

_NOT_PARAMETERS = ("kind", "output_unit", "input_unit", "integral")


@dataclass(frozen=True)
class Given:
    """One value that fixes a parameter."""

    target: Target
    """The parameter."""
    value: Any
    """As it stands in the config."""
    place: str
    """Where it stands in the config."""


@dataclass(frozen=True)
class LoopDraft:
    """What the loop's sections say, before the axes are known."""

    plant: str | None
    """Kind of plant; ``None`` when that is itself a mistake."""
    controller: str | None
    """Kind of controller; ``None`` when that is itself a mistake."""
    integral: str
    """The integral rule, ``backward`` where the controller has none."""
    labels: tuple[str, str]
    """Units of the plant's output and input, empty when not given."""
    targets: Mapping[str, Target]
    """Every parameter but the delay parts, by dotted path."""
    required: frozenset[str]
    """Paths of the parameters that have no default."""
    fixed: tuple[Given, ...]
    """What the sections fix, doubles included."""
    misspelt: frozenset[str] = frozenset()
    """Paths of parameters that an unknown key probably meant; not to be called missing as well."""

    def find(self, name: str) -> Target | None:
        """Find the parameter that an axis, a column or ``sets`` calls ``name``."""
        if name == "sample_rate":
            return rate_target()
        if name == "delay":
            return delay_target("delay")
        if name in self.targets:
            return self.targets[name]
        hits = [path for path in self.targets if path.rpartition(".")[2] == name]
        return self.targets[hits[0]] if len(hits) == 1 else None

    def names(self) -> list[str]:
        """Short names under which parameters can be swept."""
        paths = list(self.targets)
        return [*(coordinate_name(path, paths) for path in paths), "sample_rate"]


def read_loop(document: Mapping[str, Any], findings: Findings) -> LoopDraft:
    """Read the loop's sections from a document whose top level is sound."""
    plant, plant_keys = _read_section("plant", PLANTS, plant_shape, document, findings)
    controller, controller_keys = _read_section(
        "controller", CONTROLLERS, controller_shape, document, findings
    )
    targets = {"sample_period": period_target()}
    targets |= _targets("plant", PLANTS, plant)
    targets |= _targets("controller", CONTROLLERS, controller)
    known = {
        "sample_period",
        *(("plant",) if plant else ()),
        *(("controller",) if controller else ()),
    }
    required = frozenset(
        path
        for path, target in targets.items()
        if target.spec.default is None and path.partition(".")[0] in known
    )
    code_period = Target("controller.code_period", CODE_PERIOD)
    targets[code_period.path] = code_period
    sections = {"plant": plant_keys, "controller": controller_keys}
    fixed = [
        Given(targets[f"{section}.{name}"], value, f"{section}.{name}")
        for section, keys in sections.items()
        for name, value in keys.items()
        if name not in _NOT_PARAMETERS and f"{section}.{name}" in targets
    ]
    return LoopDraft(
        plant,
        controller,
        controller_keys.get("integral", "backward"),
        (plant_keys.get("output_unit", ""), plant_keys.get("input_unit", "")),
        targets,
        required,
        (*_fixed_sample_period(document), *fixed, *_fixed_delays(document, findings)),
        _misspelt(document, targets),
    )


def _read_section(
    section: str,
    kinds: Mapping[str, Kind],
    shape: Any,  # noqa: ANN401  a function from kind to model
    document: Mapping[str, Any],
    findings: Findings,
) -> tuple[str | None, dict[str, Any]]:
    """Kind and sound keys of [plant] or [controller]; keys are not judged under an unknown kind."""
    data = document.get(section)
    if data is None:
        return None, {}
    kind = data.get("kind")
    if not isinstance(kind, str) or kind not in kinds:
        found = describe(kind) if "kind" in data else "nothing"
        remedy = suggest(kind, kinds) or f'write kind = "{next(iter(kinds))}" or another of these'
        findings.add(f"{section}.kind", found, listed(f'"{name}"' for name in kinds), remedy)
        return None, {}
    model: type[Section] = shape(kind)
    return kind, check_shape(model, data, (section,), findings)


def _targets(section: str, kinds: Mapping[str, Kind], kind: str | None) -> dict[str, Target]:
    """Parameters of one kind, or of all of them while the kind is unknown."""
    chosen = [kinds[kind]] if kind else list(kinds.values())
    return {
        f"{section}.{spec.name}": Target(f"{section}.{spec.name}", spec)
        for one in chosen
        for spec in one.parameters
    }


def _misspelt(document: Mapping[str, Any], targets: Mapping[str, Target]) -> frozenset[str]:
    meant = set()
    for section in ("plant", "controller"):
        names = [path.partition(".")[2] for path in targets if path.startswith(f"{section}.")]
        for key in document.get(section, {}):
            if key not in (*names, *_NOT_PARAMETERS) and (near := find_near(key, names)):
                meant.add(f"{section}.{near}")
    return frozenset(meant)


def _fixed_sample_period(document: Mapping[str, Any]) -> list[Given]:
    spellings = {
        "sample_period": period_target(),
        "sample_rate": rate_target(),
    }
    return [
        Given(target, document[name], name)
        for name, target in spellings.items()
        if name in document
    ]


def _fixed_delays(document: Mapping[str, Any], findings: Findings) -> list[Given]:
    given = []
    for name, value in document.get("delay", {}).items():
        place = key_path("delay", name)
        if check_name(name, place, "delay part", findings):
            given.append(Given(delay_target(name), value, place))
    return given
