"""What is called best: a quantity at its worst over the box, or the widest box of gains."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from sweep.config.findings import find_near
from sweep.errors import QuestionError
from sweep.query.answers.choose import GAIN_BOX
from sweep.query.choosing.periods import Periods
from sweep.query.derived import spec_of
from sweep.query.extremes import Extreme
from sweep.query.gaps import box_without_gaps, design_gaps, unordered_dimensions
from sweep.query.largest_box import Box
from sweep.query.requirement import check_held
from sweep.query.verdicts import MEETS
from sweep.query.worst import LOG_RADIUS, WorstCases
from sweep.vocabulary import DERIVED, MEASURES


@dataclass(frozen=True)
class Best:
    """By what designs are compared."""

    name: str
    """As it is asked for."""
    extreme: Extreme
    """The quantity at its worst; log_radius for a gain box, where it decides only between designs
    that do not meet."""

    @property
    def is_box(self) -> bool:
        """Whether the widest box of gains is wanted, and not a quantity."""
        return self.name == GAIN_BOX


def read_best(name: str, held: Sequence[str], title: str) -> Best:
    """What a question calls best.

    Parameters
    ----------
    name
        A stored or derived quantity of which less or more is better, or ``gain_box``.
    held, title
        Measures that the atlas holds, and what it is called.

    Raises
    ------
    QuestionError
        For any other name, and a quantity that rests on a measure which the atlas does not hold.
    """
    if name == GAIN_BOX:
        return Best(name, LOG_RADIUS)
    ranked = [q for q in (*DERIVED, *MEASURES) if spec_of(q).better]
    if name not in ranked:
        near = find_near(name, [*ranked, GAIN_BOX])
        raise QuestionError(
            f"choosing by {name}: expected one of {', '.join([*ranked, GAIN_BOX])}, by which one "
            "design is better than another",
            where=[name],
            remedy=f"write {near}, which was probably meant" if near else "name one of them",
        )
    check_held(name, held, name, title)
    return Best(name, Extreme(name, "max" if spec_of(name).better == "low" else "min"))


def find_gain_box(cases: WorstCases, periods: Periods, row: int) -> Box | None:
    """The widest box of designs, all meeting, at one sample period; `None` where none meets.

    Its axes are the free ones other than the sample period's.
    """
    meets = periods.designs(cases.verdict == MEETS, row)
    others = [i for i in range(len(cases.scope.free)) if i != periods.dimension]
    unordered = unordered_dimensions(cases.scope)
    single = [place for place, dimension in enumerate(others) if dimension in unordered]
    all_gaps = design_gaps(cases.scope)
    gaps = {place: all_gaps[d] for place, d in enumerate(others) if d in all_gaps}
    return box_without_gaps(meets, gaps, single=single)


def find_gain_boxes(cases: WorstCases, periods: Periods) -> list[Box | None]:
    """The widest gain box at each sample period."""
    return [find_gain_box(cases, periods, row) for row in range(len(periods.values_s))]
