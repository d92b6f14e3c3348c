"""Answers: frozen records that print themselves for people and write themselves for programs.

In the JSON documents there is no NaN and no Infinity: what is unknown is null, what is unbounded is
the text "inf" or "-inf".
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Axis, Grid
from sweep.quantities import format_quantity
from sweep.query.cautions import caution_line
from sweep.query.select import Value

EndKind = Literal["boundary", "axis_end", "unknown"]
CrossingKind = Literal["drift", "alternation", "oscillation"]


def plain(value: Any) -> Any:  # noqa: ANN401 - whatever JSON holds, in and out
    """Make a value fit for strict JSON.

    >>> plain({"a": math.nan, "b": (1, -math.inf)})
    {'a': None, 'b': [1, '-inf']}
    """
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [plain(item) for item in value]
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None if math.isnan(value) else ("inf" if value > 0 else "-inf")
    return value


def show_value(axis: Axis, value: Value) -> str:
    """A coordinate with its unit as an engineer would write it, or a row's label."""
    if isinstance(value, str):
        return value
    return format_quantity(value, axis.unit, axis.display_unit)


@dataclass(frozen=True)
class End:
    """Where a stable interval ends, and why."""

    value: Value
    """Coordinate in the axis's stored unit; a row's label on a row axis."""
    end: EndKind
    """``boundary``: the loop becomes unstable; ``axis_end``: stable as far as the axis goes;
    ``unknown``: the next node is not computed."""
    between: tuple[Value, Value] | None = None
    """The stable node and the other node; ``None`` at an axis end."""
    kind: CrossingKind | None = None
    """How stability is lost there; ``None`` unless a boundary."""
    hz: float | None = None
    """Frequency of the mode that is lost, Hz."""
    worst: Mapping[str, Value] = field(default_factory=dict)
    """The tolerance node that is the worst at the other node, by axis."""
    share: float | None = None
    """On a row axis, how far the boundary lies from the stable row (0) to the other (1)."""

    def to_json(self, side: str) -> dict[str, Any]:
        """Its keys in an interval's document, for ``side`` low or high."""
        document = {
            side: self.value,
            f"{side}_end": self.end,
            f"{side}_between": self.between,
            f"{side}_kind": self.kind,
            f"{side}_hz": self.hz,
            f"{side}_worst": dict(self.worst),
        }
        if self.share is not None:
            document[f"{side}_share"] = self.share
        return document


@dataclass(frozen=True)
class Interval:
    """One stable stretch of an axis."""

    low: End
    """Its lower end."""
    high: End
    """Its upper end."""

    def to_json(self) -> dict[str, Any]:
        """Its document."""
        return self.low.to_json("low") | self.high.to_json("high")


@dataclass(frozen=True)
class LimitsRow:
    """The stable intervals along one line of nodes."""

    at: Mapping[str, Value]
    """Where the line runs: every axis that is neither asked along nor taken at its worst."""
    intervals: tuple[Interval, ...]
    """From low to high; empty when no node is stable."""
    nodes: int
    """Nodes of the line, tolerance nodes included."""
    unknown: int
    """How many of them are not computed."""


@dataclass(frozen=True)
class LimitsAnswer:
    """The stability boundary along one axis."""

    atlas_id: str
    """Of the atlas asked."""
    along: str
    """The axis."""
    grid: Grid = field(repr=False, compare=False)
    """Of the atlas."""
    rows: tuple[LimitsRow, ...]
    """One for each combination of the listed axes, in the order of the axes."""
    rows_in_all: int
    """How many there are; more than ``rows`` when the cap left some out."""
    listed: tuple[str, ...]
    """Axes that the rows differ in."""
    over: Mapping[str, tuple[Value, ...]]
    """The tolerance box: (lowest, highest) node of each axis taken at its worst; labels of rows."""
    widened: tuple[str, ...]
    """Axes of the box with a bound between nodes, where the next node outward was taken in."""
    bracketed: Mapping[str, tuple[Value, Value]]
    """Axes fixed between two nodes, where the worse of the two counts."""
    nominal: tuple[str, ...]
    """Axes taken at their nominal node."""
    cautions: tuple[str, ...]
    """Codes of the cautions that apply."""

    @property
    def unit(self) -> str:
        """Unit of the limits."""
        return self.grid.axis(self.along).unit

    @property
    def nodes(self) -> int:
        """Nodes that the answer rests on."""
        return sum(row.nodes for row in self.rows)

    @property
    def unknown(self) -> int:
        """How many of them are not computed."""
        return sum(row.unknown for row in self.rows)

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        rows = [
            {
                "at": row.at,
                "unknown": row.unknown,
                "nodes": row.nodes,
                "intervals": [interval.to_json() for interval in row.intervals],
            }
            for row in self.rows
        ]
        document: dict[str, Any] = {"atlas_id": self.atlas_id, "along": self.along}
        document |= {"unit": self.unit, "rows": rows}
        names = ("rows_in_all", "listed", "over", "widened", "bracketed", "nominal")
        document |= {name: getattr(self, name) for name in names}
        document |= {"nodes": self.nodes, "unknown": self.unknown, "cautions": self.cautions}
        found: dict[str, Any] = plain(document)
        return found

    def __repr__(self) -> str:
        axis = self.grid.axis(self.along)
        lines = [f"Limits along {self.along}, atlas {self.atlas_id[:8]}"]
        for row in self.rows[:20]:
            place = ", ".join(f"{name}={value}" for name, value in row.at.items())
            stable = "; ".join(
                f"{show_value(axis, item.low.value)} to {show_value(axis, item.high.value)}"
                for item in row.intervals
            )
            lines.append(f"  {place or 'everywhere'}: {stable or 'no stable node'}")
        if self.rows_in_all > 20:
            lines.append(f"  and {self.rows_in_all - 20:,} more rows")
        lines.append(f"  {self.nodes:,} nodes, {self.unknown:,} unknown; cautions: see .cautions")
        return "\n".join(lines)


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
        names = ("atlas_id", "x", "y", "at", "nominal", "moved", "cautions")
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
