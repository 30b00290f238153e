"""Batched linear algebra on component-first arrays: (d, d, M), runs last.

The Python loops run over matrix rows; every array operation runs over all runs at once. Products
are `einsum` over component-first operands, whose inner loop is the run axis: measured faster than
`matmul` on copies up to about 12 rows, and its bits do not depend on the number of runs from two
runs up (the time loop pads a single run to two).
"""

from __future__ import annotations

import numpy as np

from flyoff.numerics.spaces import Array

__all__ = [
    "back_substitute",
    "cholesky",
    "lower_quadratic",
    "product",
    "product_t",
    "solve_lower",
    "symmetrise",
]


def cholesky(a: Array) -> tuple[Array, Array]:
    """Lower Cholesky factor of `a` (d, d, M) and the mask (M,) of runs where it exists.

    Only the lower triangle is read. Runs without a factor hold NaN; nothing is raised.
    """
    d = a.shape[0]
    low = np.zeros_like(a)
    work = a.copy()
    for j in range(d):
        root = low[j, j]
        np.sqrt(work[j, j], out=root)
        if j + 1 < d:
            col = low[j + 1 :, j]
            np.divide(work[j + 1 :, j], root, out=col)
            rest = work[j + 1 :, j + 1 :]
            rest -= col[:, None] * col
    # a pivot that is negative, zero or NaN turns every later one into NaN
    good: Array = np.einsum("ii...->...", low) < np.inf
    good &= low[d - 1, d - 1] > 0
    return low, good


def solve_lower(low: Array, b: Array) -> Array:
    """Solve L x = b, in place on `b` (d, ..., M), which is returned."""
    d = low.shape[0]
    for j in range(d):
        b[j] /= low[j, j]
        for i in range(j + 1, d):
            b[i] -= low[i, j] * b[j]
    return b


def back_substitute(low: Array, b: Array) -> Array:
    """Solve L' x = b, in place on `b` (d, ..., M), which is returned."""
    for j in range(low.shape[0] - 1, -1, -1):
        b[j] /= low[j, j]
        for i in range(j):
            b[i] -= low[j, i] * b[j]
    return b


def lower_quadratic(low: Array, v: Array) -> Array:
    """v' A^-1 v (M,) from the lower factor of A and v (d, M)."""
    y = solve_lower(low, v.copy())
    return np.einsum("dm,dm->m", y, y)


def product(a: Array, b: Array) -> Array:
    """A B over the run axis: (i, k, M), (k, j, M) -> (i, j, M)."""
    return np.einsum("ikm,kjm->ijm", a, b)


def product_t(a: Array, b: Array) -> Array:
    """A B' over the run axis: (i, k, M), (j, k, M) -> (i, j, M)."""
    return np.einsum("ikm,jkm->ijm", a, b)


def symmetrise(a: Array) -> Array:
    """Mean of a (d, d, M) and its transpose."""
    return 0.5 * (a + np.swapaxes(a, 0, 1))
