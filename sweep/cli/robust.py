"""Deciding with an atlas: which designs survive every tolerance."""

from __future__ import annotations

import argparse
from collections.abc import Mapping

from sweep.cli.command import (
    BARE_NUMBERS,
    Command,
    add_atlas,
    add_over,
    add_place,
    add_require,
    add_within,
)
from sweep.cli.output import print_document, print_view

INCOMPLETE = 3


def _options(parser: argparse.ArgumentParser) -> None:
    add_atlas(parser)
    add_over(parser)
    add_require(parser)
    add_place(parser, unnamed="design axes that are not named are free")
    add_within(parser)
    parser.add_argument(
        "--around",
        metavar="DESIGN",
        default="",
        help="a design that the largest box has to hold: its name, or kp=0.3,sample_period=5ms",
    )


def _robust(arguments: argparse.Namespace) -> int:
    from sweep.query.assignments import parse_assignments, parse_single
    from sweep.query.atlas import open_atlas

    answer = open_atlas(arguments.atlas, arguments.shelf).robust(
        arguments.case,
        at=parse_assignments(arguments.at),
        over=parse_assignments(arguments.over, "--over"),
        within=parse_assignments(arguments.within, "--within"),
        require=parse_single(arguments.require, "--require"),
        shake=parse_single(arguments.shake, "--shake"),
        around=_place(arguments.around),
        design=arguments.design,
    )
    if arguments.json:
        print_document(answer.to_json())
    else:
        from sweep.views.robust_table import robust_view

        print_view(robust_view(answer))
    nothing_known = answer.meets + answer.fails == 0 and answer.unknown > 0
    return INCOMPLETE if nothing_known else 0


def _place(text: str) -> Mapping[str, str] | str | None:
    from sweep.query.assignments import parse_single

    if "=" in text:
        return parse_single([text], "--around")
    return text or None


COMMANDS = (
    Command(
        "robust",
        "decide",
        "which designs survive every tolerance, and how far they may drift",
        "Judge every design of the atlas against a case, or against a box and bounds of its own: "
        "how many meet, in how many separate regions, the largest box of gains and sample periods "
        "in which every node meets, and the node that comes nearest to instability. What is not "
        "computed counts as unknown and never as meeting.\n\n"
        "It ends with 0 also when no design meets, and with 3 only when nothing is known: what has "
        f"to stop a build is asked with judge.\n\n{BARE_NUMBERS}",
        "sweep robust first-look --case normal --around slow",
        _options,
        _robust,
    ),
)
