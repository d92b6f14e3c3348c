"""Quantities: "5 ms", "4 kHz" or "1.5 samples" on one side, SI numbers on the other.

Numbers are decimal until they are rounded once, by `to_float`, so that one value written in several
ways is one float64. Units are exact decimal factors, except those that need pi or a logarithm.

>>> to_float(parse_quantity("2 ms", "s")) == to_float(parse_quantity("0.002", "s")) == 0.002
True
>>> format_quantity(0.002, "s")
'2 ms'
"""

from __future__ import annotations

import decimal
import difflib
import math
import re
from dataclasses import dataclass
from decimal import Decimal
from typing import Final

from sweep.errors import QuantityError

CONTEXT: Final = decimal.Context(
    prec=40,
    rounding=decimal.ROUND_HALF_EVEN,
    Emin=-999_999,
    Emax=999_999,
    traps=[decimal.InvalidOperation, decimal.DivisionByZero, decimal.Overflow],
)
"""Arithmetic of every coordinate: 40 digits, so that only the rounding to float64 is felt."""

PI: Final = Decimal("3.14159265358979323846264338327950288419716939937510582097494459")
_ONE: Final = Decimal(1)
_WIDE: Final = decimal.Context(prec=60)
_RADIANS_PER_SECOND: Final = _WIDE.divide(_ONE, _WIDE.multiply(Decimal(2), PI))
_DEGREE: Final = _WIDE.divide(PI, Decimal(180))

_SCALES: Final[dict[str, dict[str, Decimal]]] = {
    "s": {"s": _ONE, "ms": Decimal("1e-3"), "us": Decimal("1e-6"), "ns": Decimal("1e-9")},
    "Hz": {
        "Hz": _ONE,
        "kHz": Decimal("1e3"),
        "MHz": Decimal("1e6"),
        "rad/s": _RADIANS_PER_SECOND,
    },
    "samples": {"samples": _ONE, "sample": _ONE},
    "1": {"%": Decimal("0.01")},
    "1/s": {"1/s": _ONE},
    "rad": {"rad": _ONE, "deg": _DEGREE},
}
"""Stored unit -> the units in which it may be written -> how much of the stored unit that is."""

_ALIASES: Final = {"µs": "us", "μs": "us", "period": "periods"}
_EXAMPLES: Final = {
    "s": 'a time such as 0.005 or "5 ms"',
    "Hz": 'a frequency such as 50 or "50 Hz"',
    "samples": 'a number of samples such as "1.5 samples"',
    "1": "a plain number such as 0.4",
    "1/s": 'a number per second such as 3 or "3 1/s"',
    "rad": 'an angle such as 0.5 or "30 deg"',
}
_NUMBER: Final = re.compile(
    r"\s*([+-]?(?:[0-9][0-9_]*\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)"
    r"(?:\s+(1/s)|\s*([^\W\d_][^\s,]*|%))?\s*"
)
_LONGEST_TEXT: Final = 200
_ANY_QUANTITY: Final = 'a number, or a text such as "5 ms"'
_WRITE_ONE: Final = "write a number, or a text with a unit"
_SMALLEST: Final = Decimal("1e-300")
_LARGEST: Final = Decimal("1e300")
_FINITE: Final = "a finite number that double precision can hold"
_SMALLER: Final = "give a number of magnitude between 1e-300 and 1e300, or 0"


@dataclass(frozen=True)
class Quantity:
    """A number as it was written, with the unit that was written beside it."""

    number: Decimal
    """Rounded to 40 digits; finite as a float64."""
    unit: str
    """Canonical spelling of the unit; empty for a bare number."""


def split_quantity(value: object, expected: str = _ANY_QUANTITY) -> Quantity:
    """Split a number or a text into number and unit, without judging the unit.

    Parameters
    ----------
    value
        int, float, Decimal, or a text such as ``"5 ms"``, ``"5ms"`` or ``"0.4"``.
    expected
        What the message says when it is neither.

    Raises
    ------
    QuantityError
        When it is neither, or when the number is not finite in double precision.

    Examples
    --------
    >>> split_quantity("1.5 samples")
    Quantity(number=Decimal('1.5'), unit='samples')
    """
    if isinstance(value, str):
        return _split_text(value, expected)
    if isinstance(value, bool) or not isinstance(value, int | float | Decimal):
        raise QuantityError(_shown(value), expected, _WRITE_ONE)
    if isinstance(value, int) and value.bit_length() > 1100:
        raise QuantityError("a whole number with hundreds of digits", _FINITE, _SMALLER)
    # a float64 of an array is a float whose own repr is no number
    plain = float(value) if isinstance(value, float) else value
    number = plain if isinstance(plain, Decimal) else Decimal(repr(plain))
    return Quantity(_rounded(number, value), "")


