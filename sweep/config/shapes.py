"""The shape of a config's sections, as pydantic models: which keys there are and of what type.

Values are judged later, where units and ranges are known. Models of the plant and the controller
are made from the vocabulary, so that a new kind needs nothing here.
"""

from __future__ import annotations

import functools
from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, create_model
from pydantic_core import PydanticCustomError

from sweep.config.findings import Findings, describe, key_path, listed, suggest
from sweep.quantities import describe_unit
from sweep.vocabulary import CODE_PERIOD, CONTROLLERS, PLANTS, Kind, ParameterSpec

MAX_TEXT = 200
"""Longest title."""

MAX_LABEL = 80
"""Longest row label, and longest unit label."""

RawQuantity = Any
"""A quantity as it stands in the config; its type, unit and range are judged when it is read."""


def _plain_text(value: object) -> object:
    if not isinstance(value, str) or not value.strip() or not value.isprintable():
        raise PydanticCustomError("plain_text", "a printable text that is not empty")
    return value


PlainText = Annotated[str, BeforeValidator(_plain_text)]


class Section(BaseModel):
    """What every section has in common: no unknown keys, and no guessing of types."""

    model_config = ConfigDict(extra="forbid", strict=True)


def _key(description: str) -> Any:  # noqa: ANN401  pydantic's own type for a field's default
    return Field(default=None, description=description)


class DocumentShape(Section):
    """The top level; sections are judged one by one."""

    title: Annotated[PlainText, Field(max_length=MAX_TEXT)] = Field(
        description=f'a title of 1 to {MAX_TEXT} printable characters, such as title = "Pan head"'
    )
    sample_period: RawQuantity = _key(f"{describe_unit('s')}, when it is not an axis")
    sample_rate: RawQuantity = _key(f"{describe_unit('Hz')}, when it is not an axis")
    plant: dict[str, Any] = Field(description="a section [plant] with a `kind`")
    controller: dict[str, Any] = Field(description="a section [controller] with a `kind`")
    delay: dict[str, RawQuantity] = Field(
        default_factory=dict,
        description='a section [delay] of named parts, such as update = "1 sample"',
    )
    axes: dict[str, Any] = Field(
        description="at least one section [axes.NAME], such as [axes.kp]", min_length=1
    )
    designs: dict[str, Any] = Field(
        default_factory=dict,
        description="sections [designs.NAME] of axis = value",
    )
    cases: dict[str, Any] = Field(default_factory=dict, description="sections [cases.NAME]")
    measures: dict[str, Any] = Field(default_factory=dict, description="a section [measures]")


class MeasuresShape(Section):
    """The section [measures]."""

    names: list[str] = Field(default_factory=list, description="an array of names of measures")


class CaseShape(Section):
    """A section [cases.NAME]."""

    over: dict[str, Any] = Field(
        default_factory=dict,
        description="ranges of tolerance axes, such as over.damping = [0.005, 0.02]",
    )
    require: dict[str, RawQuantity] = Field(
        default_factory=dict, description='limits, such as require.max_decay_time = "80 ms"'
    )


class AxisShape(Section):
    """A section [axes.NAME], in any of its forms."""

    sets: Annotated[str, Field()] | None = _key('a parameter\'s path, such as "plant.damping"')
    role: Literal["design", "tolerance"] | None = _key('"design" or "tolerance"')
    nominal: RawQuantity = _key("a quantity that becomes a node, or a row's label")
    include: list[RawQuantity] | None = _key("an array of quantities that become nodes")
    values: list[RawQuantity] | None = _key("an array of quantities")
    start: RawQuantity = _key("the axis' lower end, a quantity")
    stop: RawQuantity = _key("the axis' upper end, a quantity")
    step: RawQuantity = _key("the distance between nodes, a quantity")
    count: int | None = _key("a whole number of nodes, from 2 to 1,000,000")
    spacing: Literal["linear", "log"] | None = _key('"linear" or "log"')
    centre: RawQuantity = _key("the middle of the axis, a quantity")
    within: RawQuantity = _key("half the axis' length, a quantity or a percentage of the centre")
    rows: list[dict[str, Any]] | None = _key(
        'an array of tables, each such as {label = "A", damping = 0.01}'
    )
    table: str | None = _key("the name of a CSV file beside the config")
    ordered: bool | None = _key("true or false: whether neighbouring rows mean something")


