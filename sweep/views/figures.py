"""Stability maps as figures.

Drawn with matplotlib's objects, never through pyplot: no state is shared and no display is needed.
The same answer gives the same bytes.

Colours: what is stable runs from pale green (barely) to deep blue (settles soonest) in steadily
falling lightness, what is not stable is a warm near-white, the boundary is black, and what is not
computed is hatched. The order holds in greyscale and for every common kind of colour blindness.
"""

from __future__ import annotations

import io
import math
import textwrap
import uuid
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.colors import LinearSegmentedColormap, ListedColormap, LogNorm
from matplotlib.figure import Figure, SubFigure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.patheffects import withStroke
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter
from numpy.typing import NDArray

from sweep.errors import InputError
from sweep.grid import Axis
from sweep.quantities import display_factor, display_name
from sweep.query.answers import PlaneAnswer, show_value
from sweep.query.cautions import caution_line
from sweep.views.sheet import half_sample_text, printable

FloatArray = NDArray[np.float64]

INCHES = (8.0, 6.4)
FOOT_INCHES = 0.85
DOTS_PER_INCH = 150
MOST_CELLS = 1500
"""Cells drawn along an edge; more nodes than that are thinned, and the figure says so."""
LABEL_LETTERS = 48
"""Letters in a line of an edge's label: what the shorter edge holds."""

UNSTABLE = "#ece7df"
UNKNOWN = "#ffffff"
HATCH = "#9a9a9a"
BOUNDARY = "#111111"
DESIGN = "#d1495b"
DECAY = LinearSegmentedColormap.from_list(
    "decay", ["#c4e5c1", "#7fc6a4", "#3f9d9a", "#2c6f93", "#25437f", "#1d1f55"]
)
"""From settling late to settling soon, lightness falling throughout."""

STYLE: dict[str, Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": 10.0,
    "axes.linewidth": 0.8,
    "axes.titlesize": 11.0,
    "axes.edgecolor": "#333333",
    "hatch.color": HATCH,
    "hatch.linewidth": 0.6,
    "svg.hashsalt": "sampled-loop-atlas",
    "text.parse_math": False,
    "text.usetex": False,
}


def draw_map(plane: PlaneAnswer) -> Figure:
    """Draw a stability map.

    Parameters
    ----------
    plane
        The answer to draw.

    Returns
    -------
    A figure, for `save_figure` or a notebook.
    """
    with _style():
        figure = Figure(figsize=INCHES, dpi=DOTS_PER_INCH, layout="constrained")
        parts: Any = figure.subfigures(2, 1, height_ratios=[INCHES[1] - FOOT_INCHES, FOOT_INCHES])
        above, below = parts
        axes = above.add_subplot()
        drawn = _Drawn(plane)
        _fill(above, axes, drawn)
        _draw_boundary(axes, drawn)
        _draw_marks(axes, drawn)
        _label_edge(axes, drawn.x_axis, drawn.x, "x")
        _label_edge(axes, drawn.y_axis, drawn.y, "y")
        _head(above, axes, drawn)
        _foot(below, plane)
    return figure


def save_figure(figure: Figure, path: Path) -> None:
    """Write a figure as PNG, SVG or PDF, whole or not at all.

    Parameters
    ----------
    figure
        What to write.
    path
        Where to; its ending says which kind.

    Raises
    ------
    InputError
        When it cannot be written there.
    """
    kind = path.suffix.lower().lstrip(".")
    nothing_of_now: dict[str, dict[str, None]] = {
        "png": {"Software": None},
        "svg": {"Date": None, "Creator": None},
        "pdf": {"CreationDate": None, "Creator": None, "Producer": None},
    }
    page = io.BytesIO()
    with _style(), warnings.catch_warnings():
        # A title in letters that the font lacks shows boxes; that is no reason to fail.
        warnings.filterwarnings("ignore", message="Glyph .* missing", category=UserWarning)
        figure.savefig(page, format=kind, metadata=nothing_of_now[kind])
    partial = path.with_name(f"{path.name}.{uuid.uuid4().hex}.partial")
    try:
        partial.write_bytes(page.getvalue())
        partial.replace(path)
    except OSError as error:
        raise InputError(
            f"writing the map to {path}: expected that its folder {path.parent} can be written; "
            f"the system says: {error.strerror}",
            where=[str(path)],
            remedy="name a file in a folder that you may write to, on a disk with room",
        ) from error
    finally:
        with suppress(OSError):
            partial.unlink(missing_ok=True)


