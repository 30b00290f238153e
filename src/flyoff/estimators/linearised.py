"""The linearised (extended) Kalman filter with exact Jacobians, on manifold states.

First-order filter of A. H. Jazwinski, "Stochastic Processes and Filtering Theory", Academic Press
1970, theorem 8.1; covariance update in the form of P. Joseph (R. S. Bucy, P. D. Joseph, "Filtering
for Stochastic Processes with Applications to Guidance", Wiley 1968, ch. 16); multiplicative
rotation errors: E. J. Lefferts, F. L. Markley, M. D. Shuster, J. Guid. Control Dyn. 5(5):417-429,
1982.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from flyoff.estimators.contract import (
    Belief,
    Fault,
    Gaussian,
    Innovation,
    combine_faults,
)
from flyoff.estimators.gaussian_update import correct, correction_counts, missing_components
from flyoff.models.model import Model, Sensor
from flyoff.models.priors import Prior
from flyoff.numerics import counts, linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.options import options
from flyoff.registry import register

__all__ = ["GaussianBelief", "Linearised"]


@dataclass(frozen=True)
class GaussianBelief(Belief):
    """Mean (n, M) and tangent covariance (d, d, M)."""

    mean: Array
    cov: Array


def gaussian_start(prior: Prior, dtype: Any) -> GaussianBelief:
    """The belief of a Gaussian filter at the start: the prior's moments."""
    mean, cov = prior.cast(dtype).moments()
    cov = np.ascontiguousarray(np.broadcast_to(cov, (*cov.shape[:2], mean.shape[1])))
    return GaussianBelief(0, np.zeros(mean.shape[1], np.uint8), mean, cov)


@register(
    "estimator",
    "linearised",
    cites=(
        "A. H. Jazwinski, 'Stochastic Processes and Filtering Theory', Academic Press 1970, ch. 8"
    ),
)
@options
class Linearised:
    """Extended Kalman filter: first-order linearisation with exact sparse Jacobians.

    Attributes
    ----------
    form : `joseph` or `short`
        Covariance update: (I-KH) P (I-KH)' + K R K', or (I-KH) P.
    """

    form: Literal["joseph", "short"] = "joseph"

    def suits(self, model: Model) -> str | None:
        """Suits every model."""
        return None

    def batch(self, model: Model) -> int:
        """Runs evaluated at once."""
        return 512

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> _LinearisedFilter:
        """A filter for the runs of `streams`."""
        return _LinearisedFilter(self, model, np.dtype(dtype))


class _LinearisedFilter:
    def __init__(self, choice: Linearised, model: Model, dtype: np.dtype) -> None:
        self.choice, self.model, self.dtype = choice, model, dtype

    def start(self, prior: Prior) -> GaussianBelief:
        return gaussian_start(prior, self.dtype)

    def predict(self, belief: GaussianBelief, u: Array, dt: float) -> GaussianBelief:
        mean, f, q = self.model.linearise(belief.mean, u, dt)
        cov = linalg.symmetrise(linalg.product_t(linalg.product_t(f, belief.cov), f))
        cov += q
        return GaussianBelief(belief.step + 1, belief.fault, mean, cov)

    def update(
        self, belief: GaussianBelief, sensor: Sensor, z: Array, u: Array
    ) -> tuple[GaussianBelief, Innovation]:
        space, p = self.model.space, self.model.parameters.astype(self.dtype, copy=False)
        x, cov, z = belief.mean, belief.cov, z.astype(self.dtype, copy=False)
        predicted, h = sensor.linearise(x, u, p)
        r = sensor.covariance(x, u, p)
        missing = missing_components(z, x.shape[1])
        residual = sensor.space.local(predicted, z)
        if missing is not None:
            h = np.where(missing[:, None], self.dtype.type(0), h)
        cross = sensor.project(h, cov)
        s = sensor.spread(cross, h)
        s += r
        c = correct(cross, s, residual, missing)
        # X = P (I - K H)', then (I - K H) X + K R K' = X - K (H X - R K'), as rank-m products
        new = linalg.t_product(cross, c.gain)
        np.subtract(cov, new, out=new)
        if self.choice.form == "joseph":
            rest = sensor.project(h, new)
            rest -= linalg.product(r, c.gain)
            new -= linalg.t_product(c.gain, rest)
        # symmetric to rounding; predict and posterior make it so to the bit
        new = space.reset(new, c.delta)
        fault = belief.fault
        if not c.ok.all():
            fault = combine_faults(fault, ~c.ok, Fault.NOT_POSITIVE_DEFINITE)
        mean = space.retract(x, c.delta)
        return GaussianBelief(belief.step, fault, mean, new), c.innovation

    def posterior(self, belief: GaussianBelief) -> Gaussian:
        return Gaussian(belief.mean, linalg.symmetrise(belief.cov))

    def operations(self, readings: Mapping[str, float]) -> Counts:
        d, nz = self.model.space.d, self.model.f_pattern.nonzeros
        total = self.model.linear_tape.counts() + self.model.noise_counts()
        total += 2 * counts.sparse_product(nz, d, d)
        for name, rate in readings.items():
            s = self.model.sensors[name]
            m, hz = s.m, s.h_pattern.nonzeros
            one = s.linear_tape.counts() + s.r_tape.counts() + correction_counts(d, m)
            one += counts.sparse_product(hz, m, d) + counts.sparse_product(hz, m, m)
            one += counts.product(d, m, d)
            if self.choice.form == "joseph":
                one += counts.sparse_product(hz, m, d) + 2 * counts.product(d, m, d)
                one += counts.product(d, m, m)
            total += rate * one
        return total
