"""Logarithm and argument on lanes, where a call for each double would cost as much as the roots.

References
----------
Moshier, S. L. (1989), Methods and Programs for Mathematical Functions: the rational approximation
of the arc tangent. The logarithm is the series of the inverse hyperbolic tangent.
"""

from __future__ import annotations

import math

from sweep.measures.disks import Lanes, compiled
from sweep.measures.lanes import exponent, mantissa, spread, where_greater

_ATANH = tuple(1.0 / (2 * k + 1) for k in range(12))
_ATAN_TOP = (
    -8.750608600031904122785e-1,
    -1.615753718733365076637e1,
    -7.500855792314704667340e1,
    -1.228866684490136173410e2,
    -6.485021904942025371773e1,
)
_ATAN_BOTTOM = (
    1.0,
    2.485846490142306297962e1,
    1.650270098316988542046e2,
    4.328810604912902668951e2,
    4.853903996359136964868e2,
    1.945506571482613964425e2,
)
_LN_2 = math.log(2.0)
_QUARTER_TURN, _EIGHTH_TURN = math.pi / 2, math.pi / 4


@compiled
def log_of_radius(beyond: Lanes, modulus: Lanes) -> Lanes:
    """Natural logarithm of a radius.

    Parameters
    ----------
    beyond
        Its square less 1, which keeps the digits of a radius near 1.
    modulus
        The radius, 1e-150 to 1e150, which keeps those of a small one.
    """
    half = spread(0.5)
    square = where_greater(modulus, half, 1.0 + beyond, modulus * modulus)
    # what 1 + beyond has lost
    lost = where_greater(modulus, half, beyond - (square - 1.0), spread(0.0)) / square
    part = mantissa(square)
    s = (part - 1.0) / (part + 1.0)
    t = s * s
    total = spread(_ATANH[11])
    for k in range(10, -1, -1):
        total = total * t + _ATANH[k]
    return 0.5 * (2.0 * s * total + lost + exponent(square) * _LN_2)


@compiled
def argument(x: Lanes, y: Lanes) -> Lanes:
    """Argument of x + j |y|, rad, 0 to pi; 0 at the origin."""
    width = where_greater(x, spread(0.0), x, 0.0 - x)
    height = where_greater(y, spread(0.0), y, 0.0 - y)
    small = where_greater(width, height, height, width)
    large = where_greater(width, height, width, height)
    large = where_greater(large, spread(0.0), large, spread(1.0))
    is_wide = 0.66 * large - small
    top = where_greater(is_wide, spread(0.0), small, small - large)
    bottom = where_greater(is_wide, spread(0.0), large, small + large)
    r = top / bottom
    t = r * r
    above, below = spread(_ATAN_TOP[0]), spread(_ATAN_BOTTOM[0])
    for k in range(1, 5):
        above = above * t + _ATAN_TOP[k]
    for k in range(1, 6):
        below = below * t + _ATAN_BOTTOM[k]
    angle = r + r * t * (above / below)
    angle = angle + where_greater(is_wide, spread(0.0), spread(0.0), spread(_EIGHTH_TURN))
    angle = where_greater(height, width, _QUARTER_TURN - angle, angle)
    return where_greater(spread(0.0), x, math.pi - angle, angle)
