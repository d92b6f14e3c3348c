"""The language of requirements: ``max_`` or ``min_`` before anything an atlas holds or implies."""

from __future__ import annotations

import math
from typing import Literal

from sweep.config.findings import describe, find_near, listed
from sweep.config.model import Requirement
from sweep.errors import QuantityError
from sweep.quantities import describe_unit, parse_quantity, to_float
from sweep.vocabulary import DERIVED, MEASURES


def read_requirement(name: str, value: object) -> Requirement:
    """Read one requirement, such as ``max_decay_time`` = ``"80 ms"``.

    Parameters
    ----------
    name
        ``max_`` or ``min_`` and the name of a stored or derived measure.
    value
        The bound: a number in the measure's unit, or a text with a unit.

    Raises
    ------
    QuantityError
        For a name that bounds nothing, and a value that is not a quantity of that kind.

    Examples
    --------
    >>> read_requirement("max_decay_time", "80 ms")
    Requirement(quantity='decay_time', sense='max', limit=0.08)
    """
    sense, _, quantity = name.partition("_")
    spec = DERIVED.get(quantity) or MEASURES.get(quantity)
    if sense not in ("max", "min") or spec is None:
        names = [f"{s}_{q}" for q in (*DERIVED, *MEASURES) for s in ("max", "min")]
        remedy = _meant(name) or "name a measure after max_ or min_"
        raise QuantityError(describe(name), f"a requirement: {listed(names)}", remedy)
    limit = to_float(parse_quantity(value, spec.unit))
    if quantity == "decay_time" and not (math.isfinite(limit) and limit > 0):
        expected = f"{spec.long_name}: {describe_unit(spec.unit)}, above 0"
        raise QuantityError(describe(value), expected, "give a positive time")
    chosen: Literal["max", "min"] = "max" if sense == "max" else "min"
    return Requirement(quantity, chosen, limit)


def _meant(name: str) -> str:
    """The remedy that names the requirement that was probably meant; empty when none is near.

    Without ``max_`` or ``min_`` it is the sense in which the measure is good to be bounded.
    """
    sense, _, rest = name.partition("_")
    specs = MEASURES | DERIVED
    quantity = find_near(rest if sense in ("max", "min") else name, specs)
    if not quantity:
        return ""
    if sense not in ("max", "min"):
        sense = {"low": "max", "high": "min"}.get(specs[quantity].better, "")
    return f'"{sense}_{quantity}" was probably meant' if sense else ""
