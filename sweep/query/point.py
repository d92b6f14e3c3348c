"""What is stored at one node, and what follows from it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING

from sweep.query.answers import PointAnswer
from sweep.query.cautions import AT_A_NODE
from sweep.query.derived import derive
from sweep.query.held import hold_nodes
from sweep.query.select import Asked
from sweep.vocabulary import STABILITY_THRESHOLD

if TYPE_CHECKING:
    from sweep.store.atlas import StoredAtlas


def find_point(stored: StoredAtlas, asked: Mapping[str, Asked], *, nearest: bool) -> PointAnswer:
    """Read one node.

    Parameters
    ----------
    stored
        The atlas.
    asked
        Values of axes; one that is not named is taken at its nominal node.
    nearest
        Whether the nearest node will do where a value lies between nodes.

    Raises
    ------
    QuestionError
        When a value is not at a node.
    """
    held = hold_nodes(stored.grid, asked, nearest=nearest)
    block = tuple(slice(node, node + 1) for node in held.node)
    measures = {
        spec.name: float(stored.read(spec.name, block).reshape(-1)[0]) for spec in stored.measures
    }
    period_s = float(stored.grid.parameters(block)["sample_period"].reshape(-1)[0])
    log_radius = measures["log_radius"]
    return PointAnswer(
        atlas_id=stored.atlas_id,
        grid=stored.grid,
        node=held.node,
        at=held.at,
        measures=measures,
        derived=derive(log_radius, measures["mode_angle"], period_s),
        stable=None if math.isnan(log_radius) else log_radius < STABILITY_THRESHOLD,
        nominal=held.nominal,
        moved=held.moved,
        cautions=AT_A_NODE,
    )
