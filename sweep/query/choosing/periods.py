"""The designs of a question, sorted by sample period."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.query.scope import Scope


@dataclass(frozen=True, eq=False)
class Periods:
    """The sample periods among which a question chooses."""

    values_s: NDArray[np.float64]
    """Sample period of each row, s, in the order of the axis."""
    dimension: int | None
    """Of arrays over the designs; ``None`` when all designs have the one period."""

    def designs(self, values: NDArray[Any], row: int) -> NDArray[Any]:
        """An array over the designs at one period; a view of it."""
        if self.dimension is None:
            return values
        of_row: NDArray[Any] = np.moveaxis(values, self.dimension, 0)[row]
        return of_row

    def place(self, row: int, others: tuple[int, ...]) -> tuple[int, ...]:
        """Place along every free axis of a design at one period."""
        if self.dimension is None:
            return others
        return (*others[: self.dimension], row, *others[self.dimension :])

    def any_per_row(self, flags: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Whether any design at each period is flagged."""
        lines = flags if self.dimension is None else np.moveaxis(flags, self.dimension, 0)
        rows: NDArray[np.bool_] = np.logical_or.reduce(
            lines.reshape(len(self.values_s), -1), axis=1
        )
        return rows


def find_periods(scope: Scope) -> Periods:
    """The sample periods of a question.

    One row when the period is fixed; its value is the one asked when it lies between nodes or is
    shaken there, and the largest in the box when nature varies it.
    """
    for position, axis in enumerate(scope.grid.axes):
        if "sample_period" not in axis.sets:
            continue
        values_s = axis.values_of("sample_period")[scope.spans[position]]
        if position in scope.free:
            return Periods(values_s, scope.free.index(position))
        asked = scope.at.get(axis.name)
        one_s = asked if isinstance(asked, float) else float(values_s.max())
        return Periods(np.array([one_s]), None)
    (fixed,) = (item for item in scope.grid.fixed if item.path == "sample_period")
    return Periods(np.array([fixed.value]), None)
