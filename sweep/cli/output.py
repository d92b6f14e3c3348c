"""What reaches the terminal: one answer on stdout, everything else on stderr."""

from __future__ import annotations

import json
import os
import shutil
import sys
from collections.abc import Mapping
from typing import Any, TextIO

from sweep.errors import SweepError

WIDEST = 108
"""Columns that a table takes at most, and all that it takes when nobody watches."""


def make_streams_safe() -> None:
    """Let a terminal without UTF-8 show a question mark where it lacks a letter, and not fail."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")


def print_document(document: Mapping[str, Any]) -> None:
    """The answer for a program: one JSON document on stdout, in ASCII, without NaN or Infinity."""
    print(json.dumps(document, indent=2, allow_nan=False))


def print_view(view: object, *, to: TextIO | None = None) -> None:
    """The answer for people: a table or a text from `sweep.views`."""
    from sweep.views.sheet import to_text

    stream = to or sys.stdout
    watched = stream.isatty()
    columns = shutil.get_terminal_size((WIDEST, 24)).columns if watched else WIDEST
    text = to_text(
        view,
        width=max(20, min(columns, WIDEST)),
        terminal=watched,
        encoding=stream.encoding or "utf-8",
    )
    print(text, file=stream, end="")


def print_text(text: str) -> None:
    """An answer that is one line of text, on stdout."""
    print(text)


def print_note(text: str) -> None:
    """Something to know beside the answer, on stderr; control characters are not passed on."""
    shown = "".join(c if c.isprintable() or c == "\n" else "?" for c in text)
    print(shown, file=sys.stderr)


def report_error(error: SweepError, *, as_json: bool) -> int:
    """Say what went wrong, on stderr or as a document on stdout; returns the exit code."""
    if as_json:
        print_document(
            {
                "error": error.kind,
                "message": error.message,
                "where": list(error.where),
                "remedy": error.remedy,
            }
        )
    else:
        print_note(f"sweep: {error}")
    return error.exit_code


def hush_broken_pipe() -> None:
    """Keep the interpreter's last flush from complaining that the reader has left."""
    sink = os.open(os.devnull, os.O_WRONLY)
    for stream in (sys.stdout, sys.stderr):
        try:
            stream.flush()
        except BrokenPipeError:
            os.dup2(sink, stream.fileno())
