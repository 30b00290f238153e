"""The sigma-point Kalman filter: one filter, any point rule, on manifold states.

S. Julier, J. Uhlmann, Proc. IEEE 92(3):401-422, 2004; on rotations E. Kraft, "A quaternion-based
unscented Kalman filter for orientation tracking", Proc. Fusion 2003, with deviations taken in the
tangent space. Points are drawn again after the process noise is added and before each sensor's
update; ``redraw: false`` reuses the propagated points, as in E. Wan, R. van der Merwe, Proc.
AS-SPCC 2000, table 7.3.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Annotated, Any

import numpy as np

from flyoff.estimators.contract import Fault, Gaussian, Innovation, combine_faults
from flyoff.estimators.gaussian_update import correct, correction_counts, missing_components
from flyoff.estimators.linearised import GaussianBelief, gaussian_start
from flyoff.estimators.point_rules.unscented import Scaled
from flyoff.estimators.points import PointRule
from flyoff.models.model import Model, Sensor
from flyoff.models.priors import Prior
from flyoff.numerics import counts, linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.options import Flag, OneOf, options
from flyoff.registry import register

__all__ = ["SigmaPoint"]


@register(
    "estimator",
    "sigma-point",
    cites="S. Julier, J. Uhlmann, Proc. IEEE 92(3):401-422, 2004",
)
@options
class SigmaPoint:
    """Sigma-point (unscented, cubature) Kalman filter with additive process noise.

    Attributes
    ----------
    points : point rule
    redraw : bool
        Draw points again after the process noise is added and before each sensor's update.
    """

    points: Annotated[PointRule, OneOf("point-rule", "rule")] = Scaled()
    redraw: Flag = True

    def suits(self, model: Model) -> str | None:
        """Suits every model."""
        return None

    def batch(self, model: Model) -> int:
        """Runs evaluated at once."""
        return 512

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> _SigmaPointFilter:
        """A filter for the runs of `streams`."""
        return _SigmaPointFilter(self, model, np.dtype(dtype))


@dataclass(frozen=True)
class _PropagatedBelief(GaussianBelief):
    """A belief that remembers its propagated points (n, J, M) and deviations (d, J, M)."""

    points: Array
    deviations: Array


class _SigmaPointFilter:
    def __init__(self, choice: SigmaPoint, model: Model, dtype: np.dtype) -> None:
        self.choice, self.model, self.dtype = choice, model, dtype
        self.rule = choice.points.points(model.space.d)
        self.wm = self.rule.mean_weights.astype(dtype)
        self.wc = self.rule.cov_weights.astype(dtype)
        self.centre = self.rule.centre

    def start(self, prior: Prior) -> GaussianBelief:
        return gaussian_start(prior, self.dtype)

    def _draw(self, belief: GaussianBelief) -> tuple[Array, Array, Array]:
        """Deviations (d, J, M), points (n, J, M) and where the covariance had a factor (M,)."""
        low, ok = linalg.cholesky(belief.cov)
        dev = self.rule.deviations(low)
        return dev, self.model.space.retract(belief.mean[:, None], dev), ok

    def _covariance(self, dev: Array) -> Array:
        return linalg.product_t(dev * self.wc[:, None], dev)

    def predict(self, belief: GaussianBelief, u: Array, dt: float) -> GaussianBelief:
        model = self.model
        _, points, ok = self._draw(belief)
        moved = model.step(points, u, dt)
        # averaged about the image of the centre, not by plain or sin/cos sums
        if self.centre is not None:
            about = moved[:, self.centre]
        elif model.space.flat:
            about = moved[:, 0]
        else:
            about = model.step(belief.mean, u, dt)
        mean, dev = model.space.mean(moved, self.wm, about)
        cov = linalg.symmetrise(self._covariance(dev))
        cov += model.added_noise(belief.mean, u, dt)
        fault = combine_faults(belief.fault, ~ok, Fault.NOT_POSITIVE_DEFINITE)
        if self.choice.redraw:
            return GaussianBelief(belief.step + 1, fault, mean, cov)
        return _PropagatedBelief(belief.step + 1, fault, mean, cov, moved, dev)

    def update(
        self, belief: GaussianBelief, sensor: Sensor, z: Array, u: Array
    ) -> tuple[GaussianBelief, Innovation]:
        model, fault, z = self.model, belief.fault, z.astype(self.dtype, copy=False)
        if isinstance(belief, _PropagatedBelief):
            dev, points = belief.deviations, belief.points
        else:
            dev, points, ok = self._draw(belief)
            fault = combine_faults(fault, ~ok, Fault.NOT_POSITIVE_DEFINITE)
        seen = model.measure(sensor, points, u)
        if self.centre is not None or sensor.space.flat:
            about = seen[:, self.centre or 0]
        else:
            about = model.measure(sensor, belief.mean, u)
        predicted, dz = sensor.space.mean(seen, self.wm, about)
        weighted = dz * self.wc[:, None]
        p = model.parameters.astype(self.dtype, copy=False)
        s = linalg.product_t(weighted, dz) + sensor.covariance(belief.mean, u, p)
        cross = linalg.product_t(weighted, dev)
        missing = missing_components(z, predicted.shape[1])
        c = correct(cross, s, sensor.space.local(predicted, z), missing)
        cov = belief.cov - linalg.einsum("kim,kjm->ijm", c.half, c.half)
        fault = combine_faults(fault, ~c.ok, Fault.NOT_POSITIVE_DEFINITE)
        after = replace(
            belief,
            fault=fault,
            mean=model.space.retract(belief.mean, c.delta),
            cov=model.space.reset(cov, c.delta),
        )
        return after, c.innovation

    def posterior(self, belief: GaussianBelief) -> Gaussian:
        return Gaussian(belief.mean, belief.cov)

    def operations(self, readings: Mapping[str, float]) -> Counts:
        model = self.model
        d, j = model.space.d, len(self.wm)
        # a triangular factor times sparse unit points: one product a nonzero
        draw = counts.cholesky(d) + Counts(add=j * d, mul=d * (d + 1))
        total = draw + j * model.mean_tape.counts() + model.noise_counts()
        total += counts.product(d, j, 1) + Counts(add=d * j, mul=d * j)
        total += counts.symmetric_product(d, j)
        for name, rate in readings.items():
            s = model.sensors[name]
            m = s.m
            one = j * s.measure_tape.counts() + s.r_tape.counts() + correction_counts(d, m)
            one += counts.product(m, j, 1) + Counts(add=m * j, mul=m * j)
            one += counts.symmetric_product(m, j) + counts.product(d, j, m)
            one += counts.symmetric_product(d, m) + Counts(add=d)
            if self.choice.redraw:
                one += draw
            total += rate * one
        return total
