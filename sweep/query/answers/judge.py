"""The answer about single designs: the verdict on each in each case, and how much is left."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

from sweep.config import Requirement
from sweep.grid import Grid
from sweep.query.answers.limits import CrossingKind, EndKind
from sweep.query.answers.plain import plain, show_value
from sweep.query.cautions import caution_line
from sweep.query.requirement import requirement_name, requirement_text
from sweep.query.select import Value
from sweep.query.verdicts import Verdict

if TYPE_CHECKING:
    from sweep.query.judging.tolerance import Acceptance, InHand
    from sweep.query.judging.yields import Yield


@dataclass(frozen=True)
class Line:
    """One thing that is required, beside the worst that the box does to it."""

    require: str
    """As a config writes it, such as ``max_decay_time``; ``stable`` or ``processor_time`` for what
    is always required."""
    text: str
    """For people."""
    unit: str
    """Of ``limit`` and ``worst``."""
    limit: float
    """What is allowed."""
    worst: float
    """Over the known nodes of the box and of the bracket; NaN when none is known."""
    at: Mapping[str, Value]
    """The node where it is reached: tolerances, and design axes that take in several nodes."""
    unknown: int
    """Nodes where what it needs is not known."""
    verdict: Verdict
    """On this line alone."""

    def to_json(self) -> dict[str, Any]:
        """Its document."""
        return {
            "require": self.require,
            "limit": self.limit,
            "worst": self.worst,
            "at": dict(self.at),
            "verdict": self.verdict,
            "unit": self.unit,
            "unknown": self.unknown,
        }


@dataclass(frozen=True)
class Reached:
    """The largest value of a quantity in the box, and the node that gives it."""

    value: float
    """Over the known nodes; NaN when none is known."""
    at: Mapping[str, Value]
    """Tolerances, and design axes that take in several nodes."""


@dataclass(frozen=True)
class Distance:
    """How far a design is from instability along one axis, in one direction."""

    axis: str
    """Its name."""
    role: Literal["design", "tolerance"]
    """Of the axis. Along a tolerance axis the distance counts from the end of the box."""
    direction: Literal["down", "up"]
    """Towards lower or higher coordinates; a lower sample period is a higher rate."""
    start: Value
    """Where it counts from: the design's value, or the end of the box."""
    to: Value
    """Where the stable stretch ends, in the unit of the axis; of rows the last stable one."""
    end: EndKind
    """``boundary``: the loop becomes unstable there; ``axis_end``: stable as far as the axis goes;
    ``unknown``: the next node is not known; ``excluded``: it cannot be built, since the processor
    takes longer than a sample period."""
    by: float | None
    """Distance in the unit of the axis, at least 0; ``None`` along rows."""
    percent: float | None
    """``by`` as a share of the magnitude of ``start``; ``None`` along rows and from 0."""
    db: float | None
    """Of gains, 20 log10(to / start), negative where the magnitude falls; ``None`` where the sign
    changes or either is 0."""
    kind: CrossingKind | None
    """How stability is lost there."""
    hz: float | None
    """Frequency of the mode that is lost, Hz."""
    between: tuple[Value, Value] | None
    """Last stable node and first other node."""
    worst: Mapping[str, Value] = field(default_factory=dict)
    """The node of the box that is the worst at the other node."""

    def to_json(self) -> dict[str, Any]:
        """Its document."""
        names = ("axis", "role", "direction", "to", "end", "by", "percent", "db", "kind", "hz")
        document = {name: getattr(self, name) for name in names}
        return document | {"from": self.start, "between": self.between, "worst": dict(self.worst)}


