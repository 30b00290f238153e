"""Copy this file to add a point rule; it is not imported as it stands.

A rule is coefficients only. `PointSet` checks them when it is built: weights sum to one, zero mean,
identity covariance, and the degree you declare. The example is the tensor rule of +-1 (degree 3 a
coordinate): 2^d points.
"""

from __future__ import annotations

import itertools
from typing import Literal

import numpy as np

from flyoff.errors import UserError
from flyoff.estimators.points import PointSet
from flyoff.options import options
from flyoff.registry import register

_MOST_POINTS = 4096


@register("point-rule", "my-rule")
@options
class MyRule:
    """One line: what it is (author, year)."""

    rule: Literal["my-rule"] = "my-rule"

    def points(self, d: int) -> PointSet:
        """The point set for dimension `d`."""
        count = 2**d
        if count > _MOST_POINTS:
            raise UserError(f"rule `my-rule` needs {count} points for {d} error states")
        x = np.array(list(itertools.product((-1.0, 1.0), repeat=d))).T
        w = np.full(count, 1 / count)
        return PointSet(x, w, w, 3, None)
