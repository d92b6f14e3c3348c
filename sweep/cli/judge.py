"""Deciding with an atlas: the verdict on single designs, as a gate in a build."""

from __future__ import annotations

import argparse
from pathlib import Path

from sweep.cli.command import BARE_NUMBERS, Command, add_atlas, add_require
from sweep.cli.grammar import flatten
from sweep.cli.output import print_document, print_view

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
    from sweep.query.assignments import parse_assignments, parse_single
    from sweep.query.atlas import open_atlas

    designs, cases = flatten(arguments.design, "--design"), flatten(arguments.case, "--case")
    answer = open_atlas(arguments.atlas, arguments.shelf).judge(
        designs,
        case=cases,
        at=parse_single(arguments.at),
        schedule=arguments.schedule,
        over=parse_assignments(arguments.over, "--over"),
        require=parse_single(arguments.require, "--require"),
        shake=parse_single(arguments.shake, "--shake"),
        confidence=arguments.confidence,
        weights=arguments.weights,
    )
    if arguments.json:
        print_document(answer.to_json())
    else:
        from sweep.views.judge_table import judge_view

        print_view(judge_view(answer))
    return {"fails": NOT_MET, "unknown": INCOMPLETE}.get(answer.verdict, 0)


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
