"""Looking into an atlas: info, point, map."""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from sweep.cli.command import (
    BARE_NUMBERS,
    HALF_SAMPLE,
    Command,
    add_atlas,
    add_nearest,
    add_place,
)
from sweep.cli.output import print_document, print_note, print_view
from sweep.errors import InputError

if TYPE_CHECKING:
    from sweep.query.answers import PointAnswer
    from sweep.vocabulary import LoopStructure

PICTURES = (".png", ".svg", ".pdf")
INCOMPLETE = 3


def _info(arguments: argparse.Namespace) -> int:
    from sweep.query.atlas import open_atlas

    facts = open_atlas(arguments.atlas, arguments.shelf).facts()
    if arguments.json:
        print_document(facts.to_json())
        return 0
    from sweep.views.tables import info_view

    print_view(info_view(facts))
    return 0


def _point_options(parser: argparse.ArgumentParser) -> None:
    add_atlas(parser)
    add_place(parser, unnamed="an axis that is not named is taken at its nominal value")
    add_nearest(parser)


def _point(arguments: argparse.Namespace) -> int:
    from sweep.query.assignments import parse_assignments
    from sweep.query.atlas import open_atlas

    atlas = open_atlas(arguments.atlas, arguments.shelf)
    answer = atlas.point(
        parse_assignments(arguments.at), design=arguments.design, nearest=arguments.nearest
    )
    computed = compute_now(atlas.structure, answer)
    if arguments.json:
        print_document(answer.to_json() | {"computed_now": computed})
    else:
        from sweep.views.tables import point_view

        print_view(point_view(answer, computed))
    return INCOMPLETE if answer.stable is None else 0


def compute_now(structure: LoopStructure, answer: PointAnswer) -> dict[str, Any]:
    """Modes and realised coefficients of one loop: arithmetic, not a look-up.

    Returns
    -------
    ``modes``, each with ``eigenvalue`` [real, imaginary] and ``magnitude``, its frequency ``hz``,
    its ``damping`` ratio and its ``decay_time`` in s ("inf" when it is not stable); and
    ``coefficients`` of the polynomials in z, highest power first, down to z^0, with the power of z
    in ``whole_delay`` that comes to the plant's denominator; and ``delay_samples``, the whole delay
    as it is.
    """
    from sweep.loop.closed_loop import modes, realise
    from sweep.query.answers import plain
    from sweep.query.facts import delay_in_samples

    values = answer.parameters
    realised = realise(structure, values)
    found: dict[str, Any] = plain(
        {
            "modes": [
                {
                    "eigenvalue": [mode.eigenvalue.real, mode.eigenvalue.imag],
                    "magnitude": mode.magnitude,
                    "hz": mode.frequency_hz,
                    "damping": mode.damping,
                    "decay_time": mode.decay_time_s,
                }
                for mode in modes(structure, values)
            ],
            "delay_samples": delay_in_samples(structure, values),
            "coefficients": {
                "plant_numerator": realised.plant_numerator,
                "plant_denominator": realised.plant_denominator,
                "whole_delay": realised.whole_delay,
                "controller_numerator": realised.controller_numerator,
                "controller_denominator": realised.controller_denominator,
            },
        }
    )
    return found


def _map_options(parser: argparse.ArgumentParser) -> None:
    add_atlas(parser)
    parser.add_argument("-x", metavar="AXIS", required=True, help="the axis to the right")
    parser.add_argument("-y", metavar="AXIS", required=True, help="the axis upwards")
    parser.add_argument(
        "-o",
        metavar="FILE",
        type=_picture,
        required=True,
        help="the picture to write; its ending says which kind: .png, .svg or .pdf",
    )
    add_place(parser, unnamed="an axis that is not named is held at its nominal value")
    add_nearest(parser)


def _map(arguments: argparse.Namespace) -> int:
    from sweep.query.assignments import parse_assignments
    from sweep.query.atlas import open_atlas

    atlas = open_atlas(arguments.atlas, arguments.shelf)
    plane = atlas.plane(
        arguments.x,
        arguments.y,
        at=parse_assignments(arguments.at),
        design=arguments.design,
        nearest=arguments.nearest,
    )
    from sweep.views.quiet import without_matplotlib_talk

    with without_matplotlib_talk():
        from sweep.views.figures import draw_map, save_figure

    path: Path = arguments.o
    save_figure(draw_map(plane), path)
    document: Mapping[str, Any] = plane.to_json() | {"file": str(path)}
    if arguments.json:
        print_document(document)
    else:
        print_note(f"Wrote {path}")
        from sweep.views.tables import plane_view

        print_view(plane_view(plane))
    return INCOMPLETE if plane.unknown == plane.log_radius.size else 0


def _picture(text: str) -> Path:
    path = Path(text)
    if path.suffix.lower() not in PICTURES:
        raise argparse.ArgumentTypeError(
            f"expected a file that ends in {', '.join(PICTURES)}, found {text!r}"
        )
    if not path.parent.is_dir():
        raise InputError(
            f"writing the map to {path}: there is no folder {path.parent}",
            where=[str(path)],
            remedy="make the folder first, or name another file",
        )
    return path


COMMANDS = (
    Command(
        "info",
        "look",
        "one atlas: loop, delay budget, axes, measures, how complete, where it comes from",
        "Show what an atlas holds: the loop, the delay budget, every axis with its role, the "
        f"measures, how much of it is computed, and its origin.\n\n{HALF_SAMPLE}",
        "sweep info first-look",
        add_atlas,
        _info,
    ),
    Command(
        "point",
        "look",
        "one node: measures, modes in Hz, decay time, realised coefficients",
        "Show one node: the stored measures and what follows from them, and, computed now from "
        "the node's parameters, the closed-loop modes and the coefficients as the firmware would "
        f"hold them.\n\n{BARE_NUMBERS}\n\n{HALF_SAMPLE}",
        "sweep point first-look --at kp=0.3,sample_period=5ms",
        _point_options,
        _point,
    ),
    Command(
        "map",
        "look",
        "stability map over two axes as PNG, SVG or PDF",
        "Draw the stability map over two axes, the others held. What is stable is shaded by "
        "its decay time constant, the boundary is a line, and what is not computed is "
        f"hatched.\n\n{BARE_NUMBERS}",
        "sweep map first-look -x sample_period -y kp -o map.png",
        _map_options,
        _map,
    ),
)
