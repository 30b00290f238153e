"""Process-noise covariances of the standard kinematic models, and Van Loan's method.

The closed forms take scalars or symbols, so they serve traced models. Sources: Y. Bar-Shalom,
X. R. Li, T. Kirubarajan, "Estimation with Applications to Tracking and Navigation", Wiley 2001,
section 6.2; R. Singer, IEEE Trans. AES 6(4):473-483, 1970; C. Van Loan, IEEE Trans. Automat.
Contr. 23(3):395-404, 1978.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from flyoff.numerics.spaces import Array

__all__ = [
    "block_diagonal",
    "diagonal",
    "van_loan",
    "white_acceleration",
    "white_jerk",
]

Scalar = Any
Matrix = tuple[tuple[Scalar, ...], ...]


def white_acceleration(q: Scalar, dt: Scalar) -> Matrix:
    """Covariance of (position, velocity) after `dt` of white acceleration of density q [m^2/s^3].

    Bar-Shalom, Li & Kirubarajan 2001, eq. 6.2.2-12.
    """
    return ((q * dt**3 / 3, q * dt**2 / 2), (q * dt**2 / 2, q * dt))


def white_jerk(q: Scalar, dt: Scalar) -> Matrix:
    """Covariance of (position, velocity, acceleration) under white jerk of density q [m^2/s^5].

    Bar-Shalom, Li & Kirubarajan 2001, eq. 6.2.3-9.
    """
    return (
        (q * dt**5 / 20, q * dt**4 / 8, q * dt**3 / 6),
        (q * dt**4 / 8, q * dt**3 / 3, q * dt**2 / 2),
        (q * dt**3 / 6, q * dt**2 / 2, q * dt),
    )


def diagonal(*entries: Scalar) -> Matrix:
    """Diagonal matrix as a tuple of rows."""
    n = len(entries)
    return tuple(tuple(entries[i] if i == j else 0.0 for j in range(n)) for i in range(n))


def block_diagonal(*blocks: Matrix) -> Matrix:
    """Block-diagonal matrix as a tuple of rows."""
    size = sum(len(b) for b in blocks)
    rows = []
    at = 0
    for b in blocks:
        for row in b:
            rows.append((0.0,) * at + tuple(row) + (0.0,) * (size - at - len(b)))
        at += len(b)
    return tuple(rows)


def van_loan(a: Array, g: Array, density: Array, dt: float) -> tuple[Array, Array]:
    """Transition matrix and noise covariance of dx = A x dt + G dw (Van Loan 1978, eq. 2.13).

    Parameters
    ----------
    a : (n, n)
    g : (n, q)
    density : (q, q), spectral density of w
    dt : float, seconds

    Returns
    -------
    phi : (n, n)
    q : (n, n)
    """
    from scipy.linalg import expm

    n = a.shape[0]
    block = np.zeros((2 * n, 2 * n))
    block[:n, :n] = -a
    block[:n, n:] = g @ density @ g.T
    block[n:, n:] = a.T
    e = expm(block * dt)
    phi = e[n:, n:].T
    q = phi @ e[:n, n:]
    return phi, (q + q.T) / 2
