"""Checks from outside the project, asked of real stored atlases.

Each check compares an end of a stable interval with a closed form. Which accuracy it asks for is
decided by the loop itself and not by the answer: where the dominant eigenvalue stays one and the
same simple root throughout the cell that holds the boundary, ``log_radius`` is smooth there and the
limit is asked to a ten-thousandth of the axis span; where roots meet or take turns in that cell,
the closed form has to lie between the two nodes that the answer names.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from sweep.compute.run import run_sweep
from sweep.config import parse_config
from sweep.query.atlas import Atlas, open_atlas

Polynomial = Callable[[float], Sequence[float]]
"""Coordinate on the asked axis -> characteristic polynomial in z, highest power first."""

SHARE_OF_SPAN = 1e-4
STEPS_IN_A_CELL = 48


def sweep_atlas(text: str, folder: Path) -> Atlas:
    """Config text -> an atlas on the disk, opened for questions."""
    report = run_sweep(parse_config(text, folder=folder, source="check.toml"), folder, workers=1)
    assert report.tiles_done == report.tiles
    return open_atlas(report.atlas)


def samples(*delays: float) -> str:
    """Delays in samples as the nodes of an axis."""
    return ", ".join(f'"{delay} samples"' for delay in delays)


def periods(*ratios: float | str) -> str:
    """Multiples of the natural period as the nodes of an axis."""
    return ", ".join(f'"{ratio} periods"' for ratio in ratios)


def roots_of(polynomial: Sequence[float]) -> np.ndarray:
    """Roots, the largest first, of a conjugate pair the upper one first."""
    roots = np.roots(polynomial)
    return roots[np.lexsort((-roots.imag, -np.round(np.abs(roots), 13)))]


def stable(polynomial: Sequence[float]) -> bool:
    return bool(np.abs(np.roots(polynomial)).max() < 1)


def is_smooth(polynomial: Polynomial, low: float, high: float) -> bool:
    """Whether one simple root is the dominant one at every place of a cell.

    From place to place it moves by less than a third of its distance to the nearest other root,
    its own conjugate included, and it is real throughout or complex throughout. What happens beyond
    the cell, roots that meet just outside it included, is no excuse.
    """
    path = [roots_of(polynomial(x)) for x in np.linspace(low, high, STEPS_IN_A_CELL + 1)]
    for before, after in itertools.pairwise(path):
        if (before[0].imag == 0) != (after[0].imag == 0):
            return False
        room = np.abs(before[1:] - before[0]).min(initial=math.inf)
        if abs(after[0] - before[0]) > room / 3:
            return False
    return True


@dataclass
class Line:
    """What theory says about one line of nodes, and the row of limits that answers it."""

    atlas: Atlas
    along: str
    row: object
    polynomial: Polynomial
    period_s: float | None
    checked: dict[str, int] = field(default_factory=lambda: {"smooth": 0, "between": 0})

    @property
    def nodes(self) -> np.ndarray:
        return self.atlas.grid.axis(self.along).coordinates

    def expect(self, *intervals: tuple[float | None, float | None]) -> dict[str, int]:
        """Hold the row's intervals to ``intervals``; ``None`` stands for an axis end.

        A stretch that holds no node cannot be seen and is left out of both sides.
        """
        assert len(self.nodes) == 201
        seen = [pair for pair in intervals if self._holds_a_node(*pair)]
        found = self.row.intervals
        assert len(found) == len(seen), (self.row.at, seen, found)
        for interval, pair in zip(found, seen, strict=True):
            self._check_end(interval.low, pair[0])
            self._check_end(interval.high, pair[1])
        return self.checked

    def _holds_a_node(self, low: float | None, high: float | None) -> bool:
        inside = self.nodes > (-math.inf if low is None else low)
        return bool((inside & (self.nodes < (math.inf if high is None else high))).any())

    def _check_end(self, end, value: float | None) -> None:
        if value is None:
            assert end.end == "axis_end"
            assert end.value in self.nodes[[0, -1]]
            return
        assert end.end == "boundary", (self.row.at, end, value)
        low, high = sorted(end.between)
        place = int(np.searchsorted(self.nodes, low))
        assert (low, high) == tuple(self.nodes[place : place + 2])
        room = 1e-3 * (high - low)
        assert np.abs(self.nodes - value).min() > room, "a node lies on the boundary"
        assert low < value < high, (self.row.at, end, value)
        if is_smooth(self.polynomial, low, high):
            self.checked["smooth"] += 1
            span = self.nodes[-1] - self.nodes[0]
            assert abs(end.value - value) <= SHARE_OF_SPAN * span, (self.row.at, end, value)
            if self.period_s is not None:
                self._check_kind(end, value)
        else:
            self.checked["between"] += 1
            assert low <= end.value <= high

    def _check_kind(self, end, value: float) -> None:
        """The root that stands on the unit circle at the boundary says how stability is lost."""
        angle = abs(float(np.angle(roots_of(self.polynomial(value))[0])))
        hz = angle / (2 * math.pi * self.period_s)
        kind = "oscillation"
        if min(angle, math.pi - angle) < 1e-5:
            kind = "drift" if angle < 1 else "alternation"
        assert end.kind == kind, (self.row.at, end, angle)
        assert abs(end.hz - hz) <= 2e-3 * hz + 1e-5 / self.period_s, (self.row.at, end, hz)


def oscillator(ratio: float, delay: float, gain: float) -> np.ndarray:
    """Characteristic polynomial of the undamped oscillator under proportional feedback.

    Modified z-transform (Jury 1964; Astrom and Wittenmark 1997, chapter 2; from memory), sampled at
    ``ratio`` natural periods, ``delay`` in samples.
    """
    whole = math.floor(delay)
    theta, phi = 2 * math.pi * ratio, 2 * math.pi * ratio * (delay - whole)
    c = math.cos(theta)
    numerator = [1 - math.cos(theta - phi), math.cos(theta - phi) + math.cos(phi) - 2 * c]
    numerator.append(1 - math.cos(phi))
    denominator = [1, -2 * c, 1, 0] + [0] * whole
    return np.polyadd(denominator, gain * np.array(numerator))


def oscillator_intervals(ratio: float, delay: int) -> list[tuple[float, float]]:
    """Stable gains of that loop for a whole delay: own derivation, after Hsu and Bhatt 1966.

    A root on the unit circle makes z^(delay + 1/2) real, so that every boundary is a straight line
    in (c, gain (1 - c)); each stretch between neighbouring ones is decided by one root test.
    """
    c = math.cos(2 * math.pi * ratio)
    ends = [0.0]
    for n in range(delay + 1):
        phi = 2 * math.pi * n / (2 * delay + 1)
        ends.append((-1) ** (n + 1) * (math.cos(phi) - c) / math.cos(phi / 2) / (1 - c))
    pairs = itertools.pairwise(sorted(ends))
    return [
        (a, b) for a, b in pairs if b - a > 1e-9 and stable(oscillator(ratio, delay, (a + b) / 2))
    ]


def damped(ratio: float, damping: float, gain: float) -> np.ndarray:
    """The damped oscillator under proportional feedback without delay, z^2 + a1 z + a2.

    Zero-order-hold table of Astrom and Wittenmark 1997, chapter 2 (from memory); above critical
    damping with an imaginary damped frequency.
    """
    b1, b2, a1, a2 = damped_coefficients(2 * math.pi * ratio, damping)
    return np.array([1, a1 + gain * b1, a2 + gain * b2])


def damped_coefficients(w0_t: float, damping: float) -> tuple[float, float, float, float]:
    """b1, b2, a1, a2 of (b1 z + b2) / (z^2 + a1 z + a2) at ``w0_t`` = w0 T."""
    root = np.sqrt(complex(1 - damping**2))
    al, be, ga = math.exp(-damping * w0_t), np.cos(root * w0_t), np.sin(root * w0_t)
    b1 = 1 - al * (be + damping / root * ga)
    b2 = al**2 + al * (damping / root * ga - be)
    return float(b1.real), float(b2.real), float((-2 * al * be).real), al**2