@contextmanager
def _style() -> Iterator[None]:
    """Matplotlib's own defaults and ours on top, whatever the user's settings are."""
    defaults: Any = {
        key: value for key, value in mpl.rcParamsDefault.items() if not key.startswith("backend")
    }
    with mpl.rc_context(defaults | STYLE):
        yield


class _Drawn:
    """A plane in the units and the resolution in which it is drawn."""

    def __init__(self, plane: PlaneAnswer) -> None:
        self.plane = plane
        self.x_axis, self.y_axis = plane.grid.axis(plane.x), plane.grid.axis(plane.y)
        self.step_x = -(-len(self.x_axis) // MOST_CELLS)
        self.step_y = -(-len(self.y_axis) // MOST_CELLS)
        self.x = _shown(self.x_axis, self.x_axis.coordinates[:: self.step_x])
        self.y = _shown(self.y_axis, self.y_axis.coordinates[:: self.step_y])
        self.log_radius: FloatArray = plane.log_radius[:: self.step_y, :: self.step_x].astype(float)
        self.known = ~np.isnan(self.log_radius)
        self.stable = self.log_radius < plane.threshold
        period = np.broadcast_to(plane.period_s, plane.log_radius.shape)
        self.period_s: FloatArray = period[:: self.step_y, :: self.step_x]

    @property
    def edges(self) -> tuple[FloatArray, FloatArray]:
        """Where cells end, along x and along y."""
        return _cell_edges(self.x_axis, self.x), _cell_edges(self.y_axis, self.y)

    @property
    def decay_s(self) -> FloatArray:
        """Decay time constant where stable, s; NaN elsewhere."""
        values = np.full(self.log_radius.shape, np.nan)
        values[self.stable] = -self.period_s[self.stable] / self.log_radius[self.stable]
        return values


def _shown(axis: Axis, values: FloatArray) -> FloatArray:
    if axis.is_row_axis:
        return np.arange(len(values), dtype=float)
    return values / display_factor(axis.unit, axis.display_unit)


def _is_log(values: FloatArray) -> bool:
    """Whether the nodes are spaced by ratio rather than by difference, pinned ones aside."""
    if len(values) < 4 or values[0] <= 0 or values[-1] < 4 * values[0]:
        return False

    def spread(steps: FloatArray) -> float:
        low, high = np.percentile(steps, [20, 80])
        return float(high / low)

    return spread(np.diff(np.log(values))) < spread(np.diff(values))


def _cell_edges(axis: Axis, values: FloatArray) -> FloatArray:
    """Where the cells of nodes end: half-way to each neighbour (by ratio on a log axis).

    A plain axis ends with its first and last node; a row is as wide as any other.
    """
    if len(values) == 1 and not axis.is_row_axis:
        half = 0.5 * abs(values[0]) or 0.5
        return np.array([values[0] - half, values[0] + half])
    if axis.is_row_axis:
        return np.arange(0.5, len(values) + 1) - 1.0
    if _is_log(values):
        return np.exp(_half_way(np.log(values)))
    return _half_way(values)


def _half_way(values: FloatArray) -> FloatArray:
    return np.concatenate([values[:1], 0.5 * (values[1:] + values[:-1]), values[-1:]])


def _fill(figure: SubFigure, axes: Axes, drawn: _Drawn) -> None:
    """Shade the cells; what stays blank shows the hatched ground, and is unknown."""
    x, y = drawn.edges
    axes.patch.set(facecolor=UNKNOWN, edgecolor=HATCH, hatch="////", linewidth=0.0)
    lost = np.ma.masked_where(~drawn.known | drawn.stable, np.ones(drawn.known.shape))
    axes.pcolormesh(x, y, lost, cmap=ListedColormap([UNSTABLE]), rasterized=True)
    if not drawn.stable.any():
        return
    decay = drawn.decay_s
    # Near the boundary decay time grows without bound; the upper tail shares the palest colour.
    low_s, high_s = map(float, np.nanpercentile(decay, [0.5, 95.0]))
    unit, factor = _time_unit(high_s)
    low, high = low_s / factor, high_s / factor
    low, high = (low, high) if high > 1.05 * low else (0.9 * low, 1.1 * high)
    mesh = axes.pcolormesh(
        x,
        y,
        np.ma.masked_invalid(decay / factor),
        cmap=DECAY.reversed(),
        norm=LogNorm(low, min(high, 1000 * low)),
        rasterized=True,
    )
    bar = figure.colorbar(mesh, ax=axes, pad=0.02, aspect=30, extend="both")
    bar.set_label(f"decay time constant ({unit}); the darker, the sooner it settles")
    bar.ax.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    bar.ax.yaxis.set_major_formatter(FuncFormatter(_number))
    bar.ax.yaxis.set_minor_formatter(NullFormatter())


def _draw_boundary(axes: Axes, drawn: _Drawn) -> None:
    """The boundary of the plane; along rows, which nothing joins, the edges of cells instead."""
    rows = drawn.x_axis.is_row_axis or drawn.y_axis.is_row_axis
    lines: Any = _edges_between(drawn) if rows else _boundary_lines(drawn)
    if len(lines):
        axes.add_collection(
            LineCollection(
                lines, colors=BOUNDARY, linewidths=1.8, capstyle="round", zorder=3, label="boundary"
            )
        )


def _boundary_lines(drawn: _Drawn) -> FloatArray:
    """Shape (pieces, 2, 2), in display units; over a single node right across its cell."""
    sides = (drawn.x_axis, drawn.y_axis)
    factors = [display_factor(axis.unit, axis.display_unit) for axis in sides]
    lines: FloatArray = drawn.plane.boundary / np.array(factors)
    for side, (axis, edges) in enumerate(zip(sides, drawn.edges, strict=True)):
        if len(axis) == 1:
            lines[:, :, side] = edges
    return lines


def _edges_between(drawn: _Drawn) -> list[list[tuple[float, float]]]:
    x, y = drawn.edges
    known, stable = drawn.known, drawn.stable
    across = known[:, 1:] & known[:, :-1] & (stable[:, 1:] != stable[:, :-1])
    upward = known[1:] & known[:-1] & (stable[1:] != stable[:-1])
    lines = [[(x[i + 1], y[j]), (x[i + 1], y[j + 1])] for j, i in np.argwhere(across)]
    return lines + [[(x[i], y[j + 1]), (x[i + 1], y[j + 1])] for j, i in np.argwhere(upward)]


def _draw_marks(axes: Axes, drawn: _Drawn) -> None:
    halo = [withStroke(linewidth=3, foreground="white")]
    for mark in drawn.plane.marks:
        x = mark.x / display_factor(drawn.x_axis.unit, drawn.x_axis.display_unit)
        y = mark.y / display_factor(drawn.y_axis.unit, drawn.y_axis.display_unit)
        axes.plot([x], [y], "o", ms=7, mfc=DESIGN, mec="white", mew=1.2, zorder=5)
        axes.annotate(
            printable(mark.name),
            (x, y),
            xytext=(7, 7),
            textcoords="offset points",
            fontsize=9,
            path_effects=halo,
            zorder=6,
        )


def _label_edge(axes: Axes, axis: Axis, values: FloatArray, edge: str) -> None:
    side = axes.xaxis if edge == "x" else axes.yaxis
    side.set_label_text(_edge_label(axis))
    edges = _cell_edges(axis, values)
    (axes.set_xlim if edge == "x" else axes.set_ylim)(edges[0], edges[-1])
    if axis.labels is not None:
        _name_rows(axes, axis.labels, edge)
    elif _is_log(values):
        (axes.set_xscale if edge == "x" else axes.set_yscale)("log")
        side.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        side.set_major_formatter(FuncFormatter(_number))
        side.set_minor_formatter(NullFormatter())


def _edge_label(axis: Axis) -> str:
    """What an axis is, its name unless that is said already, and its unit; in lines that fit."""
    unit = "" if axis.is_row_axis else display_name(axis.unit, axis.display_unit)
    words = axis.name.replace("_", " ")
    long_name = axis.long_name or words
    said = long_name.replace("_", " ").endswith(words)
    name = long_name if said else f"{long_name}, {words}"
    label = printable(f"{name} ({unit})" if unit else name)
    return textwrap.fill(label, LABEL_LETTERS)


def _name_rows(axes: Axes, labels: Sequence[str], edge: str) -> None:
    every = -(-len(labels) // 25)
    places = list(range(0, len(labels), every))
    names = [textwrap.shorten(printable(labels[place]), 16, placeholder="…") for place in places]
    if edge == "x":
        crowded = sum(map(len, names)) > 60
        axes.set_xticks(
            places, names, rotation=60 if crowded else 0, ha="right" if crowded else "center"
        )
    else:
        axes.set_yticks(places, names)


def _head(figure: SubFigure, axes: Axes, drawn: _Drawn) -> None:
    """The title, what is held where, and by whom it is chosen."""
    plane = drawn.plane
    held = [
        f"{name} = {show_value(plane.grid.axis(name), value)} "
        f"({plane.grid.axis(name).role}{', nominal' if name in plane.nominal else ''})"
        for name, value in plane.at.items()
    ]
    lines = textwrap.wrap(printable(f"held: {', '.join(held)}"), 96) if held else []
    lines += [
        f"one node in {step} of {axis.name} is drawn"
        for axis, step in ((drawn.x_axis, drawn.step_x), (drawn.y_axis, drawn.step_y))
        if step > 1
    ]
    title = textwrap.wrap(printable(plane.title), 78)[:2]
    figure.suptitle("\n".join(title), x=0.01, ha="left", fontsize=12.5, fontweight="bold")
    if lines:
        axes.set_title("\n".join(lines), loc="left", fontsize=8.5, color="#333333")


def _foot(figure: SubFigure, plane: PlaneAnswer) -> None:
    """What the colours mean, and what the map does not say."""
    keys: list[Line2D | Patch] = [
        Line2D([], [], color=BOUNDARY, lw=1.8, label="stability boundary"),
        Patch(fc=UNSTABLE, ec="#bbbbbb", label="not stable"),
    ]
    if plane.unknown:
        keys.append(Patch(fc=UNKNOWN, ec=HATCH, hatch="////", label="unknown: not computed"))
    if plane.marks:
        keys.append(
            Line2D([], [], marker="o", ls="", ms=7, mfc=DESIGN, mec="white", label="design")
        )
    figure.legend(handles=keys, loc="upper left", ncols=len(keys), frameon=False, fontsize=9)
    words = f"Atlas {plane.atlas_id[:8]}. Cautions: {caution_line(plane.cautions)}"
    if half_sample := half_sample_text(plane.grid):
        words = f"{words}. {half_sample.capitalize()}"
    figure.text(0.013, 0.08, textwrap.fill(words, 140), fontsize=6.8, color="#555555", va="bottom")


def _time_unit(seconds: float) -> tuple[str, float]:
    units = (("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9))
    return next(((unit, size) for unit, size in units if seconds >= size), units[-1])


def _number(value: float, _position: object = None) -> str:
    return f"{value:g}" if math.isfinite(value) else ""
