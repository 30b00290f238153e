"""The measurement correction every Gaussian filter shares.

K = C' S^-1 by a Cholesky solve, with C = cov(z, x) and S = cov(z); missing components are taken out
by a zero cross-covariance, a zero residual and a unit variance, which equals an update with the
rest (Y. Bar-Shalom, X. R. Li, T. Kirubarajan 2001, eq. 5.2.3-14 for the gain).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from flyoff.estimators.contract import Innovation
from flyoff.models.model import mask_missing
from flyoff.numerics import counts, linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array

__all__ = ["Correction", "correct", "correction_counts", "missing_components"]


@dataclass(frozen=True)
class Correction:
    """Gain K' (m, d, M), its half L^-1 C (m, d, M), state correction (d, M), diagnostics."""

    gain: Array
    half: Array
    delta: Array
    ok: Array
    innovation: Innovation


def missing_components(z: Array, runs: int) -> Array | None:
    """Mask (m, M) of missing (NaN) components, or None if none is."""
    total = np.add.reduce(z, axis=None)
    if total == total:  # a sum that equals itself holds no NaN
        return None
    gone = np.isnan(z)
    if not gone.any():
        return None
    return np.broadcast_to(gone, (z.shape[0], runs))


def correct(cross: Array, s: Array, residual: Array, missing: Array | None) -> Correction:
    """Gain and correction of one reading.

    Parameters
    ----------
    cross : (m, d, M), C = cov(z, x)
    s : (m, m, M), covariance of the innovation
    residual : (m, M), NaN where missing
    missing : (m, M) or None
    """
    m, d, runs = cross.shape
    if missing is not None:
        s, residual = mask_missing(s, residual, missing)
        cross = np.where(missing[:, None], cross.dtype.type(0), cross)
    low, ok = linalg.cholesky(s)
    # one substitution for C and the residual together
    both = np.empty((m, d + 1, runs), cross.dtype)
    both[:, :d] = cross
    both[:, d] = residual
    linalg.solve_lower(low, both)
    half, white = both[:, :d], both[:, d]
    delta = linalg.einsum("mdr,mr->dr", half, white)
    gain = linalg.back_substitute(low, half.copy())
    return Correction(gain, half, delta, ok, Innovation(residual, low, white, missing))


def correction_counts(d: int, m: int) -> Counts:
    """Operations of `correct`: factor of S, two triangular solves, the state correction."""
    return (
        counts.cholesky(m)
        + counts.triangular_solve(m, d + 1)
        + counts.triangular_solve(m, d)
        + counts.product(d, m, 1)
    )
