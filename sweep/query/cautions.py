"""What an answer does not say: nine cautions, each in a short and a long form."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Caution:
    """One limit of what an answer means."""

    code: str
    """``C1`` to ``C9``."""
    short: str
    """A few words, for beside a verdict."""
    long: str
    """A sentence or two, as an atlas's facts tell it."""


CAUTIONS: dict[str, Caution] = {
    caution.code: caution
    for caution in (
        Caution(
            "C1",
            "linear model",
            "The loop is linear: what is said holds for small signals around one operating point.",
        ),
        Caution(
            "C2",
            "constant tolerances",
            "Every tolerance is constant in time. Jitter, switching between values and fast "
            "scheduling are outside, unless a measure says that it covers them.",
        ),
        Caution(
            "C3",
            "ideal synchronous sampling",
            "Sampling is ideal and synchronous, at one rate, in one loop.",
        ),
        Caution(
            "C4",
            "exact arithmetic",
            "Coefficients are exact and signals are never rounded: word lengths play no part.",
        ),
        Caution(
            "C5",
            "no saturation, friction or backlash",
            "Nothing saturates, sticks or has play. A real actuator does all three.",
        ),
        Caution(
            "C6",
            "checked at nodes, not between",
            "Loops were computed at the nodes. Between nodes the answer is interpolated, and a "
            "feature narrower than the spacing can be missed.",
        ),
        Caution(
            "C7",
            "the tolerance box is your claim",
            "The worst case is the worst within the ranges asked for. Whether nature keeps to them "
            "is for whoever chose them to show.",
        ),
        Caution(
            "C8",
            "modes above the model are outside",
            "Resonances and lags above the model's highest are not in it; fast loops find them.",
        ),
        Caution(
            "C9",
            "not a safety case: first close the loop on limited energy behind a working stop",
            "This is not a safety case. A control loop moves things: close it the first time on "
            "limited energy, behind a stop that was seen to work, with nobody in reach, and under "
            "the local codes and by the licensed practice that apply.",
        ),
    )
}
"""By code, in order."""

AT_A_NODE = ("C1", "C2", "C3", "C4", "C5", "C8", "C9")
"""What applies to the numbers of one node."""

BETWEEN_NODES = ("C1", "C2", "C3", "C4", "C5", "C6", "C8", "C9")
"""What applies once an answer speaks of what lies between nodes."""

OVER_A_BOX = ("C1", "C2", "C3", "C4", "C5", "C6", "C7", "C8", "C9")
"""What applies to a worst case over a tolerance box."""


def caution_line(codes: Iterable[str]) -> str:
    """The short forms of ``codes`` as one line, with the codes for looking up the long ones.

    >>> caution_line(["C1", "C7"])
    'C1 linear model; C7 the tolerance box is your claim'
    """
    return "; ".join(f"{code} {CAUTIONS[code].short}" for code in codes)
