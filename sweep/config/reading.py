"""Reading one parameter's values: from what stands in the config to decimals in the stored unit."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from decimal import Decimal

from sweep.config.findings import Findings, describe
from sweep.config.shapes import describe_parameter, is_gain
from sweep.errors import QuantityError
from sweep.grid import Role
from sweep.quantities import (
    describe_unit,
    is_scale,
    parse_quantity,
    reciprocal,
    split_quantity,
    to_float,
)
from sweep.vocabulary import DERIVED, MEASURES, SAMPLE_PERIOD, SAMPLE_RATE, ParameterSpec

_NAME = re.compile(r"[a-z][a-z0-9_]{0,39}")
NAME_RULE = "a name of a-z, 0-9 and _ that starts with a letter, of at most 40 characters"


def check_name(name: str, path: str, what: str, findings: Findings) -> bool:
    """Whether ``name`` is legal for an axis, delay part, design or case; notes it when not."""
    if not _NAME.fullmatch(name):
        findings.add(path, describe(name), NAME_RULE, f"rename the {what}")
        return False
    if name in MEASURES or name in DERIVED:
        findings.add(path, describe(name), "a name that is no measure's", f"rename the {what}")
        return False
    return True


@dataclass(frozen=True)
class Target:
    """One parameter that the config may fix or sweep."""

    path: str
    """Dotted path of the parameter."""
    spec: ParameterSpec
    """What it is called there and what is legal for it."""
    is_rate: bool = False
    """Whether it is given as a sample rate, of which the stored period is the reciprocal."""

    @property
    def is_delay(self) -> bool:
        """Whether it is a delay part, whose unit follows from how it is written."""
        return self.path.startswith("delay.")

    @property
    def role(self) -> Role:
        """The role of its axis unless the config says otherwise."""
        chosen = self.path == "sample_period" or self.path.startswith("controller.")
        return "design" if chosen else "tolerance"

    @property
    def stored_spec(self) -> ParameterSpec:
        """How the parameter is stored, which for a rate is as a period."""
        return SAMPLE_PERIOD if self.is_rate else self.spec


def delay_target(name: str, unit: str = "s") -> Target:
    """The delay part ``name``, stored in ``unit``."""
    display = "samples" if unit == "samples" else "us"
    spec = ParameterSpec(name, unit, f"delay part {name}", 0.0, display_unit=display)
    return Target(f"delay.{name}", spec)


def period_target() -> Target:
    """The sample period itself."""
    return Target("sample_period", SAMPLE_PERIOD)


def rate_target() -> Target:
    """The sample period, spelled as a rate."""
    return Target("sample_period", SAMPLE_RATE, is_rate=True)


def find_delay_unit(values: Iterable[object]) -> str:
    """Find the unit of a delay part, ``s`` or ``samples``, from every value that it is given.

    The first that says one decides; a bare number is in seconds and zero fits either. `Reader.read`
    refuses those that say the other.
    """
    units = (_delay_unit(value) for value in values)
    return next((unit for unit in units if unit), "s")


def is_bare_delay(value: object) -> bool:
    """Whether a delay is a number other than 0 without a unit, and so counts in seconds."""
    try:
        quantity = split_quantity(value)
    except QuantityError:
        return False
    return not quantity.unit and quantity.number != 0


def _delay_unit(value: object) -> str | None:
    try:
        quantity = split_quantity(value)
    except QuantityError:
        return None
    if not quantity.unit:
        return None if quantity.number == 0 else "s"
    return "samples" if is_scale("samples", quantity.unit) else "s"


@dataclass(frozen=True)
class Reader:
    """Reads the values of one parameter, noting what is wrong with them."""

    target: Target
    """The parameter."""
    findings: Findings
    """Where mistakes are noted."""
    natural_period_s: Decimal | None = None
    """Length of one period, where the value may be given in periods."""

    def read(self, value: object, path: str) -> Decimal | None:
        """Read a value in the written parameter's unit (Hz for a rate), within its legal range."""
        number = self.read_distance(value, path, decibels=is_gain(self.target.spec))
        if number is not None and not self.is_legal(number):
            self.findings.add(path, describe(value), self.describe(), "give a legal value")
            return None
        return number

    def read_distance(self, value: object, path: str, *, decibels: bool = False) -> Decimal | None:
        """Read a difference of two values, such as a step: the same units, any sign."""
        spec = self.target.spec
        try:
            if not isinstance(value, str):
                self._refuse_other_types(value)
            self._refuse_bare_samples(value)
            return parse_quantity(
                value, spec.unit, natural_period_s=self.natural_period_s, decibels=decibels
            )
        except QuantityError as error:
            self._note(path, value, error)
        return None

    def _note(self, path: str, value: object, error: QuantityError) -> None:
        if self._is_in_other_delay_unit(value):
            expected = f"{error.expected}, because one delay part has one unit"
            remedy = f"split {self.target.path} into two parts, or give it one unit everywhere"
            error = QuantityError(error.found, expected, remedy)
        self.findings.add(path, error.found, error.expected, error.remedy)

    def _is_in_other_delay_unit(self, value: object) -> bool:
        """Whether a delay's unit is written beside it, and is not the one of its part."""
        if not self.target.is_delay or _delay_unit(value) in (None, self.target.spec.unit):
            return False
        return split_quantity(value).unit != ""

    def _refuse_other_types(self, value: object) -> None:
        if isinstance(value, bool) or not isinstance(value, int | float | Decimal):
            expected = describe_unit(self.target.spec.unit, decibels=is_gain(self.target.spec))
            raise QuantityError(describe(value), expected, "write a number, or a text with a unit")

    def _refuse_bare_samples(self, value: object) -> None:
        """In a config a bare delay is seconds, so that on an axis in samples only 0 is meant."""
        if self.target.spec.unit != "samples":
            return
        quantity = split_quantity(value)
        if not quantity.unit and quantity.number != 0:
            expected = "a number of samples with its unit; a bare delay is in seconds"
            raise QuantityError(describe(value), expected, f'write "{quantity.number} samples"')

    def describe(self) -> str:
        """Say what is legal."""
        return describe_parameter(self.target.spec)

    def is_legal(self, number: Decimal) -> bool:
        """Whether a value that was read lies within the parameter's range, rounding included."""
        spec = self.target.spec
        stored = self.store(number) if number or not self.target.is_rate else 0.0
        if not math.isfinite(stored):
            return False
        return stored >= spec.low if spec.low_is_legal else stored > spec.low

    def store(self, number: Decimal) -> float:
        """Round a value that was read to the float64 that is stored."""
        return to_float(self.stored_decimal(number))

    def stored_decimal(self, number: Decimal) -> Decimal:
        """Convert a value that was read to the stored unit, before rounding."""
        return reciprocal(number) if self.target.is_rate else number


def find_display_unit(spec: ParameterSpec, values: Iterable[object]) -> str:
    """Find the unit for people: the one in which the first text is written, else the usual one."""
    for value in values:
        if not isinstance(value, str):
            continue
        try:
            unit = split_quantity(value).unit
        except QuantityError:
            continue
        if unit and is_scale(spec.unit, unit):
            return "samples" if spec.unit == "samples" else unit
    return spec.display_unit
