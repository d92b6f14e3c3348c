"""Making an atlas: new, plan, run."""

from __future__ import annotations

import argparse
import re
from datetime import time
from pathlib import Path
from typing import TYPE_CHECKING

from sweep.cli.command import HALF_SAMPLE, Command, add_config, add_json, add_shelf
from sweep.cli.output import print_document, print_note, print_view
from sweep.errors import InputError

if TYPE_CHECKING:
    from sweep.compute.progress import Listener

STARTERS = ("axis", "converter", "process")


def _new_options(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "file", metavar="FILE", type=Path, help="where to write it, such as my.toml"
    )
    parser.add_argument(
        "--for",
        dest="job",
        choices=STARTERS,
        default="axis",
        help="a servo axis with a resonance (default), a power converter's output filter, or a "
        "slow process loop",
    )
    add_json(parser)


def _new(arguments: argparse.Namespace) -> int:
    from sweep.config import starter_text

    path: Path = arguments.file
    try:
        with path.open("x", encoding="utf-8", newline="\n") as file:
            file.write(starter_text(arguments.job))
    except FileExistsError as error:
        raise InputError(
            f"writing a starter config to {path}: the file is there already and was left alone",
            where=[str(path)],
            remedy="name a file that does not exist yet",
        ) from error
    except OSError as error:
        gone = isinstance(error, FileNotFoundError)
        found = "there is no such folder" if gone else f"the system says: {error.strerror}"
        raise InputError(
            f"writing a starter config to {path}: expected a folder {path.parent} that can be "
            f"written; {found}",
            where=[str(path)],
            remedy="make the folder first, or name another file",
        ) from error
    if arguments.json:
        print_document({"file": str(path), "for": arguments.job})
    else:
        print_note(f"Wrote {path}. Put your loop's numbers in, then: sweep plan {path}")
    return 0


def _plan_options(parser: argparse.ArgumentParser) -> None:
    add_config(parser)
    add_shelf(parser)
    _add_sizes(parser)
    add_json(parser)


def _plan(arguments: argparse.Namespace) -> int:
    from sweep.compute.plan import plan_sweep
    from sweep.config import load_config

    config = load_config(arguments.config)
    plan = plan_sweep(config, arguments.shelf, tile_shape=arguments.tile, workers=arguments.workers)
    if arguments.json:
        print_document(plan.to_json())
        return 0
    from sweep.views.tables import plan_view

    print_view(plan_view(plan.to_json(), config.grid, config.title))
    return 0


def _run_options(parser: argparse.ArgumentParser) -> None:
    add_config(parser)
    add_shelf(parser)
    parser.add_argument(
        "--until",
        metavar="HH:MM",
        type=_clock,
        help="stop in good order by that time of day; the next run goes on from there",
    )
    _add_sizes(parser)
    add_json(parser)


def _run(arguments: argparse.Namespace) -> int:
    import sys

    from sweep.compute.run import run_sweep
    from sweep.config import load_config
    from sweep.views.progress import progress_listener

    config = load_config(arguments.config)
    with progress_listener(sys.stderr) as listener:
        typed: Listener = listener
        report = run_sweep(
            config,
            arguments.shelf,
            workers=arguments.workers,
            until=arguments.until,
            tile_shape=arguments.tile,
            listener=typed,
        )
    document = report.to_json()
    if arguments.json:
        print_document(document)
    else:
        from sweep.views.tables import run_view

        print_view(run_view(document))
    return 130 if document.get("interrupted") else 0


def _add_sizes(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--workers",
        metavar="N",
        type=_count,
        help="tiles computed at once (default: one for each processor)",
    )
    parser.add_argument(
        "--tile",
        metavar="SHAPE",
        type=_shape,
        help="nodes of a tile along each axis, such as 16x64x8; an atlas keeps the shape it was "
        "made with",
    )


def _count(text: str) -> int:
    if not (text.isascii() and text.isdigit() and 1 <= int(text) <= 1024):
        raise argparse.ArgumentTypeError(f"expected a whole number from 1 to 1024, found {text!r}")
    return int(text)


def _clock(text: str) -> time:
    match = re.fullmatch(r"([01]?[0-9]|2[0-3]):([0-5][0-9])", text)
    if match is None:
        raise argparse.ArgumentTypeError(f"expected a time of day such as 06:30, found {text!r}")
    return time(int(match[1]), int(match[2]))


def _shape(text: str) -> tuple[int, ...]:
    if not re.fullmatch(r"[1-9][0-9]{0,7}([x,][1-9][0-9]{0,7})*", text):
        raise argparse.ArgumentTypeError(f"expected nodes per axis such as 16x64x8, found {text!r}")
    return tuple(int(part) for part in re.split("[x,]", text))


COMMANDS = (
    Command(
        "new",
        "make",
        "write a starter config with comments, for a servo axis, a converter or a process",
        "Write a commented starter config, short enough to read at once. It never overwrites a "
        f"file.\n\n{HALF_SAMPLE}",
        "sweep new head.toml --for axis",
        _new_options,
        _new,
    ),
    Command(
        "plan",
        "make",
        "check a config: axes and roles, nodes, tiles, time and disk, what is done already",
        "Check a config and say what running it would take: every axis with its role, nodes and "
        "tiles, the time as measured on one tile, the disk needed against the disk free, and how "
        "much of it is on the shelf already. Designs and case bounds between nodes are named with "
        "the `include` that would make each a node. Writes nothing.",
        "sweep plan configs/first-look.toml",
        _plan_options,
        _plan,
    ),
    Command(
        "run",
        "make",
        "compute what is missing; safe to interrupt, goes on where it stopped",
        "Compute every tile of a config that is not on the shelf yet. Ctrl-C stops in good order, "
        "and whatever stops it, running again computes only what is missing. A finished config "
        "says so and computes nothing.",
        "sweep run configs/overnight.toml --until 06:30",
        _run_options,
        _run,
    ),
)