def _split_text(text: str, expected: str) -> Quantity:
    match = _NUMBER.fullmatch(text) if len(text) <= _LONGEST_TEXT else None
    if match is None:
        remedy = "write the number first, then its unit"
        if re.fullmatch(r"\s*[+-]?[0-9]+,[0-9]+.{0,40}", text):
            remedy = "write the decimal mark as a point"
        raise QuantityError(_shown(text), expected, remedy)
    unit = match[2] or match[3] or ""
    try:
        number = Decimal(match[1])
    except decimal.DecimalException as error:
        raise QuantityError(_shown(text), _FINITE, _SMALLER) from error
    return Quantity(_rounded(number, text), _ALIASES.get(unit, unit))


def _rounded(number: Decimal, written: object) -> Decimal:
    """Round to 40 digits what float64 holds with room for sums, differences and reciprocals."""
    if not number.is_finite() or (number and not _SMALLEST <= number.copy_abs() <= _LARGEST):
        raise QuantityError(_shown(written), _FINITE, _SMALLER)
    return CONTEXT.plus(number)


def parse_quantity(
    value: object,
    unit: str,
    *,
    natural_period_s: Decimal | None = None,
    decibels: bool = True,
) -> Decimal:
    """Read a number or a text as a quantity in the stored unit ``unit``.

    Parameters
    ----------
    value
        A number, taken as it is in ``unit``, or a text with or without a unit. A text in another
        unit of the same kind is converted by an exact decimal factor.
    unit
        ``"s"``, ``"Hz"``, ``"samples"``, ``"1"``, ``"1/s"`` or ``"rad"``.
    natural_period_s
        Length of one of the ``periods`` that a time may be given in; without it they are refused.
    decibels
        Whether dB (20 log10) stand for a plain number; they do for gains.

    Returns
    -------
    The value in ``unit``, in decimal, to 40 digits.

    Raises
    ------
    QuantityError
        When the text is no quantity, its unit is of another kind, or the number is not finite.

    Examples
    --------
    >>> parse_quantity("5ms", "s")
    Decimal('0.005')
    >>> parse_quantity("6 dB", "1").quantize(Decimal("0.0001"))
    Decimal('1.9953')
    """
    expected = describe_unit(unit, periods=natural_period_s is not None, decibels=decibels)
    quantity = split_quantity(value, expected)
    if not quantity.unit:
        return quantity.number
    try:
        converted = _convert(quantity, unit, natural_period_s, decibels)
    except decimal.DecimalException as error:
        raise QuantityError(_shown(value), _FINITE, _SMALLER) from error
    if converted is None:
        raise QuantityError(_shown(value), expected, _unit_remedy(quantity.unit, unit))
    return _rounded(converted, value)


def _convert(
    quantity: Quantity, unit: str, natural_period_s: Decimal | None, decibels: bool
) -> Decimal | None:
    scale = _SCALES.get(unit, {}).get(quantity.unit)
    if scale is not None:
        return CONTEXT.multiply(quantity.number, scale)
    if quantity.unit == "periods" and unit == "s" and natural_period_s is not None:
        return CONTEXT.multiply(quantity.number, natural_period_s)
    if quantity.unit == "dB" and unit == "1" and decibels:
        return CONTEXT.power(Decimal(10), CONTEXT.divide(quantity.number, Decimal(20)))
    return None


def _unit_remedy(written: str, unit: str) -> str:
    spellings = [*_SCALES.get(unit, {}), *(["dB"] if unit == "1" else [])]
    same_letters = [name for name in spellings if name.lower() == written.lower()]
    close = same_letters or difflib.get_close_matches(written[:40], spellings, 1, 0.5)
    if close:
        return f'"{close[0]}" was probably meant'
    if written == "periods":
        return (
            "periods are those of the plant's natural_frequency, where it has one, and only a "
            f"sample period is given in them; write it in {_listed(spellings) or 'numbers'}"
        )
    if not spellings:
        return "write the number without a unit"
    return f"write it in {_listed(spellings)}"


