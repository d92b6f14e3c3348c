"""Random loops over every plant and controller kind, for comparisons of the paths."""

from __future__ import annotations

import math

import numpy as np

from sweep.vocabulary import CONTROLLERS, PLANTS, LoopStructure


def random_loop(rng: np.random.Generator) -> tuple[LoopStructure, dict[str, float]]:
    """One loop: T from 1e-3 to 3 natural periods, delay 0 to 6 samples, damping from 0 to 3.

    The natural period of a plant without a resonance is its time constant, or the time scale of its
    gain.
    """
    plant, controller = str(rng.choice(list(PLANTS))), str(rng.choice(list(CONTROLLERS)))
    parts = (("fieldbus", "samples"), ("wiring", "s"))[: int(rng.integers(1, 3))]
    has_integral = controller in {"pi", "pid"}
    structure = LoopStructure(
        plant,
        controller,
        integral=str(rng.choice(["backward", "forward", "trapezoidal"]))
        if has_integral
        else "backward",
        has_code_period=bool(rng.random() < 0.2),
        delay_parts=parts,
    )
    natural_s = 10 ** rng.uniform(-3, 3)
    period_s = natural_s * 10 ** rng.uniform(-3, math.log10(3))
    values = {"sample_period": period_s} | _plant(plant, natural_s, rng)
    values |= _gains(controller, natural_s, period_s, rng)
    if structure.has_code_period:
        values["controller.code_period"] = period_s * rng.uniform(0.5, 2)
    values["delay.fieldbus"] = float(rng.choice([0, 1, 2, 3, rng.uniform(0, 5)]))
    if len(parts) > 1:
        values["delay.wiring"] = float(rng.choice([0, period_s, rng.uniform(0, period_s)]))
    return structure, {path: float(value) for path, value in values.items()}


def _plant(plant: str, natural_s: float, rng: np.random.Generator) -> dict[str, float]:
    rate = 2 * math.pi / natural_s
    if plant == "oscillator":
        damping = rng.choice([0, 1e-4, 0.01, rng.uniform(0, 1), 1.0, rng.uniform(1, 3)])
        return {
            "plant.gain": 1.0,
            "plant.natural_frequency": 1 / natural_s,
            "plant.damping": damping,
        }
    if plant == "lag":
        return {"plant.gain": rng.normal(), "plant.time_constant": natural_s}
    if plant == "lagged_integrator":
        return {"plant.gain": rate, "plant.time_constant": natural_s}
    return {"plant.gain": rate if plant == "integrator" else rate**2}


def _gains(
    controller: str, natural_s: float, period_s: float, rng: np.random.Generator
) -> dict[str, float]:
    rate = 2 * math.pi / natural_s
    gains = {"controller.kp": rng.normal() * 10 ** rng.uniform(-2, 0.5)}
    if "i" in controller:
        gains["controller.ki"] = rng.choice([0, rng.normal() * rate * 10 ** rng.uniform(-2, 0)])
    if "d" in controller:
        gains["controller.kd"] = rng.choice([0, rng.normal() / rate * 10 ** rng.uniform(-2, 0)])
        gains["controller.derivative_filter"] = rng.choice([0, period_s * rng.uniform(0, 10)])
    return gains


def as_block(values: dict[str, float]) -> dict[str, np.ndarray]:
    """The loop as a block of one node."""
    return {path: np.array([value]) for path, value in values.items()}
