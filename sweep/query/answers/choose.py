"""The answer to which design to choose: the best one at every sample period, and what it costs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from sweep.config import Requirement
from sweep.grid import Grid
from sweep.quantities import format_quantity
from sweep.query.answers.plain import plain, show_value
from sweep.query.answers.robust import LargestBox
from sweep.query.cautions import caution_line
from sweep.query.requirement import requirement_name, requirement_text
from sweep.query.select import Value

GAIN_BOX = "gain_box"
"""What is called best when the widest box of gains is wanted."""

_PLAIN_FIELDS = (
    "atlas_id",
    "case",
    "over",
    "best",
    "design_nodes",
    "meets",
    "fails",
    "unknown",
    "excluded",
    "widened",
    "at",
    "bracketed",
    "shaken",
    "free",
    "slowest_is_axis_end",
    "slowest_is_range_end",
    "slower_unknown",
    "largest_jump",
    "nodes",
    "unknown_nodes",
    "cautions",
)
"""Fields that stand in the document as they are."""


@dataclass(frozen=True)
class DelayLeft:
    """How much later than the box says the output may come before stability is lost."""

    axis: str
    """The delay's tolerance axis."""
    left: float
    """From the box's upper end to ``to``, in ``unit``; at least 0."""
    to: float
    """Where the loop stops being stable with every other tolerance at its worst over the box, or
    the last node of which it is known that it does not."""
    end: str
    """``boundary``; ``axis_end`` or ``unknown`` when stability was not seen to end; ``excluded``
    when the processor's time reaches the sample period first."""
    unit: str
    """Of ``left`` and ``to``."""
    kind: str | None = None
    """How stability is lost: drift, alternation or oscillation; ``None`` where it is not."""
    hz: float | None = None
    """Frequency at which it is lost, Hz."""


@dataclass(frozen=True)
class ChooseRow:
    """The design to choose at one sample period."""

    sample_period_s: float
    """Sample period, s; when nature varies it, the largest in the box."""
    meets: bool | None
    """Whether the design meets; where none does, ``False``; ``None`` when nothing is known."""
    design: Mapping[str, Value] | None
    """Values of all design axes: the best of the designs that meet, else of those known to fail.
    ``None`` when there is none of either."""
    worst: Mapping[str, float]
    """The worst over the box of log_radius, decay time (s), whatever is required, and the best."""
    at: Mapping[str, Value]
    """Where in the box the design is at its worst in what is called best (in log_radius for a
    gain box); design axes that are bracketed or shaken are among it."""
    delay_left: tuple[DelayLeft, ...] | None
    """For each tolerance axis that is a delay; ``None`` when there is none, or it does not meet."""
    axis_ends: tuple[str, ...]
    """Axes left free at whose end the design lies: a better one may lie beyond."""
    range_ends: tuple[str, ...]
    """Axes left free at which the design lies at the end of the range asked for, though the axis
    goes on: its neighbour there is not judged."""
    beside_failing: tuple[str, ...]
    """Axes left free along which a neighbour of a design that meets is not known to meet."""
    box: LargestBox | None
    """The widest gain box at this period, when that is called best."""
    box_range_ends: tuple[tuple[str, str], ...]
    """Axes and sides, low or high, at which that box lies at the end of the range asked for, though
    the axis goes on."""
    verdicts: Mapping[str, int]
    """Designs at this period: how many meet, fail, are unknown, are excluded."""

    @property
    def excluded(self) -> bool:
        """Whether no design at this period can be built: the processor takes longer than it."""
        return self.verdicts["excluded"] == sum(self.verdicts.values())

    def to_json(self) -> dict[str, Any]:
        """The row as programs read it."""
        row = {name: value for name, value in vars(self).items() if name != "sample_period_s"}
        row["excluded"] = self.excluded
        row["delay_left"] = self.delay_left and [vars(item) for item in self.delay_left]
        row["box"] = self.box and self.box.ends
        row["box_nodes"] = self.box.nodes if self.box else None
        row["box_exact"] = self.box.exact if self.box else None
        row["box_at_most"] = self.box.at_most if self.box else None
        row["box_axis_ends"] = self.box.axis_ends if self.box else ()
        found: dict[str, Any] = plain({"sample_period": self.sample_period_s, **row})
        return found


