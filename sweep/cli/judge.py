"""Deciding with an atlas: the verdict on single designs, as a gate in a build."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from sweep.cli.command import BARE_NUMBERS, Command, add_atlas, add_require, flatten
from sweep.cli.output import print_document, print_view

if TYPE_CHECKING:
    from sweep.query.judge import AskedDesign
    from sweep.query.question import Demand
    from sweep.store.atlas import StoredAtlas

NOT_MET = 1
INCOMPLETE = 3
CONFIDENCE = 0.95


def _options(parser: argparse.ArgumentParser) -> None:
    add_atlas(parser)
    parser.add_argument(
        "--design",
        metavar="NAME,...",
        action="append",
        default=[],
        help="designs that are stored in the atlas (default: all of them); --at changes them",
    )
    parser.add_argument(
        "--at",
        metavar="AXIS=VALUE,...",
        action="append",
        default=[],
        help="a design of your own, such as kp=0.3,sample_period=5ms; with --design it changes "
        "what is named",
    )
    parser.add_argument(
        "--schedule",
        metavar="FILE.csv",
        type=Path,
        help="designs as the rows of a table: a column for each design axis, such as kp or "
        "kd [ms], perhaps label, and perhaps tolerances that hold for that row alone",
    )
    parser.add_argument(
        "--case",
        metavar="NAME,...",
        action="append",
        default=[],
        help="cases that are stored in the atlas (default: all of them); --over and --require come "
        "on top of each",
    )
    parser.add_argument(
        "--over",
        metavar="AXIS=LOW:HIGH,...",
        action="append",
        default=[],
        help="a box of your own, such as damping=0.005:0.02,bus=0:0.5; without --case it stands "
        "instead of the cases",
    )
    add_require(parser)
    parser.add_argument(
        "--confidence",
        metavar="SHARE",
        type=_share,
        default=CONFIDENCE,
        help=f"of the interval of a yield (default {CONFIDENCE})",
    )
    parser.add_argument(
        "--weights",
        metavar="FILE.csv",
        type=Path,
        help="weights of rows: a table with the columns AXIS and weight",
    )


def _judge(arguments: argparse.Namespace) -> int:
    from sweep.query.atlas import open_atlas
    from sweep.query.judge import judge_designs

    stored = open_atlas(arguments.atlas, arguments.shelf).stored
    answer = judge_designs(
        stored,
        _designs(arguments, stored),
        _demands(arguments, stored),
        confidence=arguments.confidence,
        weights=_weights(arguments.weights, stored),
    )
    if arguments.json:
        print_document(answer.to_json())
    else:
        from sweep.views.judge_table import judge_view

        print_view(judge_view(answer))
    return {"fails": NOT_MET, "unknown": INCOMPLETE}.get(answer.verdict, 0)


def _designs(arguments: argparse.Namespace, stored: StoredAtlas) -> list[AskedDesign]:
    """What is to be judged: named, given with ``--at``, or rows of a schedule."""
    from dataclasses import replace

    from sweep.query.judge import AskedDesign, named_designs
    from sweep.query.select import parse_single, resolve_names

    names, at = flatten(arguments.design), parse_single(arguments.at)
    found: list[AskedDesign] = []
    if names or not (at or arguments.schedule):
        found += named_designs(stored, names)
    if at and names:
        changed = resolve_names(stored.grid, at)
        found = [
            replace(
                design,
                name=f"{design.name} with {', '.join(f'{n}={v}' for n, v in at.items())}",
                at={n: v for n, v in design.at.items() if n not in changed} | dict(at),
            )
            for design in found
        ]
    elif at:
        found.append(AskedDesign("the design asked for", dict(at)))
    if arguments.schedule:
        from sweep.query.schedule import read_schedule

        found += read_schedule(arguments.schedule, stored.grid)
    return found


def _demands(arguments: argparse.Namespace, stored: StoredAtlas) -> list[Demand]:
    """Against what: cases, or one box and bounds of the question's own."""
    from sweep.query.question import Demand
    from sweep.query.requirement import find_case
    from sweep.query.select import parse_assignments, parse_single

    over = dict(parse_assignments(arguments.over))
    require, shake = parse_single(arguments.require), parse_single(arguments.shake)
    cases = [find_case(stored.cases, name) for name in flatten(arguments.case)]
    if not cases and not (over or require):
        cases = list(stored.cases)
    return [Demand(case, over, require, shake) for case in (cases or (None,))]


def _weights(path: Path | None, stored: StoredAtlas) -> dict[str, dict[str, float]] | None:
    if path is None:
        return None
    from sweep.query.schedule import read_weights

    return read_weights(path, stored.grid)


def _share(text: str) -> float:
    try:
        value = float(text[:-1]) / 100 if text.endswith("%") else float(text)
    except ValueError:
        value = 0.0
    if not 0.0 < value < 1.0:
        raise argparse.ArgumentTypeError(f"expected a share such as 0.95 or 95%, found {text!r}")
    return value


COMMANDS = (
    Command(
        "judge",
        "decide",
        "verdict on single designs; exit code 1 when one does not meet its requirement",
        "Judge designs against cases, line by line: the worst of the box with the node that gives "
        "it, how far instability is along every axis, what the tolerances have in hand, and the "
        "share of rows that meet. Between nodes the worst of the enclosing ones counts, and the "
        "answer says so. It is meant as a gate: exit code 0 when all meet, 1 when any fails, else "
        f"3 when any is unknown.\n\n{BARE_NUMBERS}",
        "sweep judge first-look --design quick --case normal --shake kp=5%",
        _options,
        _judge,
    ),
)
