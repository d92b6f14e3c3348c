"""The verdict on a node, a design or a region: meets, fails, unknown, or not to be built at all."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

Verdict = Literal["meets", "fails", "unknown", "excluded"]
Codes = NDArray[np.int8]
"""Verdicts as small numbers."""

MEETS, FAILS, UNKNOWN, EXCLUDED = 1, 0, -1, -2

NAMES: dict[int, Verdict] = {
    MEETS: "meets",
    FAILS: "fails",
    UNKNOWN: "unknown",
    EXCLUDED: "excluded",
}
"""Code -> word."""


def decide(fails: NDArray[np.bool_], unknown: NDArray[np.bool_]) -> Codes:
    """Verdicts from what is known to fail and what is not known.

    Whatever is known to fail fails, however much else is unknown.

    >>> decide(np.array([True, True, False, False]), np.array([True, False, True, False])).tolist()
    [0, 0, -1, 1]
    """
    verdict = np.where(unknown, np.int8(UNKNOWN), np.int8(MEETS))
    verdict[fails] = FAILS
    return verdict