@dataclass(frozen=True)
class Hurt:
    """What one tolerance does by itself, with every other one at its nominal node."""

    axis: str
    """Its name."""
    alone: float
    """Largest log_radius over the box's range of this axis; NaN when no node of it is known."""
    at: Value
    """Where on the axis it is reached."""
    nominal: float
    """log_radius with every tolerance at its nominal node, or at the node of the box nearest to it;
    NaN when unknown."""
    unknown: int
    """Nodes of that range that are not known."""

    def to_json(self) -> dict[str, Any]:
        """Its document."""
        names = ("axis", "alone", "at", "nominal", "unknown")
        return {name: getattr(self, name) for name in names}


@dataclass(frozen=True)
class GainFall:
    """What happens when the loop's gain falls, as saturation makes it do."""

    conditionally_stable: bool | None
    """``True`` when some place on the way down to no gain is known not to be stable; ``False`` when
    all of the way is known to be stable; ``None`` when the atlas cannot tell."""
    scaled: tuple[str, ...] = ()
    """What falls by a common factor: axes of controller gains, or the axis of the plant's gain."""
    factor: float | None = None
    """Largest factor at which it is known not to be stable; 1 is the design itself."""
    at: Mapping[str, Value] = field(default_factory=dict)
    """The scaled axes there."""
    followed_to: float | None = None
    """Down to which factor it is known to stay stable: 0 when all the way, 1 when no node below the
    design tells; ``None`` when nothing falls."""
    stopped_by: str = ""
    """What is in the way of telling more. With a ``factor`` it is empty unless stability may be
    left earlier, below ``followed_to`` already."""

    def to_json(self) -> dict[str, Any]:
        """Its document."""
        names = ("scaled", "factor", "followed_to", "stopped_by")
        return {name: getattr(self, name) for name in names} | {"at": dict(self.at)}


@dataclass(frozen=True)
class DesignVerdict:
    """One design in one case."""

    design: str
    """Its name."""
    at: Mapping[str, Value]
    """Its values, as asked."""
    case: str | None
    """Name of the case; ``None`` when the question said itself what is required."""
    verdict: Verdict
    """``fails`` when any line fails, else ``unknown`` when any is unknown, else ``meets``."""
    lines: tuple[Line, ...]
    """Everything that is required, stability first."""
    log_radius: Reached
    """The worst of the box; ``exp`` of it is the spectral radius."""
    radius: float
    """Spectral radius there."""
    decay_time: Reached
    """Longest decay time constant, s; infinite when a node is not stable, and then at the node with
    the largest log_radius."""
    over: Mapping[str, tuple[Value, ...]]
    """The tolerance box: lowest and highest node of each axis; labels of rows."""
    widened: tuple[str, ...]
    """Axes of the box with a bound between nodes, where the next node outward was taken in."""
    brackets: Mapping[str, tuple[Value, Value]]
    """Design axes where the design lies between two nodes: those two. The worst of all enclosing
    nodes counts."""
    shaken: Mapping[str, tuple[str, Value, Value]]
    """Design axes that may move by themselves: by how much, lowest and highest node taken in."""
    requirements: tuple[Requirement, ...]
    """What is required, stability first."""
    distances: tuple[Distance, ...]
    """Design axes first; empty unless the design can be built and is known to be stable at every
    node of the box."""
    hurts_most: tuple[Hurt, ...]
    """Tolerances with more than one node in the box, the one that hurts most first."""
    gain_fall: GainFall
    """Whether the loop is conditionally stable."""
    in_hand: InHand | None
    """How far the box may grow; ``None`` when no tolerance has a range to grow, and when it is
    skipped."""
    acceptance: Acceptance | None
    """Tolerances that are safe; ``None`` when there is no plain tolerance axis, and when it is
    skipped."""
    tolerances_skipped: str
    """Why ``in_hand`` and ``acceptance`` are left out; empty when they are not."""
    yields: tuple[Yield, ...]
    """Share of rows that meet, for each row axis of the box."""
    largest_jump: float | None
    """Largest difference of log_radius between neighbouring nodes at a boundary that is told of."""
    nodes: int
    """Nodes that the verdict rests on."""
    unknown: int
    """How many of them are not known."""

    @property
    def bracketed(self) -> bool:
        """Whether it lies between nodes."""
        return bool(self.brackets)

    @property
    def axis_ends(self) -> tuple[tuple[str, str], ...]:
        """Axes and directions in which it is stable as far as the axis goes."""
        return tuple((d.axis, d.direction) for d in self.distances if d.end == "axis_end")

    def to_json(self) -> dict[str, Any]:
        """Its document."""
        direct = ("design", "at", "case", "verdict", "bracketed", "brackets", "over", "widened")
        document = {name: getattr(self, name) for name in direct}
        document |= {
            "shaken": {
                name: {"by": reach, "nodes": (low, high)}
                for name, (reach, low, high) in self.shaken.items()
            },
            "requirements": {requirement_name(r): r.limit for r in self.requirements},
            "lines": [line.to_json() for line in self.lines],
            "worst": {
                "at": dict(self.log_radius.at),
                "log_radius": self.log_radius.value,
                "radius": self.radius,
            },
            "decay_time": {"worst": self.decay_time.value, "at": dict(self.decay_time.at)},
            "distances": [distance.to_json() for distance in self.distances],
            "axis_ends": [list(end) for end in self.axis_ends],
            "hurts_most": [hurt.to_json() for hurt in self.hurts_most],
            "conditionally_stable": self.gain_fall.conditionally_stable,
            "gain_fall": self.gain_fall.to_json(),
            "in_hand": self.in_hand and self.in_hand.to_json(),
            "acceptance": self.acceptance and self.acceptance.to_json(),
            "tolerances_skipped": self.tolerances_skipped or None,
            "yield": [found.to_json() for found in self.yields],
        }
        return document | {
            name: getattr(self, name) for name in ("largest_jump", "nodes", "unknown")
        }


