"""Designs and cases as an atlas stores them: plain JSON values, read back as untrusted input."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, TypeAdapter, ValidationError

from sweep.config.model import Case, Design, Requirement
from sweep.errors import DamagedAtlas
from sweep.vocabulary import DERIVED, MEASURES


def _known_quantity(name: str) -> str:
    if name not in MEASURES and name not in DERIVED:
        raise ValueError(f"no measure is called {name[:60]!r}")
    return name


def _finite(value: float) -> float:
    if not math.isfinite(value):
        raise ValueError("not finite")
    return value


Name = Annotated[str, Field(pattern=r"^[a-z][a-z0-9_]{0,39}$")]
Label = Annotated[str, Field(min_length=1, max_length=80)]
Number = Annotated[float, AfterValidator(_finite)]


class _Stored(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True)


class _StoredRequirement(_Stored):
    quantity: Annotated[str, AfterValidator(_known_quantity)]
    sense: Literal["max", "min"]
    limit: Number


class _StoredDesign(_Stored):
    name: Name
    values: dict[Name, Number | Label]


class _StoredCase(_Stored):
    name: Name
    over: dict[Name, list[Number] | list[Label]]
    requirements: list[_StoredRequirement]


_DESIGNS = TypeAdapter(list[_StoredDesign])
_CASES = TypeAdapter(list[_StoredCase])


def designs_to_json(designs: Sequence[Design]) -> list[dict[str, Any]]:
    """Write designs as JSON values."""
    return [{"name": design.name, "values": dict(design.values)} for design in designs]


def cases_to_json(cases: Sequence[Case]) -> list[dict[str, Any]]:
    """Write cases as JSON values."""
    return [
        {
            "name": case.name,
            "over": {axis: list(bounds) for axis, bounds in case.over.items()},
            "requirements": [
                {"quantity": one.quantity, "sense": one.sense, "limit": one.limit}
                for one in case.requirements
            ],
        }
        for case in cases
    ]


def designs_from_json(data: object) -> tuple[Design, ...]:
    """Read designs from JSON values that anybody may have written.

    Raises
    ------
    DamagedAtlas
        When they are not what `designs_to_json` writes.
    """
    stored = _validate(_DESIGNS, data, "designs")
    return tuple(Design(one.name, dict(one.values)) for one in stored)


def cases_from_json(data: object) -> tuple[Case, ...]:
    """Read cases from JSON values that anybody may have written.

    Raises
    ------
    DamagedAtlas
        When they are not what `cases_to_json` writes.
    """
    stored = _validate(_CASES, data, "cases")
    return tuple(
        Case(
            one.name,
            {axis: _bounds(one.name, axis, bounds) for axis, bounds in one.over.items()},
            tuple(Requirement(r.quantity, r.sense, r.limit) for r in one.requirements),
        )
        for one in stored
    )


def _validate(adapter: TypeAdapter[Any], data: object, what: str) -> Any:  # noqa: ANN401
    try:
        return adapter.validate_python(data)
    except ValidationError as error:
        first = error.errors(include_url=False)[0]
        place = ".".join(str(part) for part in first["loc"])[:100]
        raise _damaged(what, f"{place or 'the list'}: {first['msg']}") from error


def _bounds(case: str, axis: str, bounds: list[Any]) -> tuple[Any, ...]:
    numbers = all(isinstance(bound, float) for bound in bounds)
    if not bounds or (numbers and (len(bounds) != 2 or bounds[1] < bounds[0])):
        raise _damaged("cases", f"{case}.over.{axis}: not [lowest, highest]")
    return tuple(bounds)


def _damaged(what: str, reason: str) -> DamagedAtlas:
    return DamagedAtlas(
        f"the {what} stored in the atlas cannot be read: {reason}",
        where=[what],
        remedy="run the atlas' config again; it rewrites them and computes nothing anew",
    )
