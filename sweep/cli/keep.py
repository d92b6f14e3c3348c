"""Keeping what one has: memo."""

from __future__ import annotations

import argparse

from sweep.cli.command import Command, add_json
from sweep.cli.output import print_document, print_view


def _memo_options(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--clear", action="store_true", help="remove every kept answer; no atlas is touched"
    )
    add_json(parser)


def _memo(arguments: argparse.Namespace) -> int:
    from sweep.query.memo import Memo

    memo = Memo()
    removed = memo.clear() if arguments.clear else None
    facts = memo.facts()
    if arguments.json:
        entries, held = removed or (0, 0)
        print_document(facts.to_json() | {"removed_entries": entries, "removed_bytes": held})
        return 0
    from sweep.views.memo_table import memo_view

    print_view(memo_view(facts, removed))
    return 0


COMMANDS = (
    Command(
        "memo",
        "keep",
        "answers kept for the next time: where, how many, how large; --clear forgets",
        "Show the memo: answers over many tiles are kept in your cache folder, so that asking "
        "again takes no time. None is given once a tile under it was added, repaired or removed, "
        "a damaged one is made again, and the ones used longest ago make room for new ones. "
        "Clearing it costs time only.\n\n"
        "SWEEP_MEMO=0 (or off) in the environment switches it off; SWEEP_MEMO_BYTES says how many "
        "bytes it may hold (1000000000 when unset; no answer takes more than a quarter of it); "
        "XDG_CACHE_HOME says where your cache folder is.",
        "sweep memo --clear",
        _memo_options,
        _memo,
    ),
)
