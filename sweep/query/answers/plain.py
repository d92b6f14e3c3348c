"""Values as programs and people read them.

In the JSON documents there is no NaN and no Infinity: what is unknown is null, what is unbounded is
the text "inf" or "-inf".
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from sweep.grid import Axis
from sweep.quantities import format_quantity
from sweep.query.select import Value


def plain(value: Any) -> Any:  # noqa: ANN401 - whatever JSON holds, in and out
    """Make a value fit for strict JSON.

    >>> plain({"a": math.nan, "b": (1, -math.inf)})
    {'a': None, 'b': [1, '-inf']}
    """
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [plain(item) for item in value]
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None if math.isnan(value) else ("inf" if value > 0 else "-inf")
    return value


def show_value(axis: Axis, value: Value) -> str:
    """A coordinate with its unit as an engineer would write it, or a row's label."""
    if isinstance(value, str):
        return value
    return format_quantity(value, axis.unit, axis.display_unit)
