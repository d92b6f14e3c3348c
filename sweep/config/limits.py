"""What holds for a grid as a whole: its size, its longest delay, and names that do not collide."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence

import numpy as np

from sweep.config.findings import Findings
from sweep.grid import Axis, FixedParameter, FloatArray, Grid
from sweep.quantities import format_quantity
from sweep.vocabulary import MAX_DELAY_SAMPLES, coordinate_name

MAX_GRID = 10**13
"""Most nodes of one sweep."""

_SLACK = 1e-9

_HOLD_WORDS = frozenset({"hold", "zoh", "halfsample"})

_HUGE = 1e150
"""Clips seconds and rates that are absurd anyway, so that their product stays finite."""

Line = tuple[FloatArray, FloatArray]
"""Delay against the sample rate, one line a row: (samples, seconds), each of shape (n,)."""


def check_size(grid: Grid, findings: Findings) -> None:
    """Refuse a grid with more nodes than can ever be computed."""
    if grid.size > MAX_GRID:
        shape = " x ".join(f"{n:,}" for n in grid.shape)
        expected = f"at most {float(MAX_GRID):.0e} nodes in all"
        findings.add("axes", f"{shape} = {grid.size:.3g} nodes", expected, "take coarser axes")


def check_delay(
    grid: Grid, units: dict[str, str], findings: Findings, bare: Sequence[str] = ()
) -> None:
    """Refuse a grid with a node whose delay is longer than `MAX_DELAY_SAMPLES` samples.

    Parameters
    ----------
    grid
        The finished grid.
    units
        Unit of every delay part by dotted path: ``s`` or ``samples``.
    findings
        Where it is noted.
    bare
        Those delay parts that were given without a unit, which may have been meant in samples.
    """
    longest, period_s = find_longest_delay(grid, units)
    if longest > MAX_DELAY_SAMPLES + _SLACK:
        at = format_quantity(period_s, "s")
        names = ", ".join(sorted(units))
        remedy = "shorten the delays, or start the sample period higher"
        if bare:
            remedy = (
                f"{', '.join(bare)}: a number without a unit is in seconds; write "
                '"1.5 samples" where samples are meant'
            )
        findings.add(
            "delay",
            f"{longest:.6g} samples in all ({names}) at a sample period of {at}",
            f"at most {MAX_DELAY_SAMPLES} samples of delay at any node",
            remedy,
        )


def note_hold(units: Iterable[str], notes: list[str]) -> None:
    """Note every delay part whose name says that it is the hold's half sample."""
    for path in units:
        words = path.removeprefix("delay.").split("_")
        if _HOLD_WORDS.intersection(words) or "".join(words) == "halfsample":
            notes.append(
                f"{path}: the hold's own half sample is in the model already; "
                "if that is what this part stands for, leave it out"
            )


def find_longest_delay(grid: Grid, units: dict[str, str]) -> tuple[float, float]:
    """Find the longest delay of a grid in samples, and the sample period in s where it occurs.

    Each axis contributes a + b/T with one pair (a, b) per node, so that for a given T the longest
    delay is the sum of every axis' largest contribution; only the axis that sets T is tied to it.
    """
    fixed = {one.path: np.array([one.value]) for one in grid.fixed}
    sources: list[dict[str, FloatArray]] = [fixed]
    sources += [{path: axis.values_of(path) for path in axis.sets} for axis in grid.axes]
    clock = next(source for source in sources if "sample_period" in source)
    others = [_upper_lines(_line(source, units)) for source in sources if source is not clock]
    samples, seconds = _line(clock, units)
    period_s = np.maximum(clock["sample_period"], 1.0 / _HUGE)
    total = samples + seconds / period_s
    for offsets, slopes in others:
        total = total + _largest(offsets, slopes, 1.0 / period_s)
    worst = int(np.argmax(total))
    return float(total[worst]), float(period_s[worst])


def _line(source: dict[str, FloatArray], units: dict[str, str]) -> Line:
    length = max((len(values) for values in source.values()), default=1)
    samples, seconds = np.zeros(length), np.zeros(length)
    for path, values in source.items():
        if units.get(path) == "samples":
            samples = samples + np.minimum(values, _HUGE)
        elif path in units:
            seconds = seconds + np.minimum(values, _HUGE)
    return np.minimum(samples, _HUGE), np.minimum(seconds, _HUGE)


def _upper_lines(line: Line) -> Line:
    """Keep only the lines that are the highest at some rate: their upper convex hull."""
    order = np.lexsort((line[0], line[1]))
    hull: list[tuple[float, float]] = []
    for a, b in zip(line[0][order].tolist(), line[1][order].tolist(), strict=True):
        if hull and hull[-1][1] == b:
            hull.pop()
        while len(hull) > 1 and _is_hidden(hull, a, b):
            hull.pop()
        hull.append((a, b))
    return np.array([a for a, _ in hull]), np.array([b for _, b in hull])


def _is_hidden(hull: list[tuple[float, float]], a: float, b: float) -> bool:
    """Whether the last line never rises above both the one before it and the line (a, b)."""
    (a0, b0), (a1, b1) = hull[-2:]
    return (a0 - a) * (b1 - b0) <= (a0 - a1) * (b - b0)


def _largest(offsets: FloatArray, slopes: FloatArray, rate_hz: FloatArray) -> FloatArray:
    """Largest of the hull's lines at every rate; their crossings increase along the hull."""
    with np.errstate(over="ignore"):  # nearly parallel lines cross at infinity
        crossings = (offsets[:-1] - offsets[1:]) / (slopes[1:] - slopes[:-1])
    best = np.searchsorted(crossings, rate_hz)
    highest: FloatArray = offsets[best] + slopes[best] * rate_hz
    return highest


def check_names(axes: Sequence[Axis], fixed: Sequence[FixedParameter], findings: Findings) -> None:
    """Refuse names that would be stored twice: axes, their columns and labels, fixed parameters."""
    paths = [path for axis in axes for path in axis.sets] + [one.path for one in fixed]
    names = Counter(axis.name for axis in axes)
    names.update(f"{axis.name}_label" for axis in axes if axis.is_row_axis)
    names.update(
        coordinate_name(path, paths) for axis in axes if axis.is_row_axis for path in axis.columns
    )
    names.update(coordinate_name(one.path, paths) for one in fixed)
    names["sample_rate"] += 1
    for name, count in names.items():
        if count > 1:
            stored = {coordinate_name(one.path, paths): one.path for one in fixed}
            stored |= {axis.name: f"axes.{axis.name}" for axis in axes}
            place = stored.get(name, name)
            expected = "a name that no other axis, parameter or column is stored under"
            remedy = "rename the axis or the delay part"
            findings.add(place, f'the name "{name}" {count} times', expected, remedy)