def describe_unit(unit: str, *, periods: bool = False, decibels: bool = False) -> str:
    """Say what may be written for a quantity stored in ``unit``, for messages and help.

    >>> describe_unit("s")
    'a time such as 0.005 or "5 ms" (s, ms, us, ns)'
    """
    names = [name for name in _SCALES.get(unit, {}) if name not in ("1/s", "sample")]
    names += ["periods"] * periods + ["dB"] * (decibels and unit == "1")
    example = _EXAMPLES.get(unit, f"a number in {unit}")
    return f"{example} ({', '.join(names)})" if names else example


def is_in_periods(text: str) -> bool:
    """Whether a text is a number of natural periods of the plant.

    >>> is_in_periods("0.04periods"), is_in_periods("5 ms")
    (True, False)
    """
    try:
        return split_quantity(text).unit == "periods"
    except QuantityError:
        return False


def reciprocal(value: Decimal) -> Decimal:
    """1 / value to 40 digits: a period from a rate."""
    return CONTEXT.divide(_ONE, value)


def to_float(value: Decimal) -> float:
    """Round once to float64; minus zero is zero, so that equal values have equal bits."""
    return float(value) + 0.0


def display_factor(unit: str, display_unit: str) -> float:
    """How many ``unit`` one ``display_unit`` is; 1 when it is a label rather than a scale.

    >>> display_factor("s", "ms")
    0.001
    >>> display_factor("1", "V/mrad")
    1.0
    """
    return float(_SCALES.get(unit, {}).get(display_unit, _ONE))


def display_name(unit: str, display_unit: str = "") -> str:
    """Name the unit to print beside a number; empty for a plain number.

    >>> display_name("s", "ms"), display_name("1")
    ('ms', '')
    """
    shown = display_unit or unit
    return "" if shown == "1" else shown


def format_quantity(
    value: float | Decimal, unit: str, display_unit: str = "", *, digits: int | None = 6
) -> str:
    """Write a stored value for people.

    Parameters
    ----------
    value
        In ``unit``.
    unit
        The stored unit.
    display_unit
        The unit to write; when empty, the one of s, ms, us, ns or Hz, kHz, MHz that puts the number
        between 1 and 1000.
    digits
        Significant digits; ``None`` writes as many as `parse_quantity` needs to give back the same
        float64.

    Examples
    --------
    >>> format_quantity(0.0005, "s"), format_quantity(1.0, "samples"), format_quantity(0.4, "1")
    ('500 us', '1 sample', '0.4')
    """
    if math.isnan(value):
        return "unknown"
    exact = value if isinstance(value, Decimal) else Decimal(repr(float(value)))
    shown = display_unit or _friendly_unit(exact, unit)
    number = exact
    if exact.is_finite():
        number = CONTEXT.divide(exact, _SCALES.get(unit, {}).get(shown, _ONE))
    text = _format_number(number, digits)
    if shown == "samples" and text == "1":
        shown = "sample"
    name = display_name(unit, shown)
    return f"{text} {name}" if name else text


def _format_number(number: Decimal, digits: int | None) -> str:
    if not number.is_finite():
        return "inf" if number > 0 else "-inf"
    if digits is not None:
        return f"{to_float(number):.{digits}g}"
    plain = number.normalize(CONTEXT)
    return f"{plain:f}" if -6 <= plain.adjusted() <= 15 else str(plain)


def _friendly_unit(value: Decimal, unit: str) -> str:
    if unit not in ("s", "Hz") or not value.is_finite() or value == 0:
        return unit
    scales = [(name, scale) for name, scale in _SCALES[unit].items() if name != "rad/s"]
    scales.sort(key=lambda item: item[1])
    fitting = [name for name, scale in scales if abs(value) >= scale]
    return fitting[-1] if fitting else scales[0][0]


def is_scale(unit: str, display_unit: str) -> bool:
    """Whether ``display_unit`` is a multiple of ``unit`` rather than a label or a logarithm."""
    return display_unit in _SCALES.get(unit, {})


def _listed(names: list[str]) -> str:
    return "".join(names) if len(names) < 2 else f"{', '.join(names[:-1])} or {names[-1]}"


def _shown(value: object) -> str:
    text = f'"{value[:_LONGEST_TEXT]}"' if isinstance(value, str) else str(value)[:_LONGEST_TEXT]
    text = "".join(letter if letter.isprintable() else "?" for letter in text)
    return text if len(text) <= 60 else f"{text[:57]}..."