def describe_parameter(spec: ParameterSpec) -> str:
    """Say what a parameter is and what is legal for it."""
    text = f"{spec.long_name}: {describe_unit(spec.unit, decibels=is_gain(spec))}"
    if spec.low > float("-inf"):
        text += f", {'at least' if spec.low_is_legal else 'above'} {spec.low:g}"
    return text


def is_gain(spec: ParameterSpec) -> bool:
    """Whether a parameter is a plain gain, which may be given in dB."""
    return spec.unit == "1" and spec.low == float("-inf")


def _kind_model(kind: Kind, extra: Mapping[str, Any]) -> type[Section]:
    fields: dict[str, Any] = {"kind": (str, Field(description="a text"))}
    for spec in kind.parameters:
        fields[spec.name] = (RawQuantity, _key(describe_parameter(spec)))
    for name, choices in kind.options:
        texts = listed(f'"{choice}"' for choice in choices)
        fields[name] = (Literal[choices] | None, _key(texts))
    return create_model(kind.name, __base__=Section, **fields, **extra)


def _label_field() -> Any:  # noqa: ANN401
    return (
        Annotated[PlainText, Field(max_length=MAX_LABEL)] | None,
        _key(f'the name of a unit, such as "mrad", of at most {MAX_LABEL} characters'),
    )


@functools.cache
def plant_shape(kind: str) -> type[Section]:
    """Model of the section [plant] for one kind."""
    labels = {"output_unit": _label_field(), "input_unit": _label_field()}
    return _kind_model(PLANTS[kind], labels)


@functools.cache
def controller_shape(kind: str) -> type[Section]:
    """Model of the section [controller] for one kind."""
    period = (RawQuantity, _key(describe_parameter(CODE_PERIOD)))
    return _kind_model(CONTROLLERS[kind], {"code_period": period})


def check_shape(
    model: type[Section], data: object, path: tuple[str, ...], findings: Findings
) -> dict[str, Any]:
    """Check one section's keys and types.

    Returns
    -------
    The keys that are sound, by name, without those that were left out. What is not sound is noted
    in ``findings`` and missing from the result, so that the rest can still be judged.
    """
    if not isinstance(data, dict):
        findings.add(key_path(*path), describe(data), "a section", f"write [{key_path(*path)}]")
        return {}
    bad: set[object] = set()
    try:
        model.model_validate(data)
    except ValidationError as error:
        for detail in error.errors(include_url=False):
            location = detail["loc"]
            bad.add(location[0])
            _translate(model, detail["type"], location, data, path, findings)
    known = model.model_fields
    return {key: value for key, value in data.items() if key in known and key not in bad}


def _translate(
    model: type[Section],
    kind: str,
    location: tuple[int | str, ...],
    data: dict[str, Any],
    path: tuple[str, ...],
    findings: Findings,
) -> None:
    name = str(location[0])
    keys = _existing_keys(data, location)
    place = key_path(*path, *keys)
    if kind == "extra_forbidden":
        expected = f"one of the keys {listed(model.model_fields)}"
        remedy = suggest(name, model.model_fields) or "remove it, or see `sweep new` for a starter"
        findings.add(place, f"the unknown key {describe(name)}", expected, remedy)
        return
    expected = model.model_fields[name].description or "another value"
    if kind == "missing":
        findings.add(place, "nothing", expected, f"add `{name}`")
        return
    inside = len(keys) > 1
    remedy = "write each entry as a number or a text with a unit" if inside else f"mend `{name}`"
    findings.add(place, describe(_value_at(data, keys)), expected, remedy)


def _existing_keys(data: Any, location: tuple[int | str, ...]) -> tuple[int | str, ...]:  # noqa: ANN401
    """Keep of pydantic's location what names places in the data, without its validators."""
    keys: list[int | str] = []
    for key in location:
        if not _holds(data, key):
            break
        data = data[key]
        keys.append(key)
    return tuple(keys) or location[:1]


def _holds(data: object, key: int | str) -> bool:
    if isinstance(data, dict):
        return key in data
    return isinstance(data, list) and isinstance(key, int) and key < len(data)


def _value_at(data: Any, keys: tuple[int | str, ...]) -> Any:  # noqa: ANN401
    for key in keys:
        data = data[key]
    return data
