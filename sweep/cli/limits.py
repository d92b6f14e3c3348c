"""Deciding with an atlas: limits."""

from __future__ import annotations

import argparse

from sweep.cli.command import BARE_NUMBERS, Command, add_atlas, add_over, add_place
from sweep.cli.grammar import flatten
from sweep.cli.output import print_document, print_view

INCOMPLETE = 3
ROWS = 200


def _limits_options(parser: argparse.ArgumentParser) -> None:
    add_atlas(parser)
    parser.add_argument(
        "--along", metavar="AXIS", required=True, help="the axis to find the boundary on"
    )
    add_place(parser, unnamed="design axes that are not named are listed")
    add_over(parser)
    parser.add_argument(
        "--each",
        metavar="AXIS,...",
        action="append",
        default=[],
        help="list this axis node by node, a tolerance as well",
    )
    parser.add_argument(
        "--nominal",
        action="store_true",
        help="take every axis that is not named at its nominal value, and no worst case",
    )
    parser.add_argument(
        "--rows", metavar="N", type=_rows, default=ROWS, help=f"most rows to list (default {ROWS})"
    )


def _limits(arguments: argparse.Namespace) -> int:
    from sweep.query.assignments import parse_assignments
    from sweep.query.atlas import open_atlas

    each = flatten(arguments.each, "--each")
    atlas = open_atlas(arguments.atlas, arguments.shelf)
    answer = atlas.limits(
        arguments.along,
        at=parse_assignments(arguments.at),
        over=parse_assignments(arguments.over, "--over"),
        each=each,
        nominal=arguments.nominal,
        design=arguments.design,
        case=arguments.case,
        rows=arguments.rows,
    )
    if arguments.json:
        print_document(answer.to_json())
    else:
        from sweep.views.limits_table import limits_view

        print_view(limits_view(answer))
    return INCOMPLETE if any(row.unknown and not row.intervals for row in answer.rows) else 0


def _rows(text: str) -> int:
    if not (text.isascii() and text.isdigit() and 1 <= int(text) <= 1_000_000):
        raise argparse.ArgumentTypeError(f"expected a whole number from 1, found {text!r}")
    return int(text)


COMMANDS = (
    Command(
        "limits",
        "decide",
        "stability boundary along one axis, for the worst of the tolerances",
        "Find the stable stretches of one axis. At every node the worst of the tolerance box "
        "counts; between nodes the boundary is interpolated, and each end names its two nodes and "
        "how stability is lost there: drift, alternation (every other sample), or oscillation with "
        f"its frequency.\n\n{BARE_NUMBERS}",
        "sweep limits first-look --along kp --at sample_period=5ms --over damping=0.005:0.02",
        _limits_options,
        _limits,
    ),
)
