"""Batched linear algebra on component-first arrays: (d, d, M), runs last.

The Python loops run over matrix rows; every array operation runs over all runs at once. Products
are `einsum` over component-first operands, whose inner loop is the run axis: measured faster than
`matmul` on copies up to about 12 rows, and its bits do not depend on the number of runs from two
runs up (the time loop pads a single run to two).
"""

from __future__ import annotations

import numpy as np

from flyoff.numerics.spaces import Array

try:  # the compiled function behind np.einsum: a microsecond less a call, the same bits
    from numpy._core.multiarray import c_einsum as einsum
except ImportError:
    einsum = np.einsum

__all__ = [
    "back_substitute",
    "cholesky",
    "einsum",
    "lower_quadratic",
    "product",
    "product_t",
    "solve_lower",
    "symmetrise",
    "t_product",
]


def cholesky(a: Array) -> tuple[Array, Array]:
    """Lower Cholesky factor of `a` (d, d, M) and the mask (M,) of runs where it exists.

    Only the lower triangle is read. Runs without a factor hold NaN; nothing is raised.
    """
    d = a.shape[0]
    low = np.zeros(a.shape, a.dtype)
    if d <= 3:
        _small_factor(a, low)
    else:
        _factor(a, low)
    # a pivot that is negative, zero or NaN turns every later one into NaN
    total = low[d - 1, d - 1]
    good: Array = total > 0
    for i in range(d - 1):
        total = total + low[i, i]
    good &= total < np.inf
    return low, good


def _factor(a: Array, low: Array) -> None:
    """Column by column, each update over all remaining entries at once."""
    d = a.shape[0]
    work = a.copy()
    for j in range(d - 1):
        root = np.sqrt(work[j, j], out=low[j, j])
        col = np.divide(work[j + 1 :, j], root, out=low[j + 1 :, j])
        rest = work[j + 1 :, j + 1 :]
        rest -= col[:, None] * col
    np.sqrt(work[d - 1, d - 1], out=low[d - 1, d - 1])


def _small_factor(a: Array, low: Array) -> None:
    """Entry by entry: fewer array operations up to three rows."""
    for j in range(a.shape[0]):
        pivot = a[j, j]
        for k in range(j):
            pivot = pivot - low[j, k] * low[j, k]
        root = np.sqrt(pivot, out=low[j, j])
        for i in range(j + 1, a.shape[0]):
            entry = a[i, j]
            for k in range(j):
                entry = entry - low[i, k] * low[j, k]
            np.divide(entry, root, out=low[i, j])


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
    return einsum("dm,dm->m", y, y)


def product(a: Array, b: Array) -> Array:
    """A B over the run axis: (i, k, M), (k, j, M) -> (i, j, M)."""
    return einsum("ikm,kjm->ijm", a, b)


def product_t(a: Array, b: Array) -> Array:
    """A B' over the run axis: (i, k, M), (j, k, M) -> (i, j, M)."""
    return einsum("ikm,jkm->ijm", a, b)


def t_product(a: Array, b: Array) -> Array:
    """A' B over the run axis: (k, i, M), (k, j, M) -> (i, j, M)."""
    return einsum("kim,kjm->ijm", a, b)


def symmetrise(a: Array) -> Array:
    """Mean of a (d, d, M) and its transpose."""
    out: Array = a + a.swapaxes(0, 1)
    out *= 0.5
    return out
