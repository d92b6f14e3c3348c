"""The vocabulary: which plants, controllers, holds and measures exist, and how each is described.

Plain data without arithmetic, so that a config can be checked, an atlas opened and a question asked
without loading the physics. `sweep.loop` and `sweep.measures` hold the arithmetic in tables with
the same keys; a test holds the two sides together.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True)
class ParameterSpec:
    """One number that a loop may need."""

    name: str
    """Last part of its dotted path, such as ``damping``."""
    unit: str
    """Unit in which it is stored: ``s``, ``Hz``, ``1``, ``1/s`` or ``samples``."""
    long_name: str
    """The trade's name for it."""
    low: float = -math.inf
    """Lower end of the legal range."""
    low_is_legal: bool = True
    """Whether ``low`` itself is legal; ``False`` means strictly above."""
    default: float | None = None
    """Value when the config gives none; ``None`` means that it must be given."""
    display_unit: str = ""
    """Unit for people; empty means ``unit``."""


@dataclass(frozen=True)
class Kind:
    """A kind of plant or controller."""

    name: str
    """The word in the config."""
    formula: str
    """Its formula, for help and for `sweep info`."""
    parameters: tuple[ParameterSpec, ...]
    """What it needs, in the order in which it is shown."""
    options: tuple[tuple[str, tuple[str, ...]], ...] = ()
    """Formula options as (name, legal values); the first value is the default."""
    version: int = 1
    """Physics version; raised whenever the same parameters give other numbers."""


def _positive(name: str, unit: str, long_name: str, display_unit: str = "") -> ParameterSpec:
    return ParameterSpec(name, unit, long_name, 0.0, False, None, display_unit)


_PLANT_GAIN = ParameterSpec("gain", "1", "plant gain", default=1.0)
_DAMPING = ParameterSpec("damping", "1", "damping ratio", low=0.0)
_FREQUENCY = _positive("natural_frequency", "Hz", "natural frequency")
_TIME_CONSTANT = _positive("time_constant", "s", "time constant", "ms")

SAMPLE_PERIOD = _positive("sample_period", "s", "sample period", "ms")
SAMPLE_RATE = _positive("sample_rate", "Hz", "sample rate")
CODE_PERIOD = _positive("code_period", "s", "period that the code's coefficients assume", "ms")

PLANTS: dict[str, Kind] = {
    kind.name: kind
    for kind in (
        Kind(
            "oscillator",
            "gain wn^2 / (s^2 + 2 damping wn s + wn^2), wn = 2 pi natural_frequency",
            (_FREQUENCY, _DAMPING, _PLANT_GAIN),
        ),
        Kind("integrator", "gain / s", (_PLANT_GAIN,)),
        Kind("double_integrator", "gain / s^2", (_PLANT_GAIN,)),
        Kind("lag", "gain / (time_constant s + 1)", (_TIME_CONSTANT, _PLANT_GAIN)),
        Kind(
            "lagged_integrator",
            "gain / (s (time_constant s + 1))",
            (_TIME_CONSTANT, _PLANT_GAIN),
        ),
    )
}

_KP = ParameterSpec("kp", "1", "proportional gain")
_KI = ParameterSpec("ki", "1/s", "integral gain")
_KD = ParameterSpec("kd", "s", "derivative gain")
_FILTER = ParameterSpec(
    "derivative_filter",
    "s",
    "derivative filter time constant",
    low=0.0,
    default=0.0,
    display_unit="ms",
)
_INTEGRAL = (("integral", ("backward", "forward", "trapezoidal")),)

CONTROLLERS: dict[str, Kind] = {
    kind.name: kind
    for kind in (
        Kind("p", "kp", (_KP,)),
        Kind("pi", "kp + ki / s, sampled by the rule `integral`", (_KP, _KI), _INTEGRAL),
        Kind(
            "pd",
            "kp + kd s / (derivative_filter s + 1), backward difference",
            (_KP, _KD, _FILTER),
        ),
        Kind(
            "pid",
            "kp + ki / s + kd s / (derivative_filter s + 1), sampled by the rules of pi and pd",
            (_KP, _KI, _KD, _FILTER),
            _INTEGRAL,
        ),
    )
}

