"""The unscented point sets: scaled and symmetric."""

from __future__ import annotations

import math
from typing import Annotated, Literal

from pydantic import Field

from flyoff.errors import UserError
from flyoff.estimators.points import PointSet, star
from flyoff.options import NonNegative, Number, options
from flyoff.registry import register

__all__ = ["Scaled", "Symmetric"]


@register(
    "point-rule",
    "scaled",
    cites="S. Julier, 'The scaled unscented transformation', Proc. ACC 2002",
)
@options
class Scaled:
    """Scaled unscented set: spread and centre weight set apart.

    Attributes
    ----------
    alpha : spread, in (0, 1]
    beta : knowledge of the distribution; 2 is best for a Gaussian
    kappa : secondary scaling, above -d
    """

    rule: Literal["scaled"] = "scaled"
    alpha: Annotated[float, Field(strict=True, gt=0, le=1)] = 0.5
    beta: NonNegative = 2.0
    kappa: Number = 0.0

    def points(self, d: int) -> PointSet:
        """The point set for dimension `d`."""
        scale = self.alpha**2 * _spread("kappa", self.kappa, d)
        x, w = star(d, math.sqrt(scale), 1 - d / scale, 0.5 / scale)
        cov = w.copy()
        cov[0] += 1 - self.alpha**2 + self.beta
        return PointSet(x, w, cov, 3, 0)


@register(
    "point-rule",
    "symmetric",
    cites=(
        "S. Julier, J. Uhlmann, H. Durrant-Whyte, IEEE Trans. Automat. Contr. 45(3):477-482, 2000"
    ),
)
@options
class Symmetric:
    """Symmetric unscented set with a weight on the centre.

    Attributes
    ----------
    kappa : weight of the centre, above -d; `gaussian` means 3 - d, exact fourth moments
    """

    rule: Literal["symmetric"] = "symmetric"
    kappa: Number | Literal["gaussian"] = "gaussian"

    def points(self, d: int) -> PointSet:
        """The point set for dimension `d`."""
        kappa = 3.0 - d if self.kappa == "gaussian" else self.kappa
        scale = _spread("kappa", kappa, d)
        x, w = star(d, math.sqrt(scale), kappa / scale, 0.5 / scale)
        return PointSet(x, w, w, 3, 0)


def _spread(name: str, kappa: float, d: int) -> float:
    if not kappa + d > 0:
        raise UserError(f"`{name}` must be above {-d} for {d} error states, got {kappa:g}")
    return kappa + d
