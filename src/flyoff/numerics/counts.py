"""Operation counts of batched linear algebra, by kind.

Counts describe one run and one step in the dense form of this code unless a pattern is given.
A fused multiply-add counts as one multiplication and one addition.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

__all__ = [
    "Counts",
    "cholesky",
    "product",
    "sparse_product",
    "symmetric_product",
    "triangular_solve",
]


@dataclass(frozen=True)
class Counts:
    """Additions, multiplications, divisions, square roots and transcendental functions."""

    add: float = 0
    mul: float = 0
    div: float = 0
    sqrt: float = 0
    transcendental: float = 0

    def __add__(self, other: Counts) -> Counts:
        return Counts(*(getattr(self, f.name) + getattr(other, f.name) for f in fields(self)))

    def __mul__(self, times: float) -> Counts:
        return Counts(*(getattr(self, f.name) * times for f in fields(self)))

    __rmul__ = __mul__

    @property
    def total(self) -> float:
        """All operations, each counted once."""
        return sum(getattr(self, f.name) for f in fields(self))


def product(rows: int, inner: int, cols: int) -> Counts:
    """Dense product (rows x inner)(inner x cols)."""
    return Counts(add=rows * max(inner - 1, 0) * cols, mul=rows * inner * cols)


def sparse_product(nonzeros: int, rows: int, cols: int) -> Counts:
    """Product of a sparse matrix with `nonzeros` entries in `rows` rows and `cols` columns."""
    return Counts(add=max(nonzeros - rows, 0) * cols, mul=nonzeros * cols)


def symmetric_product(size: int, inner: int) -> Counts:
    """Product known to be symmetric, one triangle: (size x inner)(inner x size)."""
    half = size * (size + 1) // 2
    return Counts(add=half * max(inner - 1, 0), mul=half * inner)


def cholesky(d: int) -> Counts:
    """Cholesky factor of a d x d matrix: d^3/3 to leading order."""
    half = sum(i * (i + 1) // 2 for i in range(d))
    return Counts(add=half, mul=half, div=d * (d - 1) // 2, sqrt=d)


def triangular_solve(m: int, columns: int) -> Counts:
    """One forward or back substitution with an m x m factor."""
    off = m * (m - 1) // 2
    return Counts(add=off * columns, mul=off * columns, div=m * columns)