HOLDS: dict[str, Kind] = {
    "zero_order": Kind("zero_order", "the output steps to u_k at kT + delay and keeps it", ()),
}

MAX_DELAY_SAMPLES = 256
"""Longest delay at any node, in samples."""


@dataclass(frozen=True)
class MeasureSpec:
    """One quantity that is computed at every node and stored."""

    name: str
    """Name of the stored variable."""
    unit: str
    """Its unit."""
    long_name: str
    """What it is, in the trade's words."""
    version: int = 1
    """Raised whenever the same node gives another value."""
    better: Literal["low", "high", ""] = "low"
    """Whether less or more of it is better; empty when neither is."""


MEASURES: dict[str, MeasureSpec] = {
    measure.name: measure
    for measure in (
        MeasureSpec("log_radius", "1", "natural logarithm of the spectral radius"),
        MeasureSpec(
            "mode_angle", "rad", "argument of the dominant eigenvalue, per sample", better=""
        ),
    )
}

ALWAYS_COMPUTED = ("log_radius", "mode_angle")
"""Measures that every atlas holds."""

STABILITY_THRESHOLD = -1e-9
"""A node is stable when its log_radius lies below this; a marginal loop is not stable."""

LOG_RADIUS_FLOOR = -36.0
"""Stored in place of anything lower; a deadbeat loop's logarithm is minus infinity."""

DERIVED: dict[str, MeasureSpec] = {
    measure.name: measure
    for measure in (
        MeasureSpec("radius", "1", "spectral radius"),
        MeasureSpec("decay_time", "s", "decay time constant, -T / log_radius"),
        MeasureSpec(
            "dominant_damping", "1", "damping ratio of the dominant eigenvalue", better="high"
        ),
    )
}
"""What follows from stored measures and coordinates, and may be named in a requirement."""


@dataclass(frozen=True)
class LoopStructure:
    """Everything that decides a loop's numbers except the numbers themselves.

    Two loops with equal structure are computed by the same formulas; only their parameters differ.
    """

    plant: str
    """A key of `PLANTS`."""
    controller: str
    """A key of `CONTROLLERS`."""
    integral: str = "backward"
    """Integral rule; meaningful where the controller has one."""
    has_code_period: bool = False
    """Whether ``controller.code_period`` is a parameter; else the code's period is the loop's."""
    delay_parts: tuple[tuple[str, str], ...] = ()
    """Delay parts as (name, unit), unit ``s`` or ``samples``, sorted by name."""
    hold: str = "zero_order"
    """A key of `HOLDS`."""

    def parameters(self) -> dict[str, ParameterSpec]:
        """Every parameter of the loop by dotted path, in the order in which it is shown."""
        specs = {"sample_period": SAMPLE_PERIOD}
        specs |= {f"plant.{spec.name}": spec for spec in PLANTS[self.plant].parameters}
        controller = CONTROLLERS[self.controller].parameters
        specs |= {f"controller.{spec.name}": spec for spec in controller}
        if self.has_code_period:
            specs["controller.code_period"] = CODE_PERIOD
        for name, unit in self.delay_parts:
            label = f"delay part {name}"
            display = "samples" if unit == "samples" else "us"
            specs[f"delay.{name}"] = ParameterSpec(name, unit, label, 0.0, display_unit=display)
        return specs


def coordinate_name(path: str, paths: list[str] | tuple[str, ...]) -> str:
    """Name under which a parameter is stored: its last name if unique in the loop, else its path.

    >>> coordinate_name("plant.gain", ["plant.gain", "controller.kp"])
    'gain'
    >>> coordinate_name("plant.gain", ["plant.gain", "delay.gain"])
    'plant.gain'
    """
    last = path.rpartition(".")[2]
    shared = [other for other in paths if other.rpartition(".")[2] == last]
    return last if len(shared) <= 1 else path
