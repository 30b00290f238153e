"""Point rules: sigma points and weights as data that checks itself.

A rule gives unit points (d, J) for N(0, I) and two weight vectors, for the mean and for the
covariance. `PointSet` asserts what every rule must have - weights summing to one, zero mean,
identity covariance - and the polynomial degree the rule declares.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np

from flyoff.numerics.spaces import Array

__all__ = ["PointRule", "PointSet", "star"]


@dataclass(frozen=True)
class PointSet:
    """Unit points (d, J) and weights (J,) for N(0, I).

    Attributes
    ----------
    degree : int
        All moments up to this total degree are exact under the mean weights.
    centre : int or None
        Index of the point at the origin, if there is one.
    """

    points: Array
    mean_weights: Array
    cov_weights: Array
    degree: int
    centre: int | None

    def __post_init__(self) -> None:
        x, w = self.points, self.mean_weights
        # huge weights of opposite sign lose digits: allow for their size
        slack = 1e-12 * (1 + np.abs(w).sum())
        d = x.shape[0]
        checks = {
            "weights sum to one": abs(w.sum() - 1),
            "zero mean": np.abs(x @ w).max(),
            "identity covariance": np.abs((x * w) @ x.T - np.eye(d)).max(),
            "identity covariance (covariance weights)": np.abs(
                (x * self.cov_weights) @ x.T - np.eye(d)
            ).max(),
        }
        for rule, error in checks.items():
            if not error <= slack:
                raise ValueError(f"point set breaks the rule `{rule}` by {error:.1e}")
        self._check_degree(slack)

    def deviations(self, low: Array) -> Array:
        """Sigma-point deviations L U (d, J, M) for the factors `low` (d, d, M)."""
        if not self.on_axes:
            return np.einsum("ikm,kj->ijm", low, self.points.astype(low.dtype))
        # one nonzero a point: a scaled column of the factor
        axis = np.abs(self.points).argmax(axis=0)
        size = self.points[axis, np.arange(len(axis))].astype(low.dtype)
        return np.take(low, axis, axis=1) * size[:, None]

    @cached_property
    def on_axes(self) -> bool:
        """Whether every point lies on an axis."""
        return bool(((self.points != 0).sum(axis=0) <= 1).all())

    def _check_degree(self, slack: float) -> None:
        """Every moment up to the declared degree, over single axes and mixtures of a few."""
        x, w, d = self.points, self.mean_weights, self.points.shape[0]
        third = np.einsum("j,ij,kj,lj->ikl", w, x, x, x)
        if self.degree >= 3 and np.abs(third).max() > 10 * slack:
            raise ValueError(f"point set declares degree {self.degree}, a third moment is not zero")
        axes = sorted({*range(min(d, 4)), d - 1})
        for order in range(4, self.degree + 1):
            for chosen in itertools.combinations_with_replacement(axes, order):
                got = float((w * np.prod(x[list(chosen)], axis=0)).sum())
                wanted = math.prod(_gaussian_moment(chosen.count(a)) for a in set(chosen))
                if not abs(got - wanted) <= 1e3 * slack * max(1, wanted):
                    raise ValueError(
                        f"point set declares degree {self.degree}, a moment of order {order} is "
                        f"{got:.3g} instead of {wanted:g}"
                    )


def _gaussian_moment(k: int) -> int:
    """E x^k of N(0, 1): (k - 1)!! for even k, else zero."""
    return 0 if k % 2 else math.prod(range(k - 1, 0, -2))


class PointRule(Protocol):
    """A registered options class that makes point sets."""

    def points(self, d: int) -> PointSet:
        """The point set for dimension `d`."""
        ...


def star(d: int, radius: float, centre_weight: float, weight: float) -> tuple[Array, Array]:
    """Points (d, 2d+1) at the origin and at +-radius on every axis, with their weights."""
    x = np.zeros((d, 2 * d + 1))
    x[:, 1 : d + 1] = radius * np.eye(d)
    x[:, d + 1 :] = -radius * np.eye(d)
    w = np.full(2 * d + 1, weight)
    w[0] = centre_weight
    return x, w
