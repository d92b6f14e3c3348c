"""The answer behind a map: one measure over two axes, with the stability boundary."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Grid
from sweep.query.answers.plain import plain
from sweep.query.cautions import caution_line
from sweep.query.select import Value


@dataclass(frozen=True)
class Mark:
    """A named design that lies in a plane."""

    name: str
    """Of the design."""
    x: float
    """In the stored unit of the x axis."""
    y: float
    """In the stored unit of the y axis."""


@dataclass(frozen=True, eq=False)
class PlaneAnswer:
    """The logarithm of the spectral radius over two axes, the others held."""

    atlas_id: str
    """Of the atlas asked."""
    title: str
    """Of the atlas."""
    grid: Grid = field(repr=False)
    """Of the atlas."""
    x: str
    """The axis to the right."""
    y: str
    """The axis upwards."""
    log_radius: NDArray[np.float32] = field(repr=False)
    """Shape (nodes of y, nodes of x); NaN where unknown."""
    boundary: NDArray[np.float64] = field(repr=False)
    """Shape (pieces, 2, 2): the two ends of each straight piece of the stability boundary as (x, y)
    in stored units, each within one cell; it meets the limits along both axes. Empty when an edge
    is a row axis, between whose nodes there is nothing."""
    period_s: NDArray[np.float64] = field(repr=False)
    """Sample period, s; broadcasts to the shape of ``log_radius``."""
    at: Mapping[str, Value]
    """The node at which every other axis is held."""
    nominal: tuple[str, ...]
    """Those of them that the question did not name, held at their nominal node."""
    moved: Mapping[str, float]
    """Axes where the nearest node was taken, with what was asked in the unit of the axis."""
    marks: tuple[Mark, ...]
    """Named designs that lie in the plane."""
    threshold: float
    """Nodes with a log_radius below it are stable."""
    largest_jump: float | None
    """Largest difference of log_radius between neighbours of which one is stable."""
    cautions: tuple[str, ...]
    """Codes of the cautions that apply."""

    @property
    def stable(self) -> int:
        """Stable nodes."""
        return int((self.log_radius < self.threshold).sum())

    @property
    def unknown(self) -> int:
        """Nodes that are not computed."""
        return int(np.isnan(self.log_radius).sum())

    def to_json(self) -> dict[str, Any]:
        """What the plane is and how much of it is stable; its values are in the atlas."""
        names = ("atlas_id", "x", "y", "at", "nominal", "moved", "largest_jump", "cautions")
        document: dict[str, Any] = plain({name: getattr(self, name) for name in names})
        counts = {"nodes": self.log_radius.size, "stable": self.stable, "unknown": self.unknown}
        return document | counts | {"marks": [mark.name for mark in self.marks]}

    def __repr__(self) -> str:
        held = ", ".join(f"{name}={value}" for name, value in self.at.items())
        return (
            f"Plane {self.x} by {self.y} at {held or 'nothing else'}, atlas {self.atlas_id[:8]}\n"
            f"  {self.log_radius.size:,} nodes, {self.stable:,} stable, {self.unknown:,} unknown\n"
            f"  {caution_line(self.cautions)}"
        )
