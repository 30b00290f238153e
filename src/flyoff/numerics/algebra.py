"""Vector and quaternion algebra on tuples of scalars.

Every function takes scalars that are either NumPy arrays (any common shape) or casadi symbols, so
the same text serves a traced model and a batch of runs. Quaternions are scalar-first, body to NED.
Sinc-like functions switch to a series near zero, so that values and derivatives are exact to
rounding there; the branch is a masked select, never a product. The series reaches far enough that
all runs usually take it, and then the tape leaves out the other branch.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

__all__ = [
    "cosc",
    "cross",
    "dot",
    "norm",
    "quat_conj",
    "quat_exp",
    "quat_from_euler",
    "quat_log",
    "quat_mul",
    "rotate",
    "sinc",
    "unrotate",
    "wrap",
]

Scalar = Any
Vec = tuple[Scalar, ...]

_SMALL = 0.1  # rad: below this the series of quaternions are used, truncated under 1e-16
_NEAR = 0.25  # rad: and here those of sinc and cosc, truncated under 1e-16
_SINC = tuple((-1) ** n / math.factorial(2 * n + 1) for n in range(6))
_COSC = tuple((-1) ** n / math.factorial(2 * n + 2) for n in range(6))


def _select(cond: Scalar, a: Scalar, b: Scalar) -> Scalar:
    return np.where(cond, a, b)


def _guarded(near: Scalar, x: Scalar) -> Scalar:
    """`x`, or one where the series is used instead.

    Symbols need no guard: the tape selects, and what the other branch holds never leaves it.
    """
    return _select(near, 1.0, x) if isinstance(x, np.ndarray | float | int) else x


def _series(s: Scalar, *coefficients: float) -> Scalar:
    """Polynomial in s, lowest power first, by Horner's rule."""
    total: Scalar = coefficients[-1]
    for c in reversed(coefficients[:-1]):
        total = total * s + c
    return total


def sinc(x: Scalar) -> Scalar:
    """sin(x)/x, exact to rounding at and near zero."""
    s = x * x
    near = s < _NEAR**2
    far_x = _guarded(near, x)
    series = _series(s, *_SINC)
    return _select(near, series, np.sin(x) / far_x)


def cosc(x: Scalar) -> Scalar:
    """(1 - cos x)/x, without a hole at zero; relative error under 1e-13."""
    s = x * x
    near = s < _NEAR**2
    far_x = _guarded(near, x)
    series = x * _series(s, *_COSC)
    return _select(near, series, (1 - np.cos(x)) / far_x)


def dot(a: Vec, b: Vec) -> Scalar:
    """Inner product."""
    total = a[0] * b[0]
    for x, y in zip(a[1:], b[1:], strict=True):
        total = total + x * y
    return total


def cross(a: Vec, b: Vec) -> Vec:
    """Vector product of two 3-vectors."""
    return (
        a[1] * b[2] - a[2] * b[1],
        a[2] * b[0] - a[0] * b[2],
        a[0] * b[1] - a[1] * b[0],
    )


def norm(a: Vec) -> Scalar:
    """Euclidean length with a zero derivative (not NaN) at zero."""
    s = dot(a, a)
    positive = s > 0
    return _select(positive, np.sqrt(_select(positive, s, 1.0)), 0.0)


def wrap(a: Scalar) -> Scalar:
    """Angle wrapped to [-pi, pi]."""
    return a - 2 * np.pi * np.floor(a / (2 * np.pi) + 0.5)


def quat_mul(p: Vec, q: Vec) -> Vec:
    """Hamilton product p q."""
    a, b, c, d = p
    w, x, y, z = q
    return (
        a * w - b * x - c * y - d * z,
        a * x + b * w + c * z - d * y,
        a * y - b * z + c * w + d * x,
        a * z + b * y - c * x + d * w,
    )


def quat_conj(q: Vec) -> Vec:
    """Conjugate (inverse of a unit quaternion)."""
    return (q[0], -q[1], -q[2], -q[3])


def quat_exp(v: Vec) -> Vec:
    """Unit quaternion of the rotation vector `v` [rad]."""
    s = dot(v, v)
    near = s < _SMALL**2
    angle = np.sqrt(_guarded(near, s))
    # cos(t/2) and sin(t/2)/t as series in s = t^2
    c_near = _series(s, 1, -1 / 8, 1 / 384, -1 / 46080, 1 / 10321920)
    k_near = _series(s, 1 / 2, -1 / 48, 1 / 3840, -1 / 645120, 1 / 185794560)
    c = _select(near, c_near, np.cos(angle / 2))
    k = _select(near, k_near, np.sin(angle / 2) / angle)
    return (c, k * v[0], k * v[1], k * v[2])


def quat_log(q: Vec) -> Vec:
    """Rotation vector [rad], of length at most pi, of the unit quaternion `q` (or of -q)."""
    w = abs(q[0])
    s = dot(q[1:], q[1:])
    near = s < _SMALL**2 / 4
    n = np.sqrt(_guarded(near, s))
    # 2 asin(n)/n as a series: well conditioned at n = 0, where atan2(n, w)/n is 0/0
    k_near = _series(s, 2, 1 / 3, 3 / 20, 15 / 168, 105 / 1728, 945 / 21120)
    k = _select(near, k_near, 2 * np.arctan2(n, w) / n)
    k = _select(q[0] < 0, -k, k)
    return (k * q[1], k * q[2], k * q[3])


def rotate(q: Vec, v: Vec) -> Vec:
    """R(q) v: body to NED."""
    u = q[1:]
    t = cross(u, v)
    t = (2 * t[0], 2 * t[1], 2 * t[2])
    c = cross(u, t)
    return (
        v[0] + q[0] * t[0] + c[0],
        v[1] + q[0] * t[1] + c[1],
        v[2] + q[0] * t[2] + c[2],
    )


def unrotate(q: Vec, v: Vec) -> Vec:
    """R(q)' v: NED to body."""
    return rotate(quat_conj(q), v)


def quat_from_euler(roll: Scalar, pitch: Scalar, yaw: Scalar) -> Vec:
    """Body-to-NED quaternion of roll, pitch, yaw [rad] (aerospace sequence yaw-pitch-roll)."""
    zero = 0 * roll
    about_x = (np.cos(roll / 2), np.sin(roll / 2), zero, zero)
    about_y = (np.cos(pitch / 2), zero, np.sin(pitch / 2), zero)
    about_z = (np.cos(yaw / 2), zero, zero, np.sin(yaw / 2))
    return quat_mul(quat_mul(about_z, about_y), about_x)
