"""The paper that answers are written on: plain tables and lines of at most 108 columns.

Every text that comes from an atlas or a config is shown as it is, without markup and without
control characters.
"""

from __future__ import annotations

import io
from collections.abc import Mapping, Sequence
from typing import Any

from rich import box
from rich.console import Console, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from sweep.grid import Grid
from sweep.query.answers import show_value
from sweep.query.cautions import caution_line
from sweep.query.select import Value

HALF_SAMPLE = "the hold's own half sample is in the model already"
"""Said wherever delay is shown."""

CANNOT_BE_BUILT = "cannot be built: there the processor takes longer than a sample period"
"""Said wherever that ends a stable stretch."""


class _Sheet(io.StringIO):
    """Paper that knows which letters the terminal has: rich asks its file for ``encoding``."""

    def __init__(self, encoding: str) -> None:
        super().__init__()
        self._letters = encoding

    @property
    def encoding(self) -> str:  # type: ignore[override]
        """What the terminal takes."""
        return self._letters


def to_text(view: object, *, width: int, terminal: bool, encoding: str = "utf-8") -> str:
    """A view as text.

    Parameters
    ----------
    view
        What one of the ``..._view`` functions returned.
    width
        Columns.
    terminal
        Whether someone watches: colour, unless NO_COLOR says otherwise.
    encoding
        Of the terminal; lines become ASCII where it lacks their letters.
    """
    sheet = _Sheet(encoding)
    console = Console(
        file=sheet,
        width=width,
        force_terminal=terminal,
        color_system="auto" if terminal else None,
        highlight=False,
        markup=False,
        emoji=False,
        legacy_windows=False,
    )
    console.print(view)
    return "\n".join(line.rstrip() for line in sheet.getvalue().splitlines()) + "\n"


def printable(text: str) -> str:
    r"""A text from elsewhere without control characters.

    >>> printable("a\x1b[31mb")
    'a?[31mb'
    """
    return "".join(letter if letter.isprintable() else "?" for letter in text)


def seconds_text(seconds: float) -> str:
    """A duration to the precision that matters.

    >>> seconds_text(0.25), seconds_text(75), seconds_text(12_000)
    ('0.2 s', '1 min 15 s', '3 h 20 min')
    """
    if seconds < 60:
        return f"{seconds:.1f} s" if seconds < 10 else f"{seconds:.0f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 60:
        return f"{minutes} min {rest} s"
    return f"{minutes // 60} h {minutes % 60} min"


def bytes_text(count: float) -> str:
    """A size in the largest decimal unit below it.

    >>> bytes_text(512), bytes_text(8.1e9)
    ('512 B', '8.1 GB')
    """
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.3g} {unit}"
        count /= 1000
    return f"{count:.3g} TB"


def line(text: str, style: str = "") -> Text:
    """A line of text from wherever, shown as it is."""
    return Text(printable(text), style=style)


def title_line(text: str) -> Text:
    """A heading."""
    return line(text, "bold")


def plain_table(*columns: str) -> Table:
    """An empty table with these heads."""
    table = Table(
        box=box.SIMPLE_HEAD,
        pad_edge=False,
        show_edge=False,
        header_style="bold",
        padding=(0, 1, 0, 0),
    )
    for column in columns:
        table.add_column(line(column), overflow="fold")
    return table


def cells(*texts: str) -> list[Text]:
    """Texts as the cells of a row."""
    return [line(text) for text in texts]


def facts_table(rows: Sequence[tuple[str, Any]]) -> RenderableType:
    """Names and values, one pair a line."""
    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    table.add_column(style="dim", no_wrap=True)
    table.add_column(overflow="fold")
    for name, value in rows:
        table.add_row(line(name), line(str(value)))
    return Padding(table, (0, 0, 0, 2))


def place_rows(
    grid: Grid, at: Mapping[str, Value], nominal: Sequence[str]
) -> list[tuple[str, str]]:
    """Where a question was asked, axis by axis."""
    return [
        (name, show_value(grid.axis(name), value) + (" (nominal)" if name in nominal else ""))
        for name, value in at.items()
    ]


def moved_lines(
    grid: Grid, moved: Mapping[str, float], at: Mapping[str, Value]
) -> list[RenderableType]:
    """Axes where the nearest node was taken."""
    return [
        line(
            f"{name} = {show_value(grid.axis(name), value)} lies between nodes: the nearest, "
            f"{show_value(grid.axis(name), at[name])}, was taken",
            "yellow",
        )
        for name, value in moved.items()
    ]


def rests_on(nodes: int, unknown: int) -> Text:
    """How many nodes an answer rests on, and how many were unknown."""
    text = f"rests on {nodes:,} nodes"
    if unknown:
        return line(
            f"{text}, {unknown:,} of them unknown (not computed yet); "
            "run its config again to compute them",
            "yellow",
        )
    return line(text)


def caution_text(codes: Sequence[str]) -> RenderableType:
    """The cautions that apply, in their short form."""
    return line(f"cautions: {caution_line(codes)}", "dim")


def half_sample_text(grid: Grid) -> str:
    """What to say beside an answer that shows a delay; empty when the loop has none."""
    delayed = any(path.startswith("delay.") for path in grid.paths())
    return f"delay: {HALF_SAMPLE}" if delayed else ""