@dataclass(frozen=True)
class JudgeAnswer:
    """The verdicts on some designs in some cases."""

    atlas_id: str
    """Of the atlas asked."""
    title: str
    """Of the atlas."""
    grid: Grid = field(repr=False, compare=False)
    """Of the atlas."""
    designs: tuple[DesignVerdict, ...]
    """Every design in every case, case by case for each design."""
    confidence: float
    """Of the intervals of yields, between 0 and 1."""
    cautions: tuple[str, ...]
    """Codes of the cautions that apply."""

    @property
    def verdict(self) -> Verdict:
        """``fails`` when any design fails, else ``unknown`` when any is unknown, else ``meets``."""
        return worst_verdict([found.verdict for found in self.designs])

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        found: dict[str, Any] = plain(
            {
                "atlas_id": self.atlas_id,
                "verdict": self.verdict,
                "designs": [design.to_json() for design in self.designs],
                "confidence": self.confidence,
                "cautions": self.cautions,
            }
        )
        return found

    def __repr__(self) -> str:
        lines = [f"Judged on atlas {self.atlas_id[:8]}: {self.verdict}"]
        for found in self.designs[:20]:
            worst = ", ".join(
                f"{name} {show_value(self.grid.axis(name), value)}"
                for name, value in found.log_radius.at.items()
            )
            required = ", ".join(requirement_text(item) for item in found.requirements)
            lines.append(f"  {found.design}, {found.case or 'no case'} ({required}):")
            lines.append(f"    {found.verdict}, spectral radius {found.radius:.6g} at {worst}")
        if len(self.designs) > 20:
            lines.append(f"  and {len(self.designs) - 20:,} more")
        return "\n".join([*lines, f"  {caution_line(self.cautions)}"])


def worst_verdict(verdicts: list[Verdict]) -> Verdict:
    """One verdict from several.

    >>> worst_verdict(["meets", "unknown"]), worst_verdict(["unknown", "fails"])
    ('unknown', 'fails')
    """
    for verdict in ("fails", "unknown"):
        if verdict in verdicts:
            return verdict
    return "meets"
