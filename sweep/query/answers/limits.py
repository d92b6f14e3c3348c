"""The answer about limits: stable intervals with both of their ends."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from sweep.grid import Grid
from sweep.query.answers.plain import plain, show_value
from sweep.query.select import Value

EndKind = Literal["boundary", "axis_end", "unknown", "excluded"]
CrossingKind = Literal["drift", "alternation", "oscillation"]


@dataclass(frozen=True)
class End:
    """Where a stable interval ends, and why."""

    value: Value
    """Coordinate in the axis's stored unit; a row's label on a row axis."""
    end: EndKind
    """``boundary``: the loop becomes unstable; ``axis_end``: stable as far as the axis goes;
    ``unknown``: the next node is not computed; ``excluded``: it cannot be built, since the
    processor takes longer than a sample period."""
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
    excluded: int = 0
    """Nodes along the asked axis at which the loop cannot be built: somewhere in the box the
    processor takes longer than a sample period."""
    largest_jump: float | None = None
    """Largest difference of log_radius between the two nodes of a boundary; ``None`` without."""


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

    @property
    def excluded(self) -> int:
        """Nodes along the asked axis at which the loop cannot be built, of all rows."""
        return sum(row.excluded for row in self.rows)

    @property
    def largest_jump(self) -> float | None:
        """Largest difference of log_radius between the two nodes of any boundary."""
        jumps = [row.largest_jump for row in self.rows if row.largest_jump is not None]
        return max(jumps, default=None)

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        rows = [
            {
                "at": row.at,
                "unknown": row.unknown,
                "excluded": row.excluded,
                "nodes": row.nodes,
                "intervals": [interval.to_json() for interval in row.intervals],
            }
            for row in self.rows
        ]
        document: dict[str, Any] = {"atlas_id": self.atlas_id, "along": self.along}
        document |= {"unit": self.unit, "rows": rows}
        names = ("rows_in_all", "listed", "over", "widened", "bracketed", "nominal", "largest_jump")
        document |= {name: getattr(self, name) for name in names}
        document |= {"nodes": self.nodes, "unknown": self.unknown, "excluded": self.excluded}
        document["cautions"] = self.cautions
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
            lines.append(
                f"  {place or 'everywhere'}: {stable or 'no stable node that can be built'}"
            )
        if self.rows_in_all > 20:
            lines.append(f"  and {self.rows_in_all - 20:,} more rows")
        lines.append(f"  {self.nodes:,} nodes, {self.unknown:,} unknown; cautions: see .cautions")
        return "\n".join(lines)
