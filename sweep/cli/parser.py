"""The command line's grammar and its help, grouped by what one wants."""

from __future__ import annotations

import argparse
import shutil
import textwrap
from collections.abc import Sequence

from sweep.cli import choose, judge, keep, limits, look, make, robust
from sweep.cli.command import Command
from sweep.cli.grammar import Parser

COMMANDS: tuple[Command, ...] = (
    *make.COMMANDS,
    *look.COMMANDS,
    *limits.COMMANDS,
    *robust.COMMANDS,
    *choose.COMMANDS,
    *judge.COMMANDS,
    *keep.COMMANDS,
)

GROUPS = {
    "make": "make an atlas",
    "look": "look into one",
    "decide": "decide with it",
    "keep": "keep what you have",
}
"""What one wants, in the order of a working week."""

_ABOUT = """\
Sweep a sampled control loop overnight over sample period, gains, delay and tolerances, keep every
node's closed-loop eigenvalues in an atlas, and ask it at the desk in seconds."""

_END = """\
Every command: --help with an example, --json for programs (one document on stdout).
Exit codes: 0 done; 1 a requirement is not met; 2 bad input; 3 the atlas is damaged or too
incomplete to answer; 130 interrupted, run again to go on."""


class _Overview(Parser):
    """The root parser; its help lists the commands by what one wants."""

    def format_help(self) -> str:
        lines = ["usage: sweep COMMAND ...", "", _ABOUT]
        for group, wish in GROUPS.items():
            members = [command for command in COMMANDS if command.group == group]
            if members:
                lines += ["", f"{wish}:"]
                lines += [f"  {member.name:<8}{member.summary}" for member in members]
        return "\n".join([*lines, "", _END, ""])


def build_parser() -> argparse.ArgumentParser:
    """The parser of the whole command line."""
    root = _Overview(prog="sweep", allow_abbrev=False)
    root.add_argument("--version", action="store_true", help=argparse.SUPPRESS)
    commands = root.add_subparsers(
        dest="command", metavar="COMMAND", parser_class=Parser, required=False
    )
    for command in COMMANDS:
        parser = commands.add_parser(
            command.name,
            prog=f"sweep {command.name}",
            description=_fill(command.description),
            epilog=f"example:\n  {command.example}",
            formatter_class=_Help,
            allow_abbrev=False,
        )
        command.add_options(parser)
        parser.set_defaults(run=command.run)
    return root


def wants_json(arguments: Sequence[str]) -> bool:
    """Whether the answer, and so an error as well, is to be a JSON document."""
    return "--json" in arguments


class _Help(argparse.RawDescriptionHelpFormatter):
    """Help that fits the terminal and never passes 100 columns."""

    def __init__(self, prog: str) -> None:
        super().__init__(prog, max_help_position=28, width=_columns())


def _fill(text: str) -> str:
    paragraphs = text.split("\n\n")
    return "\n\n".join(textwrap.fill(paragraph, _columns()) for paragraph in paragraphs)


def _columns() -> int:
    return max(40, min(100, shutil.get_terminal_size((100, 24)).columns) - 2)
