"""The Kalman filter on linear models: the exact answer, written independently of the others.

R. E. Kalman, "A new approach to linear filtering and prediction problems", J. Basic Eng.
82:35-45, 1960. Plain matrices over the run axis (runs first, LAPACK), so that it shares no linear
algebra with the filters it is compared with (but for the diagnostics).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from flyoff.estimators.contract import Fault, Gaussian, Innovation, combine_faults
from flyoff.estimators.gaussian_update import missing_components
from flyoff.estimators.linearised import GaussianBelief, gaussian_start
from flyoff.models.model import Model, Sensor
from flyoff.models.priors import Prior
from flyoff.numerics import counts, linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.options import options
from flyoff.registry import register

__all__ = ["Kalman"]


@register(
    "estimator",
    "kalman",
    cites="R. E. Kalman, J. Basic Eng. 82:35-45, 1960",
)
@options
class Kalman:
    """Kalman filter for linear models: the exact posterior, as a reference."""

    def suits(self, model: Model) -> str | None:
        """Only models declared (and verified) linear."""
        return None if model.linear else "the model is not linear"

    def batch(self, model: Model) -> int:
        """Runs evaluated at once."""
        return 512

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> _KalmanFilter:
        """A filter for the runs of `streams`."""
        return _KalmanFilter(model, np.dtype(dtype))


class _KalmanFilter:
    def __init__(self, model: Model, dtype: np.dtype) -> None:
        self.model, self.dtype = model, dtype

    def start(self, prior: Prior) -> GaussianBelief:
        return gaussian_start(prior, self.dtype)

    def predict(self, belief: GaussianBelief, u: Array, dt: float) -> GaussianBelief:
        mean, f, q = self.model.linearise(belief.mean, u, dt)
        f = _runs_first(f)
        cov = f @ _runs_first(belief.cov) @ np.swapaxes(f, 1, 2)
        cov += _runs_first(q)
        return GaussianBelief(belief.step + 1, belief.fault, mean, _runs_last(cov))

    def update(
        self, belief: GaussianBelief, sensor: Sensor, z: Array, u: Array
    ) -> tuple[GaussianBelief, Innovation]:
        p, z = self.model.parameters.astype(self.dtype, copy=False), z.astype(self.dtype)
        predicted, h3 = sensor.linearise(belief.mean, u, p)
        runs, m, d = z.shape[-1], sensor.m, self.model.space.d
        h = _runs_first(h3)
        r = np.broadcast_to(_runs_first(sensor.covariance(belief.mean, u, p)), (runs, m, m)).copy()
        y = _runs_first(z - predicted)
        missing = missing_components(z, runs)
        if missing is not None:
            gone = missing.T
            h = np.where(gone[:, :, None], 0, h)
            r = np.where(gone[:, :, None] | gone[:, None], 0, r)
            r[gone[:, :, None] & np.eye(m, dtype=bool)] = 1
            y = np.where(gone, 0, y)
        cov = _runs_first(belief.cov)
        s = h @ cov @ np.swapaxes(h, 1, 2) + r
        healthy = np.isfinite(s).all(axis=(1, 2)) & (np.linalg.det(s) > 0)
        s[~healthy] = np.eye(m)
        gain = np.swapaxes(np.linalg.solve(s, h @ cov), 1, 2)
        delta = (gain @ y[..., None])[..., 0]
        a = np.eye(d, dtype=self.dtype) - gain @ h
        cov = a @ cov @ np.swapaxes(a, 1, 2) + gain @ r @ np.swapaxes(gain, 1, 2)
        residual = np.ascontiguousarray(y.T)
        low, _ = linalg.cholesky(_runs_last(s))
        innovation = Innovation(residual, low, linalg.solve_lower(low, residual.copy()), missing)
        fault = combine_faults(belief.fault, ~healthy, Fault.NOT_POSITIVE_DEFINITE)
        after = replace(belief, fault=fault, mean=belief.mean + delta.T, cov=_runs_last(cov))
        return after, innovation

    def posterior(self, belief: GaussianBelief) -> Gaussian:
        return Gaussian(belief.mean, belief.cov)

    def operations(self, readings: Mapping[str, float]) -> Counts:
        d = self.model.space.d
        total = self.model.linear_tape.counts() + 2 * counts.product(d, d, d)
        total += Counts(add=d * d) + counts.product(d, d, 1)
        for name, rate in readings.items():
            m = self.model.sensors[name].m
            one = 2 * counts.product(m, d, d) + counts.product(m, d, m) + counts.cholesky(m)
            one += 2 * counts.triangular_solve(m, d) + 3 * counts.product(d, d, d)
            one += 2 * counts.product(d, m, d) + counts.product(d, m, 1)
            total += rate * one
        return total


def _runs_first(a: Array) -> Array:
    return np.ascontiguousarray(np.moveaxis(a, -1, 0))


def _runs_last(a: Array) -> Array:
    return np.ascontiguousarray(np.moveaxis((a + np.swapaxes(a, 1, 2)) / 2, 0, -1))
