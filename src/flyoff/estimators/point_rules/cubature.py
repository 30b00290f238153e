"""The third-degree spherical-radial cubature rule."""

from __future__ import annotations

import math
from typing import Literal

from flyoff.estimators.points import PointSet, star
from flyoff.options import options
from flyoff.registry import register

__all__ = ["Cubature"]


@register(
    "point-rule",
    "cubature",
    cites="I. Arasaratnam, S. Haykin, IEEE Trans. Automat. Contr. 54(6):1254-1269, 2009",
)
@options
class Cubature:
    """Third-degree spherical-radial cubature: equal weights, no centre."""

    rule: Literal["cubature"] = "cubature"

    def points(self, d: int) -> PointSet:
        """The point set for dimension `d`."""
        x, w = star(d, math.sqrt(d), 0.0, 0.5 / d)
        return PointSet(x[:, 1:], w[1:], w[1:], 3, None)
