"""The answer about every design at once: which survive a box, and how far they may drift."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

from sweep.config import Requirement
from sweep.grid import Grid
from sweep.query.answers.plain import plain, show_value
from sweep.query.cautions import caution_line
from sweep.query.requirement import requirement_name, requirement_text
from sweep.query.select import Value

if TYPE_CHECKING:
    import xarray


_PLAIN_FIELDS = (
    "atlas_id",
    "case",
    "over",
    "design_nodes",
    "meets",
    "fails",
    "unknown",
    "excluded",
    "regions",
    "share",
    "widened",
    "at",
    "bracketed",
    "shaken",
    "free",
    "largest_jump",
    "nodes",
    "unknown_nodes",
    "cautions",
)
"""Fields that stand in the document as they are."""


@dataclass(frozen=True)
class LargestBox:
    """The box of design nodes, all meeting, that holds the most nodes."""

    ends: Mapping[str, tuple[Value, Value]]
    """Lowest and highest node along every free axis, both inside."""
    nodes: int
    """Nodes in the box."""
    exact: bool
    """Whether it is proven that no box holds more."""
    at_most: int
    """No box holds more nodes than this."""
    axis_ends: tuple[tuple[str, str], ...] = ()
    """Sides at which the axis itself ends, so that the box might go on: (axis, low or high)."""
    around: Mapping[str, Value] = field(default_factory=dict)
    """The design that it was asked to hold; empty when it could lie anywhere."""


@dataclass(frozen=True)
class WorstNode:
    """The node with the largest log_radius among all that the meeting designs have to survive."""

    at: Mapping[str, Value]
    """Design and tolerances."""
    log_radius: float
    """There."""
    decay_time_s: float
    """Decay time constant there, s."""


@dataclass(frozen=True, eq=False)
class RobustAnswer:
    """Which designs meet a requirement at every node of a box."""

    atlas_id: str
    """Of the atlas asked."""
    title: str
    """Of the atlas."""
    grid: Grid = field(repr=False)
    """Of the atlas."""
    case: str | None
    """Name of the case; ``None`` when the question said itself what is required."""
    requirements: tuple[Requirement, ...]
    """What is required, stability first."""
    over: Mapping[str, tuple[Value, ...]]
    """The tolerance box: lowest and highest node of each axis; labels of rows."""
    widened: tuple[str, ...]
    """Axes of the box with a bound between nodes, where the next node outward was taken in."""
    at: Mapping[str, Value]
    """Design axes that were fixed."""
    bracketed: Mapping[str, tuple[Value, Value]]
    """Those of them that take in several nodes, with the outermost two; the worst counts."""
    shaken: Mapping[str, str]
    """Design axes that may move by themselves, and by how much."""
    free: tuple[str, ...]
    """Design axes that tell designs apart."""
    design_nodes: int
    """Designs in all; meets + fails + unknown + excluded."""
    meets: int
    """Designs that meet everything at every node of the box."""
    fails: int
    """Designs that are known to fail somewhere."""
    unknown: int
    """Designs with an unknown node in the box and no known failure."""
    excluded: int
    """Designs that cannot be built: the processor takes longer than a period."""
    regions: int
    """Connected regions of designs that meet."""
    largest_box: LargestBox | None
    """``None`` when no design meets, or that around which it was asked does not."""
    worst: WorstNode | None
    """``None`` when no design meets."""
    largest_jump: float | None
    """Largest difference of log_radius between neighbours, one of which meets."""
    nodes: int
    """Nodes that the answer rests on."""
    unknown_nodes: int
    """How many of them are not known."""
    cautions: tuple[str, ...]
    """Codes of the cautions that apply."""
    make_dataset: Callable[[], xarray.Dataset] = field(repr=False)
    """Makes `dataset`."""

    @property
    def share(self) -> float:
        """Designs that meet, as a share of all; 0 to 1."""
        return self.meets / self.design_nodes

    @cached_property
    def dataset(self) -> xarray.Dataset:
        """Every design over the design axes.

        ``verdict`` (1 meets, 0 fails, -1 unknown, -2 cannot be built), ``unknown`` (nodes of the
        box that are not known) and, for ``log_radius`` and each quantity of the requirement, its
        worst value over the known nodes of the box, with the coordinates where it is attained as
        ``<quantity>_at_<axis>``.
        """
        return self.make_dataset()

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        document: dict[str, Any] = {name: getattr(self, name) for name in _PLAIN_FIELDS}
        document["requirements"] = {requirement_name(r): r.limit for r in self.requirements}
        box, worst = self.largest_box, self.worst
        document["largest_box"] = box and box.ends
        document["largest_box_nodes"] = box.nodes if box else 0
        document["largest_box_exact"] = box.exact if box else True
        document["largest_box_at_most"] = box.at_most if box else 0
        document["largest_box_axis_ends"] = box.axis_ends if box else ()
        document["worst"] = worst and {
            "at": worst.at,
            "log_radius": worst.log_radius,
            "decay_time": worst.decay_time_s,
        }
        found: dict[str, Any] = plain(document)
        return found

    def __repr__(self) -> str:
        required = ", ".join(requirement_text(item) for item in self.requirements)
        lines = [
            f"Robust designs, {self.case or 'no case'} ({required}), atlas {self.atlas_id[:8]}",
        ]
        lines.append(
            f"  {self.meets:,} of {self.design_nodes:,} designs meet, {self.fails:,} fail, "
            f"{self.unknown:,} unknown, {self.excluded:,} cannot be built; {self.regions} regions"
        )
        if self.largest_box:
            ends = "; ".join(
                f"{name} {show_value(self.grid.axis(name), low)} to "
                f"{show_value(self.grid.axis(name), high)}"
                for name, (low, high) in self.largest_box.ends.items()
            )
            lines.append(f"  largest box: {ends}")
        lines.append(f"  {caution_line(self.cautions)}")
        return "\n".join(lines)
