"""Resampling of weighted particles by counts.

Systematic resampling (G. Kitagawa, J. Comput. Graph. Stat. 5(1):1-25, 1996; compared in R. Douc,
O. Cappe, E. Moulines, Proc. ISPA 2005): copies of particle j are the integers in
(N C_{j-1} - u, N C_j - u], so counts follow from a ceiling of the cumulative weights.
"""

from __future__ import annotations

import numpy as np

from flyoff.numerics.spaces import Array

__all__ = ["ancestors", "systematic_counts"]


def systematic_counts(weights: Array, u: Array) -> Array:
    """Copies of each particle (N, M), summing to N.

    Parameters
    ----------
    weights : (N, M), summing to one over particles
    u : (M,), uniform on [0, 1)
    """
    size = weights.shape[0]
    edges = np.cumsum(weights, axis=0)
    edges *= size / edges[-1]
    edges[-1] = size
    upper = np.ceil(edges - u)
    np.clip(upper, 0, size, out=upper)
    upper[-1] = size
    out = upper.astype(np.intp)
    out[1:] -= out[:-1].copy()
    return out


def ancestors(copies: Array) -> Array:
    """Index of the parent of each new particle (N, M) from the copies of each (N, M)."""
    size, runs = copies.shape
    flat = np.repeat(np.tile(np.arange(size), runs), np.ascontiguousarray(copies.T).ravel())
    return np.ascontiguousarray(flat.reshape(runs, size).T)
