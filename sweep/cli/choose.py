"""Deciding with an atlas: which design to take at which sample period."""

from __future__ import annotations

import argparse

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
ROWS = 24


def _options(parser: argparse.ArgumentParser) -> None:
    add_atlas(parser)
    add_over(parser)
    add_require(parser)
    add_place(parser, unnamed="axes not named are chosen; of --design all but its period counts")
    add_within(parser)
    parser.add_argument(
        "--best",
        metavar="QUANTITY",
        default="decay_time",
        help="what to choose by: a measure of which less or more is better, at its worst over the "
        "tolerances, or gain_box, the middle of the widest box of gains (default decay_time)",
    )
    parser.add_argument(
        "--price",
        action="store_true",
        help="tell what each tolerance costs: what could be chosen were it halved, or removed",
    )
    parser.add_argument(
        "--rows",
        metavar="N",
        type=_rows,
        default=ROWS,
        help=f"most sample periods in the table (default {ROWS}); --json always has all",
    )


def _choose(arguments: argparse.Namespace) -> int:
    from sweep.query.assignments import parse_assignments, parse_single
    from sweep.query.atlas import open_atlas

    answer = open_atlas(arguments.atlas, arguments.shelf).choose(
        arguments.case,
        best=arguments.best,
        at=parse_assignments(arguments.at),
        over=parse_assignments(arguments.over, "--over"),
        within=parse_assignments(arguments.within, "--within"),
        require=parse_single(arguments.require, "--require"),
        shake=parse_single(arguments.shake, "--shake"),
        design=arguments.design,
        price=arguments.price,
    )
    if arguments.json:
        print_document(answer.to_json())
    else:
        from sweep.views.choose_table import choose_view

        print_view(choose_view(answer, arguments.rows))
    return 0 if answer.is_known else INCOMPLETE


def _rows(text: str) -> int:
    if not (text.isascii() and text.isdigit() and 1 <= int(text) <= 1_000_000):
        raise argparse.ArgumentTypeError(f"expected a whole number from 1, found {text!r}")
    return int(text)


COMMANDS = (
    Command(
        "choose",
        "decide",
        "the best design at each sample period, and what each tolerance costs",
        "For every sample period find the best of the designs that meet a case, or a box and "
        "bounds of its own, with the delay that is left to it; name the slowest period at which "
        "one still meets; and warn where an answer lies at the end of an axis or beside a node "
        "that fails. Where no design meets, the row shows the one that comes nearest.\n\n"
        "It ends with 0 also when no design meets, and with 3 only when nothing is known: what has "
        "to stop a build is asked with judge.\n\n"
        f"{BARE_NUMBERS}",
        "sweep choose first-look --case normal --price",
        _options,
        _choose,
    ),
)
