"""The bootstrap particle filter.

N. Gordon, D. Salmond, A. Smith, IEE Proc. F 140(2):107-113, 1993: particles move by the model with
drawn process noise and are weighted by the likelihood. Weights are logarithms shifted by their
maximum. Resampling waits until the next prediction, so that the posterior keeps the weights.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field

from flyoff.estimators.contract import Belief, Fault, Innovation, Weighted, combine_faults
from flyoff.estimators.gaussian_update import missing_components
from flyoff.estimators.resampling import ancestors, systematic_counts
from flyoff.models.model import Model, Sensor, mask_missing
from flyoff.models.priors import Prior
from flyoff.numerics import counts, linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.options import options
from flyoff.registry import register

__all__ = ["Particle"]

_LARGEST_STATE = 6  # a bootstrap filter needs a number of particles exponential in the dimension
_IN_FLIGHT = 16_000  # runs x particles that stay in cache


@register(
    "estimator",
    "particle",
    cites="N. Gordon, D. Salmond, A. Smith, IEE Proc. F 140(2):107-113, 1993",
)
@options
class Particle:
    """Bootstrap particle filter, for up to six error states.

    Attributes
    ----------
    particles : int
    proposal : `bootstrap`
        Particles move by the model's own process noise.
    resampling : `systematic`
    threshold : float
        Resample a run whose effective sample size is below this fraction of the particles.
    """

    particles: Annotated[int, Field(strict=True, ge=2, le=1_000_000)] = 1000
    proposal: Literal["bootstrap"] = "bootstrap"
    resampling: Literal["systematic"] = "systematic"
    threshold: Annotated[float, Field(strict=True, gt=0, le=1)] = 0.5

    @property
    def sampling(self) -> bool:
        """Its numbers are random: other platforms repeat them within Monte Carlo error only."""
        return True

    def suits(self, model: Model) -> str | None:
        """Only states small enough for a bootstrap filter."""
        if model.space.d > _LARGEST_STATE:
            return f"the state has {model.space.d} error components, at most {_LARGEST_STATE}"
        return None

    def batch(self, model: Model) -> int:
        """Runs evaluated at once: few enough that the particles stay in cache."""
        return max(2, _IN_FLIGHT // self.particles)

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> _ParticleFilter:
        """A filter for the runs of `streams`."""
        return _ParticleFilter(self, model, streams, np.dtype(dtype))


@dataclass(frozen=True)
class _Cloud(Belief):
    """Particles (n, N, M), log weights (N, M) with maximum zero, a reference (n, M).

    `parents` (M,) counts the distinct particles that the last resampling kept.
    """

    points: Array
    log_weights: Array
    about: Array
    parents: Array


class _ParticleFilter:
    def __init__(self, choice: Particle, model: Model, streams: Streams, dtype: np.dtype) -> None:
        self.choice, self.model, self.streams, self.dtype = choice, model, streams, dtype

    def start(self, prior: Prior) -> _Cloud:
        prior = prior.cast(self.dtype)
        points = prior.sample(self.streams, "particles:start", self.choice.particles)
        runs = points.shape[-1]
        even = np.zeros((self.choice.particles, runs), self.dtype)
        all_distinct = np.full(runs, self.choice.particles)
        none = np.zeros(runs, np.uint8)
        return _Cloud(0, none, points, even, prior.moments()[0], all_distinct)

    def predict(self, belief: _Cloud, u: Array, dt: float) -> _Cloud:
        model, step = self.model, belief.step + 1
        points, lw, parents = self._resample(belief)
        count, q = self.choice.particles, model.noise.d
        normals = self.streams.normal("particles:move", (q, count), step)
        factor = model.noise_factor(dt, self.dtype)
        noise = np.einsum("ikm,kjm->ijm", factor, normals.astype(self.dtype, copy=False))
        moved = model.step_noisy(points, u, noise, dt)
        about = model.step(belief.about, u, dt)
        return _Cloud(step, belief.fault, moved, lw, about, parents)

    def _resample(self, belief: _Cloud) -> tuple[Array, Array, Array]:
        """Resample, in the runs where the effective sample has become small."""
        points, lw = belief.points, belief.log_weights
        w = np.exp(lw)
        w /= w.sum(axis=0)
        few = 1 / np.einsum("jm,jm->m", w, w) < self.choice.threshold * self.choice.particles
        few &= belief.fault == 0
        if not few.any():
            return points, lw, belief.parents
        u = self.streams.uniform("particles:resample", (), belief.step)
        copies = systematic_counts(w[:, few].astype(float), u[few])
        parents = belief.parents.copy()
        parents[few] = (copies > 0).sum(axis=0)
        parent = ancestors(copies)
        flat = parent * w.shape[1] + np.flatnonzero(few)
        points, lw = points.copy(), lw.copy()
        for row in points:
            chosen = np.take(np.ascontiguousarray(row), flat, mode="clip")
            row[:, few] = chosen
        lw[:, few] = 0
        return points, lw, parents

    def update(
        self, belief: _Cloud, sensor: Sensor, z: Array, u: Array
    ) -> tuple[_Cloud, Innovation]:
        model, p = self.model, self.model.parameters.astype(self.dtype, copy=False)
        z = z.astype(self.dtype, copy=False)
        seen = model.measure(sensor, belief.points, u)
        residual = sensor.space.local(seen, z[:, None])
        r = sensor.covariance(belief.points, u, p)
        missing = missing_components(z, z.shape[1])
        w = np.exp(belief.log_weights)
        w /= w.sum(axis=0)
        innovation = self._innovation(sensor, seen, w, z, r, missing)
        lw = belief.log_weights + sensor.log_density(residual, r, missing)
        top = lw.max(axis=0)
        dead = ~np.isfinite(top)
        lw = lw - np.where(dead, 0, top)
        new = np.exp(lw)
        total = new.sum(axis=0)
        prior_total = np.exp(belief.log_weights).sum(axis=0)
        like = top + np.log(total) - np.log(prior_total)
        ess = total**2 / np.einsum("jm,jm->m", new, new)
        fault = combine_faults(belief.fault, dead, Fault.WEIGHTS_COLLAPSED)
        heaviest = np.argmax(lw, axis=0)
        about = belief.points[:, heaviest, np.arange(lw.shape[1])]
        after = replace(belief, fault=fault, log_weights=lw, about=about)
        return after, replace(innovation, likelihood=like, ess=ess)

    def _innovation(
        self, sensor: Sensor, seen: Array, w: Array, z: Array, r: Array, missing: Array | None
    ) -> Innovation:
        """Innovation under the moments of the predicted measurement."""
        heaviest = np.argmax(w, axis=0)
        about = seen[:, heaviest, np.arange(w.shape[1])]
        predicted, dz = sensor.space.mean(seen, w, about)
        noise = np.einsum("jm,ikjm->ikm", w, r) if r.ndim == 4 else r
        s = linalg.symmetrise(linalg.product_t(dz * w, dz)) + noise
        residual = sensor.space.local(predicted, z)
        if missing is not None:
            s, residual = mask_missing(s, residual, missing)
        low, _ = linalg.cholesky(s)
        return Innovation(residual, low, linalg.solve_lower(low, residual.copy()), missing)

    def posterior(self, belief: _Cloud) -> Weighted:
        return Weighted(belief.points, belief.log_weights, belief.about, belief.parents)

    def operations(self, readings: Mapping[str, float]) -> Counts:
        model, n = self.model, self.choice.particles
        q = model.noise.d
        # a normal by the Box-Muller transform: about two transcendentals and three products
        normal = Counts(mul=3, transcendental=2)
        one = model.transition_tape.counts() + q * normal + Counts(add=q * q / 2, mul=q * q / 2)
        resample = Counts(add=3, mul=1)
        total = n * (one + resample)
        for name, rate in readings.items():
            s = model.sensors[name]
            weigh = s.measure_tape.counts() + counts.triangular_solve(s.m, 1)
            weigh += Counts(add=2 * s.m, mul=s.m, transcendental=1)
            total += rate * n * weigh
        return total
