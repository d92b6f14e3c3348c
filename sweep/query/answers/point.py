"""The answer about one node."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from sweep.grid import Grid
from sweep.quantities import format_quantity
from sweep.query.answers.plain import plain, show_value
from sweep.query.select import Value


@dataclass(frozen=True)
class PointAnswer:
    """What is stored at one node, and what follows from it."""

    atlas_id: str
    """Of the atlas asked."""
    grid: Grid = field(repr=False, compare=False)
    """Of the atlas."""
    node: tuple[int, ...]
    """Index along every axis."""
    at: Mapping[str, Value]
    """The node's coordinate on every axis."""
    measures: Mapping[str, float]
    """Stored values; NaN where unknown."""
    derived: Mapping[str, float]
    """What follows from them: radius, decay_time (s), dominant_damping, hz."""
    stable: bool | None
    """``None`` when unknown."""
    nominal: tuple[str, ...]
    """Axes that the question did not name, taken at their nominal node."""
    moved: Mapping[str, float]
    """Axes where the nearest node was taken, with what was asked in the unit of the axis."""
    cautions: tuple[str, ...]
    """Codes of the cautions that apply."""

    @property
    def parameters(self) -> dict[str, float]:
        """Every parameter of the loop at this node by dotted path, in its stored unit."""
        block = tuple(slice(index, index + 1) for index in self.node)
        return {path: float(v.reshape(-1)[0]) for path, v in self.grid.parameters(block).items()}

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on.

        Values are in SI and named without units, but for ``hz``; coordinates, in ``at`` and
        ``moved``, are in the unit of their axis.
        """
        names = ("atlas_id", "at", "measures", "derived", "stable", "nominal", "moved", "cautions")
        document: dict[str, Any] = plain({name: getattr(self, name) for name in names})
        document["nodes"] = 1
        document["unknown"] = int(self.stable is None)
        return document

    def __repr__(self) -> str:
        place = ", ".join(
            f"{name}={show_value(self.grid.axis(name), value)}" for name, value in self.at.items()
        )
        numbers = ", ".join(
            f"{name} {format_quantity(value, '1')}" for name, value in self.measures.items()
        )
        verdict = {True: "stable", False: "not stable", None: "unknown"}[self.stable]
        return f"Point {place}, atlas {self.atlas_id[:8]}\n  {verdict}: {numbers}"
