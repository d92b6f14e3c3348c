"""An atlas that can be asked: the one object that a notebook needs."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

import numpy as np
from numpy.typing import NDArray

from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query.answers import LimitsAnswer, Mark, PlaneAnswer, PointAnswer
from sweep.query.boundary import find_boundary
from sweep.query.cautions import AT_A_NODE, BETWEEN_NODES
from sweep.query.derived import derive
from sweep.query.facts import AtlasFacts, read_facts
from sweep.query.limits import MOST_ROWS, find_limits, resolve_limits
from sweep.query.select import (
    Asked,
    Value,
    find_axis,
    find_enclosing,
    find_node,
    one_value,
    read_value,
    resolve_names,
    value_at,
)
from sweep.vocabulary import STABILITY_THRESHOLD, LoopStructure

if TYPE_CHECKING:
    import xarray

    from sweep.store.atlas import StoredAtlas


Number = TypeVar("Number", np.float32, np.float64)


def open_atlas(where: str | Path, shelf: str | Path = "results") -> Atlas:
    """Open an atlas for questions.

    Parameters
    ----------
    where
        Its folder, or any unique part of the title or id of an atlas on the shelf.
    shelf
        The folder of atlases to look on.

    Raises
    ------
    QuestionError
        When there is no such atlas, or more than one.
    DamagedAtlas
        When its metadata is not what was written.
    """
    from sweep.store.atlas import open_stored
    from sweep.store.shelf import Shelf

    return Atlas(open_stored(Shelf(Path(shelf)).find(str(where))))


class Atlas:
    """A stored sweep that answers questions; nothing it does computes a loop.

    Wherever a question takes values, a number is in the unit of the stored coordinate (SI; samples
    on a samples axis), a text may carry a unit (``"5 ms"``), and a row is named by its label.

    Parameters
    ----------
    stored
        The atlas as it lies in the store.
    """

    def __init__(self, stored: StoredAtlas) -> None:
        self.stored = stored

    @property
    def title(self) -> str:
        """What the config calls it."""
        return self.stored.title

    @property
    def atlas_id(self) -> str:
        """SHA-256 of everything that decides its numbers."""
        return self.stored.atlas_id

    @property
    def grid(self) -> Grid:
        """Axes and fixed parameters."""
        return self.stored.grid

    @cached_property
    def dataset(self) -> xarray.Dataset:
        """Every measure with labelled coordinates, read when it is used."""
        return self.stored.dataset

    @property
    def structure(self) -> LoopStructure:
        """The loop's kinds and formula options."""
        return self.stored.structure

    def facts(self) -> AtlasFacts:
        """Loop, delay budget, axes, measures, completeness and origin at a glance."""
        return read_facts(self.stored)

    def point(
        self,
        at: Mapping[str, Asked] | None = None,
        *,
        design: str = "",
        nearest: bool = False,
    ) -> PointAnswer:
        """What is stored at one node.

        Parameters
        ----------
        at
            Values of axes; an axis that is not named is taken at its nominal node.
        design
            Name of a design whose values come before ``at``.
        nearest
            Whether the nearest node will do where a value lies between nodes.

        Raises
        ------
        QuestionError
            When a value is not at a node.
        """
        held = self._hold(self._asked(at, design), nearest=nearest)
        block = tuple(slice(node, node + 1) for node in held.node)
        measures = {
            spec.name: float(self.stored.read(spec.name, block).reshape(-1)[0])
            for spec in self.stored.measures
        }
        period_s = float(self.grid.parameters(block)["sample_period"].reshape(-1)[0])
        log_radius = measures["log_radius"]
        return PointAnswer(
            atlas_id=self.atlas_id,
            grid=self.grid,
            node=held.node,
            at=held.at,
            measures=measures,
            derived=derive(log_radius, measures["mode_angle"], period_s),
            stable=None if math.isnan(log_radius) else log_radius < STABILITY_THRESHOLD,
            nominal=held.nominal,
            moved=held.moved,
            cautions=AT_A_NODE,
        )

    def limits(
        self,
        along: str,
        *,
        at: Mapping[str, Asked] | None = None,
        over: Mapping[str, Asked] | None = None,
        each: Sequence[str] = (),
        nominal: bool = False,
        design: str = "",
        rows: int = MOST_ROWS,
    ) -> LimitsAnswer:
        """The stability boundary along one axis.

        Parameters
        ----------
        along
            The axis to walk along.
        at
            Axes fixed at a value; between two nodes the worse of them counts.
        over
            The tolerance box: for each axis (low, high), ``"low:high"``, or row labels. Tolerance
            axes that are not named count over their full range.
        each
            Axes to list node by node, tolerances included. Design axes that are not named are
            listed anyway.
        nominal
            Take every axis that is not named at its nominal node instead.
        design
            Name of a design whose values come before ``at``, except along the asked axis.
        rows
            Most rows to list.

        Raises
        ------
        QuestionError
            When the question cannot be asked of this atlas.
        """
        along_name = find_axis(self.grid, along).name
        fixed = self._asked(at, design, without=(along_name, *each))
        question = resolve_limits(self.grid, along, fixed, over or {}, each, nominal)
        return find_limits(self.stored, self.atlas_id, question, max(1, rows))

    def plane(
        self,
        x: str,
        y: str,
        *,
        at: Mapping[str, Asked] | None = None,
        design: str = "",
        nearest: bool = False,
    ) -> PlaneAnswer:
        """The logarithm of the spectral radius over two axes, the others held at a node.

        Parameters
        ----------
        x, y
            The axes to the right and upwards.
        at
            Values of other axes; one that is not named is held at its nominal node.
        design
            Name of a design whose values come before ``at``.
        nearest
            Whether the nearest node will do where a value lies between nodes.

        Raises
        ------
        QuestionError
            When both axes are the same, one is also in ``at``, or a value is not at a node.
        """
        right, up = find_axis(self.grid, x), find_axis(self.grid, y)
        if right.name == up.name:
            raise QuestionError(
                f"drawing a plane of {right.name} by {right.name}: expected two different axes",
                where=[right.name],
                remedy="name another axis for one of them",
            )
        asked = self._asked(at, design, without=(right.name, up.name))
        for axis in (right, up):
            if axis.name in resolve_names(self.grid, asked):
                raise QuestionError(
                    f"drawing a plane with {axis.name} on an edge: it is also held at a value",
                    where=[axis.name],
                    remedy=f"leave {axis.name} out of --at",
                )
        held = self._hold(asked, nearest=nearest, free=(right.name, up.name))
        places = {axis.name: i for i, axis in enumerate(self.grid.axes)}
        block = tuple(
            slice(0, len(axis)) if axis.name in (right.name, up.name) else slice(node, node + 1)
            for axis, node in zip(self.grid.axes, held.node, strict=True)
        )
        edges = (places[up.name], places[right.name])
        log_radius = _as_plane(self.stored.read("log_radius", block), edges)
        boundary = np.empty((0, 2, 2))
        if not (right.is_row_axis or up.is_row_axis):
            mode_angle = _as_plane(self.stored.read("mode_angle", block), edges)
            boundary = find_boundary(self.grid, held.node, edges[::-1], log_radius, mode_angle)
        return PlaneAnswer(
            atlas_id=self.atlas_id,
            title=self.title,
            grid=self.grid,
            x=right.name,
            y=up.name,
            log_radius=log_radius,
            boundary=boundary,
            period_s=_as_plane(self.grid.parameters(block)["sample_period"], edges),
            at=held.at,
            nominal=held.nominal,
            moved=held.moved,
            marks=tuple(self._marks(right, up, held.at)),
            threshold=STABILITY_THRESHOLD,
            cautions=BETWEEN_NODES,
        )

    def __repr__(self) -> str:
        axes = ", ".join(f"{axis.name} ({len(axis)})" for axis in self.grid.axes)
        return f"Atlas {self.title!r} {self.atlas_id[:8]}: {self.grid.size:,} nodes over {axes}"

    def _asked(
        self, at: Mapping[str, Asked] | None, design: str, without: Sequence[str] = ()
    ) -> dict[str, Asked]:
        """What ``at`` says, over what the design says."""
        given = dict(at or {})
        if not design:
            return given
        named = {found.name: found for found in self.stored.designs}
        if design not in named:
            raise QuestionError(
                f"looking for design {design!r}: this atlas holds "
                f"{', '.join(named) or 'no designs'}",
                where=[design],
                remedy="name one of them, or give its values with --at",
            )
        over = set(resolve_names(self.grid, given)) | set(without)
        values = named[design].values
        return {axis: value for axis, value in values.items() if axis not in over} | given

    def _hold(
        self, asked: Mapping[str, Asked], *, nearest: bool, free: Sequence[str] = ()
    ) -> _Held:
        names = resolve_names(self.grid, asked)
        node = [axis.nominal for axis in self.grid.axes]
        moved: dict[str, float] = {}
        for position, axis in enumerate(self.grid.axes):
            if axis.name not in names:
                continue
            name, value = names[axis.name]
            single = one_value(axis.name, value)
            node[position] = find_node(axis, single, name=name, nearest=nearest)
            if nearest and len(find_enclosing(axis, single, name=name).nodes) > 1:
                moved[axis.name] = read_value(axis, single, name)
        held = [axis for axis in self.grid.axes if axis.name not in free]
        places = {axis.name: i for i, axis in enumerate(self.grid.axes)}
        return _Held(
            node=tuple(node),
            at={axis.name: value_at(axis, node[places[axis.name]]) for axis in held},
            nominal=tuple(axis.name for axis in held if axis.name not in names),
            moved=moved,
        )

    def _marks(self, right: Axis, up: Axis, at: Mapping[str, Value]) -> list[Mark]:
        """Designs whose values off the plane's axes are the ones that are held."""
        if right.is_row_axis or up.is_row_axis:
            return []
        marks = []
        for design in self.stored.designs:
            values = design.values
            off = all(at[axis] == value for axis, value in values.items() if axis in at)
            x, y = values.get(right.name), values.get(up.name)
            if off and isinstance(x, float) and isinstance(y, float):
                marks.append(Mark(design.name, x, y))
        return marks


def _as_plane(block: NDArray[Number], edges: tuple[int, int]) -> NDArray[Number]:
    """A block with two axes that count as (upwards, to the right)."""
    moved = np.moveaxis(block, edges, (0, 1))
    return moved.reshape(moved.shape[:2])


@dataclass(frozen=True)
class _Held:
    """Axes held at a node."""

    node: tuple[int, ...]
    at: Mapping[str, Value]
    nominal: tuple[str, ...]
    moved: Mapping[str, float]
