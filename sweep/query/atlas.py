"""An atlas that can be asked: the one object that a notebook needs."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

from sweep.errors import QuestionError
from sweep.grid import Grid
from sweep.query.answers import (
    ChooseAnswer,
    JudgeAnswer,
    LimitsAnswer,
    PlaneAnswer,
    PointAnswer,
    RobustAnswer,
)
from sweep.query.choosing.choose import choose_designs
from sweep.query.facts import AtlasFacts, read_facts
from sweep.query.gather import as_names, gather_demands, gather_designs, gather_weights
from sweep.query.judging.judge import CONFIDENCE, Weights, judge_designs
from sweep.query.memo import Memo
from sweep.query.point import find_point
from sweep.query.question import make_demand, resolve_question
from sweep.query.requirement import Asked as Required
from sweep.query.requirement import find_case
from sweep.query.robust import find_robust
from sweep.query.select import (
    Asked,
    find_axis,
    resolve_names,
)
from sweep.query.stability.limits import MOST_ROWS, find_limits, resolve_limits
from sweep.query.stability.plane import find_plane
from sweep.vocabulary import LoopStructure

if TYPE_CHECKING:
    import xarray

    from sweep.store.atlas import StoredAtlas


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

    @cached_property
    def memo(self) -> Memo:
        """Where what takes long to find is kept between questions."""
        return Memo()

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
        return find_point(self.stored, self._asked(at, design), nearest=nearest)

    def limits(
        self,
        along: str,
        *,
        at: Mapping[str, Asked] | None = None,
        over: Mapping[str, Asked] | None = None,
        each: Sequence[str] = (),
        nominal: bool = False,
        design: str = "",
        case: str = "",
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
        case
            Name of a case whose box counts for axes that are named nowhere else.
        rows
            Most rows to list.

        Raises
        ------
        QuestionError
            When the question cannot be asked of this atlas.
        """
        along_name = find_axis(self.grid, along).name
        fixed = self._asked(at, design, without=(along_name, *each))
        box = self._box(case, over, named=(along_name, *fixed, *each))
        question = resolve_limits(self.grid, along, fixed, box, each, nominal)
        return find_limits(
            self.stored, self.atlas_id, question, max(1, rows), self.stored.structure
        )

    def robust(
        self,
        case: str = "",
        *,
        at: Mapping[str, Asked] | None = None,
        over: Mapping[str, Asked] | None = None,
        within: Mapping[str, Asked] | None = None,
        require: Required | None = None,
        shake: Mapping[str, float | str] | None = None,
        around: Mapping[str, Asked] | str | None = None,
        design: str = "",
    ) -> RobustAnswer:
        """Which designs meet a requirement at every node of a tolerance box.

        Parameters
        ----------
        case
            Name of a case of the atlas: its box and its requirement.
        at
            Axes fixed at a value; between two nodes the worse of them counts.
        over
            The tolerance box: for each axis (low, high), ``"low:high"``, or row labels. Tolerance
            axes that neither this nor the case names count over their full range.
        within
            Ranges that design axes are kept to.
        require
            Bounds by name, such as ``{"max_decay_time": "80 ms"}``; they come on top of the case's,
            and of two bounds on one quantity the stricter counts. Being stable is always required.
        shake
            How far design axes may move by themselves, such as ``{"kp": "10%"}``: the worst
            neighbour counts.
        around
            A design, by name or by its values, that the largest box has to hold.
        design
            Name of a design whose values come before ``at``.

        Returns
        -------
        Counts, regions, the largest box and the worst node; ``dataset`` holds every design.

        Raises
        ------
        QuestionError
            When the question cannot be asked of this atlas.
        """
        demand = make_demand(self.stored.cases, case, over, require, shake)
        question = resolve_question(
            self.grid, self._held, self.title, demand, self._asked(at, design), within or {}
        )
        centre = self._asked(None, around) if isinstance(around, str) else dict(around or {})
        return find_robust(self.stored, question, centre, self.memo)

    def judge(
        self,
        design: str | Sequence[str] = (),
        *,
        case: str | Sequence[str] = (),
        at: Mapping[str, Asked] | None = None,
        schedule: str | Path | None = None,
        over: Mapping[str, Asked] | None = None,
        require: Required | None = None,
        shake: Mapping[str, float | str] | None = None,
        confidence: float = CONFIDENCE,
        weights: Weights | Path | str | None = None,
    ) -> JudgeAnswer:
        """Judge designs against cases, line by line.

        Parameters
        ----------
        design
            Names of designs of the atlas; all of them when nothing else is given either.
        case
            Names of its cases. When left out it is every case, or, with ``over`` or ``require``,
            what these say alone.
        at
            A design by its values, or changes to the named ones; between nodes the worst of the
            enclosing ones counts.
        schedule
            A CSV file with a design in every row, such as a gain schedule.
        over, require, shake
            As in `robust`; they come on top of a case.
        confidence
            Of the intervals of yields, above 0 and below 1.
        weights
            What rows count in a yield: by axis and label, or a CSV file.

        Raises
        ------
        QuestionError
            When the question cannot be asked of this atlas.
        """
        path = Path(schedule) if schedule is not None else None
        return judge_designs(
            self.stored,
            gather_designs(self.stored, as_names(design), dict(at or {}), path),
            gather_demands(
                self.stored.cases, as_names(case), dict(over or {}), require or {}, shake or {}
            ),
            confidence=confidence,
            weights=gather_weights(self.stored, weights),
        )

    def choose(
        self,
        case: str = "",
        *,
        best: str = "decay_time",
        at: Mapping[str, Asked] | None = None,
        over: Mapping[str, Asked] | None = None,
        within: Mapping[str, Asked] | None = None,
        require: Required | None = None,
        shake: Mapping[str, float | str] | None = None,
        design: str = "",
        price: bool = False,
    ) -> ChooseAnswer:
        """Choose a design at every sample period, and the slowest period at which one meets.

        Parameters
        ----------
        case
            Name of a case of the atlas: its box and its requirement.
        best
            What to choose by: a stored or derived quantity of which less or more is better, at its
            worst over the box; or ``"gain_box"``, the middle of the widest box of designs that all
            meet.
        at, over, within, require, shake
            As in `robust`.
        design
            Name of a design whose values come before ``at``, at any sample period.
        price
            Whether to tell what each tolerance costs: what could be chosen were it halved, or
            removed.

        Raises
        ------
        QuestionError
            When the question cannot be asked of this atlas.
        """
        return choose_designs(
            self.stored,
            make_demand(self.stored.cases, case, over, require, shake),
            best=best,
            at=at,
            within=within,
            design=design,
            price=price,
            memo=self.memo,
        )

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
        right, up = find_axis(self.grid, x).name, find_axis(self.grid, y).name
        asked = self._asked(at, design, without=(right, up))
        return find_plane(self.stored, right, up, asked, nearest=nearest)

    @property
    def _held(self) -> tuple[str, ...]:
        """Names of the stored measures."""
        return tuple(spec.name for spec in self.stored.measures)

    def _box(
        self, case: str, over: Mapping[str, Asked] | None, named: Sequence[str]
    ) -> dict[str, Asked]:
        """What ``over`` says, over what the case says of axes that are not ``named``."""
        given = dict(over or {})
        if not case:
            return given
        taken = {*resolve_names(self.grid, given), *(find_axis(self.grid, n).name for n in named)}
        ranges = find_case(self.stored.cases, case).over
        return {axis: ends for axis, ends in ranges.items() if axis not in taken} | given

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
