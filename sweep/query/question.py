"""A question about designs, resolved: which nodes, which box, what is required, how far shaken."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from sweep.config import Case, Requirement
from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query import requirement as requiring
from sweep.query.requirement import find_case, read_requirements
from sweep.query.scope import Scope, resolve_scope
from sweep.query.select import Asked, gain_changes_structure, resolve_names
from sweep.query.shake import Asked as Shaking
from sweep.query.shake import Reach, Window, find_window, read_reach, spell_reach
from sweep.query.spoken import is_rate, spell_asked, spell_ends


@dataclass(frozen=True)
class Demand:
    """What a design must survive, and what it must meet: a case, or what a question says itself."""

    case: Case | None = None
    """A case of the atlas; its box counts where ``over`` names no range. What it requires always
    counts: where ``require`` bounds the same, the stricter of the two."""
    over: Mapping[str, Asked] = field(default_factory=dict)
    """Ranges of tolerance axes."""
    require: requiring.Asked = field(default_factory=dict)
    """Bounds by name, or requirements."""
    shake: Shaking = field(default_factory=dict)
    """How far design axes may move, by axis."""

    @property
    def name(self) -> str | None:
        """Of the case, with whatever the question changes in it; ``None`` without a case."""
        if self.case is None:
            return None
        bounds = (
            self.require.items()
            if isinstance(self.require, Mapping)
            else [(item.name, item.limit) for item in self.require]
        )
        changes = [f"{name}={_written(value)}" for name, value in [*self.over.items(), *bounds]]
        return f"{self.case.name} with {', '.join(changes)}" if changes else self.case.name

    def requirements(self, held: Sequence[str], title: str) -> tuple[Requirement, ...]:
        """What is required in all, stability first.

        Raises
        ------
        QuestionError
            See `sweep.query.requirement.read_requirements`.
        """
        own = read_requirements(self.require, held, title)
        cased = self.case.requirements if self.case else ()
        return read_requirements(_strictest([*own, *cased]), held, title)


def _written(value: object) -> str:
    """A value, a range or labels as the command line writes them."""
    if isinstance(value, str | float | int):
        return str(value)
    if isinstance(value, Sequence):
        return ":".join(map(str, value))
    return str(value)


def _strictest(requirements: Sequence[Requirement]) -> list[Requirement]:
    """One requirement for each quantity and sense: the strictest of them, in order."""
    found: dict[str, Requirement] = {}
    for item in requirements:
        held = found.setdefault(item.name, item)
        stricter = item.limit < held.limit if item.sense == "max" else item.limit > held.limit
        if stricter:
            found[item.name] = item
    return list(found.values())


@dataclass(frozen=True)
class DesignQuestion:
    """Which designs are judged against what."""

    scope: Scope
    """Designs and box."""
    windows: tuple[Window, ...]
    """Neighbours to take in along free axes."""
    requirements: tuple[Requirement, ...]
    """Stability first."""
    demand: Demand
    """Where the box and the requirements come from."""


def make_demand(
    cases: Sequence[Case],
    case: str,
    over: Mapping[str, Asked] | None,
    require: requiring.Asked | None,
    shake: Shaking | None,
) -> Demand:
    """A demand from what a question names; an empty ``case`` is none."""
    chosen = find_case(cases, case) if case else None
    return Demand(chosen, dict(over or {}), require or {}, dict(shake or {}))


def resolve_question(
    grid: Grid,
    held: Sequence[str],
    title: str,
    demand: Demand,
    at: Mapping[str, Asked],
    within: Mapping[str, Asked],
) -> DesignQuestion:
    """Turn names and texts into nodes, or say what cannot be asked.

    Parameters
    ----------
    grid, held, title
        Of the atlas: its grid, the measures that it holds, what it is called.
    demand
        Box and requirements.
    at, within
        See `sweep.query.scope.resolve_scope`.

    Raises
    ------
    QuestionError
        Whatever in it cannot be asked of this atlas.
    """
    requirements = demand.requirements(held, title)
    scope = resolve_scope(grid, at, demand.over, within, demand.case)
    scope, windows = _shaken(scope, demand.shake)
    return DesignQuestion(scope, windows, requirements, demand)


def _shaken(scope: Scope, shake: Shaking) -> tuple[Scope, tuple[Window, ...]]:
    """Axes fixed at a value take their neighbours into the box; the others get a window."""
    windows = []
    for name, (spelled, asked) in resolve_names(scope.grid, shake).items():
        axis = scope.grid.axis(name)
        position = scope.grid.names.index(name)
        if not isinstance(asked, str | float | int):
            raise QuestionError(
                f"shaking {spelled}: it is given more than once",
                where=[name],
                remedy=f"write --shake {spelled}=10% once",
            )
        reach = read_reach(axis, spelled, asked)
        if name in scope.at:
            scope = _with_neighbours(scope, position, reach, asked)
        else:
            nodes = scope.spans[position]
            windows.append(find_window(scope.grid, position, axis.coordinates[nodes], reach))
    return scope, tuple(windows)


def _but_for_zero(grid: Grid, axis: Axis) -> str:
    """What an axis cannot tell beside the nodes at which a gain of 0 changes the structure."""
    if not gain_changes_structure(grid, axis):
        return ""
    return ", and at 0 the term is absent, which says nothing about the values beside it"


def _with_neighbours(scope: Scope, position: int, reach: Reach, asked: float | str) -> Scope:
    axis = scope.grid.axes[position]
    value = np.array([scope.at[axis.name]], dtype=np.float64)
    window = find_window(scope.grid, position, value, reach)
    if window.lost[0]:
        low, high = spell_ends(axis, reach.name)
        number = 1.0 / float(value[0]) if is_rate(axis, reach.name) else float(value[0])
        at = spell_asked(axis, reach.name, number)
        raise QuestionError(
            f"shaking {at} by {spell_reach(axis, reach.name, asked)}: that leaves what the axis "
            f"can tell: it runs from {low} to {high}{_but_for_zero(scope.grid, axis)}",
            where=[axis.name],
            remedy="shake it by less, or sweep further or more finely in a config of its own",
        )
    spans = list(scope.spans)
    spans[position] = window.span
    return replace(
        scope,
        spans=tuple(spans),
        box=tuple(sorted({*scope.box, position})),
        shaken=(*scope.shaken, axis.name),
    )
