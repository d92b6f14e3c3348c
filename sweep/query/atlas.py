"""An atlas that can be asked: the one object that a notebook needs."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query.answers import LimitsAnswer, Mark, PlaneAnswer, PointAnswer
from sweep.query.cautions import AT_A_NODE, BETWEEN_NODES
from sweep.query.limits import MOST_ROWS, find_limits, resolve_limits
from sweep.query.select import (
    Asked,
    Value,
    find_axis,
    find_node,
    one_value,
    resolve_names,
    value_at,
)
from sweep.vocabulary import STABILITY_THRESHOLD

if TYPE_CHECKING:
    import xarray

    from sweep.store.atlas import StoredAtlas