@dataclass(frozen=True)
class Outcome:
    """What a tolerance box leaves to choose from."""

    over: Mapping[str, tuple[Value, ...]]
    """The box, or the axis of it that was narrowed: lowest and highest node; labels of rows."""
    meets: int
    """Designs that meet."""
    share: float
    """Of all designs; 0 to 1."""
    best: float | None
    """The best worst case of a design that meets, in the unit of what is called best; nodes of the
    widest gain box."""
    slowest_s: float | None
    """Largest sample period at which a design meets, s."""

    @property
    def changes(self) -> tuple[int, float | None, float | None]:
        """What a narrower box may change."""
        return self.meets, self.best, self.slowest_s

    def to_json(self) -> dict[str, Any]:
        """The outcome as programs read it."""
        found: dict[str, Any] = plain(
            {
                "over": self.over,
                "meets": self.meets,
                "share": self.share,
                "best": self.best,
                "slowest": self.slowest_s,
            }
        )
        return found


@dataclass(frozen=True)
class Price:
    """What one tolerance costs."""

    axis: str
    """The tolerance axis."""
    nodes: int
    """Nodes of it in the box."""
    halved: Outcome | None
    """With its range halved about the nominal; ``None`` for rows, which have no half."""
    removed: Outcome
    """With the axis at its nominal node alone."""
    halved_is_whole: bool
    """Whether half the range takes in the same nodes as all of it: the axis is too coarse to
    tell."""
    brings_nothing: bool
    """Whether neither changes how many designs meet, the best worst case or the slowest period."""

    def to_json(self) -> dict[str, Any]:
        """The price as programs read it."""
        return {
            "axis": self.axis,
            "nodes": self.nodes,
            "halved": self.halved and self.halved.to_json(),
            "removed": self.removed.to_json(),
            "halved_is_whole": self.halved_is_whole,
            "brings_nothing": self.brings_nothing,
        }


@dataclass(frozen=True, eq=False)
class ChooseAnswer:
    """Per sample period the best design that survives a box."""

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
    best: str
    """What is called best: a quantity at its worst over the box, or ``gain_box``."""
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
    rows: tuple[ChooseRow, ...]
    """One for each node of the sample period's axis, in its order; a single one when it is
    fixed."""
    slowest: ChooseRow | None
    """The row with the largest sample period that meets."""
    best_row: ChooseRow | None
    """The row that meets with the best of what is called best; the fastest of equals."""
    slowest_is_axis_end: bool
    """Whether no slower period is in the atlas: the slowest lies beyond the axis end."""
    slowest_is_range_end: bool
    """Whether the atlas holds slower periods, all of them beyond the range asked for."""
    slower_unknown: int
    """Designs at slower periods than the slowest (at any period when none meets) of which it is
    not known whether they meet."""
    base: Outcome
    """What the whole box leaves to choose from."""
    price: tuple[Price, ...] | None
    """What each tolerance costs, the dearest first; ``None`` when it was not asked."""
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
    largest_jump: float | None
    """Largest difference of log_radius between neighbours, one of which meets."""
    nodes: int
    """Nodes that the answer rests on."""
    unknown_nodes: int
    """How many of them are not known."""
    cautions: tuple[str, ...]
    """Codes of the cautions that apply."""

    @property
    def is_known(self) -> bool:
        """Whether anything is known of any design."""
        return self.unknown + self.excluded < self.design_nodes or not self.unknown

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        document: dict[str, Any] = {name: getattr(self, name) for name in _PLAIN_FIELDS}
        document["requirements"] = {requirement_name(r): r.limit for r in self.requirements}
        document["rows"] = [row.to_json() for row in self.rows]
        document["slowest"] = self.slowest and self.slowest.to_json()
        document["best_row"] = self.best_row and self.best_row.to_json()
        document["base"] = self.base.to_json()
        document["price"] = None if self.price is None else [p.to_json() for p in self.price]
        found: dict[str, Any] = plain(document)
        return found

    def __repr__(self) -> str:
        required = ", ".join(requirement_text(item) for item in self.requirements)
        meeting = sum(row.meets is True for row in self.rows)
        head = f"Choice by {self.best}, {self.case or 'no case'} ({required})"
        lines = [
            f"{head}, atlas {self.atlas_id[:8]}",
            f"  {self.meets:,} of {self.design_nodes:,} designs meet",
            f"  at {meeting:,} of {len(self.rows):,} sample periods one does",
        ]
        for name, row in (("slowest", self.slowest), ("best", self.best_row)):
            if row and row.design is not None:
                design = ", ".join(
                    f"{axis} {show_value(self.grid.axis(axis), value)}"
                    for axis, value in row.design.items()
                )
                period = format_quantity(row.sample_period_s, "s", "ms")
                lines.append(f"  {name}: {period} with {design}")
        lines.append(f"  {caution_line(self.cautions)}")
        return "\n".join(lines)
