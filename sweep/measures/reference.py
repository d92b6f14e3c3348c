"""The slow path: eigenvalues of the closed loop's state matrix by LAPACK, with an error bound."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from sweep.loop.bounded import UNIT_ROUNDOFF, FloatArray
from sweep.loop.state_space import closed_loop_change
from sweep.vocabulary import LoopStructure


@dataclass(frozen=True)
class Radius:
    """The spectral radius of one node."""

    log_radius: float
    """Natural logarithm; minus infinity when every eigenvalue is 0, NaN when LAPACK fails."""
    mode_angle: float
    """Argument of the dominant eigenvalue, rad, 0 to pi."""
    error: float
    """Bound on the error of the radius itself, not of its logarithm."""


FAILED = Radius(math.nan, 0.0, math.inf)
"""What is returned when coefficients overflow or LAPACK does not converge."""


def compute_reference(structure: LoopStructure, values: Mapping[str, float]) -> Radius:
    """Spectral radius of one node from its state matrix.

    The error bound is that of a computed eigenvalue with a backward error of a few roundoffs of the
    matrix: by the eigenvalue's own condition where it stands clear of the others, by Elsner's
    theorem where it does not.

    Parameters
    ----------
    structure
        The loop's kinds and options.
    values
        Every parameter by dotted path, SI units (delay parts in their own).

    References
    ----------
    Golub, G. H., Van Loan, C. F. (2013), Matrix Computations, 4th ed., section 7.2. Elsner, L.
    (1985), An optimal bound for the spectral variation of two matrices, Linear Algebra Appl. 71.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        return _solve(closed_loop_change(structure, values))


def _solve(change: FloatArray) -> Radius:
    if not np.isfinite(change).all():
        return FAILED
    try:
        found, left, right = linalg.eig(change, left=True)
    except linalg.LinAlgError:
        return FAILED
    logarithms = _log_magnitudes(found)
    top = int(np.argmax(logarithms))
    level = logarithms[top] - 1e-13
    ties = found[logarithms >= level]
    errors = _eigenvalue_errors(change, found, left, right)
    radii = np.abs(1 + found)
    reach = max(float((radii + errors).max() - radii[top]), float(errors[top]))
    return Radius(
        log_radius=float(logarithms[top]),
        mode_angle=max(math.atan2(abs(tie.imag), 1 + tie.real) for tie in ties),
        error=reach + 4 * UNIT_ROUNDOFF * float(radii[top]),
    )


def _log_magnitudes(change: NDArray[np.complex128]) -> FloatArray:
    """log|1 + change|, without cancellation where that is near 0."""
    radii = np.abs(1 + change)
    near = np.abs(np.log(np.maximum(radii, np.finfo(float).tiny))) < 0.5
    beyond = np.where(near, 2 * change.real + np.abs(np.where(near, change, 0)) ** 2, 0.0)
    with np.errstate(divide="ignore"):
        return np.where(near, 0.5 * np.log1p(beyond), np.log(radii))


def _eigenvalue_errors(
    change: FloatArray, found: FloatArray, left: FloatArray, right: FloatArray
) -> FloatArray:
    size = len(found)
    norm = float(linalg.norm(change))
    # the doublings of the sampled plant lose more than the eigenvalue solver
    backward = 16 * (size + 8) * UNIT_ROUNDOFF * norm
    worst = (2 * norm + backward) ** (1 - 1 / size) * backward ** (1 / size)
    products = np.abs(np.sum(left.conj() * right, axis=0))
    simple = 2 * backward / np.maximum(products, np.finfo(float).tiny)
    gaps = np.abs(found[:, None] - found[None, :])
    gaps[np.diag_indices(size)] = np.inf
    clear = 4 * size * simple < gaps.min(axis=1, initial=np.inf)
    errors: FloatArray = np.where(clear, np.minimum(simple, worst), worst)
    return errors
