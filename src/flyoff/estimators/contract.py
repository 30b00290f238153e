"""The estimator contract, as a numbered recipe.

1. An **estimator** is a frozen options class (its fields are the YAML options) registered with
   ``@register("estimator", "name")``. It knows no problem: `bind` gives it a traced `Model`.
2. ``suits(model)`` returns None, or the reason why it cannot run on that model.
3. ``bind(model, streams, dtype)`` returns a **filter**: an object with pure methods, no hidden
   state between calls.
4. ``start(prior) -> Belief`` turns what is known at the start into a belief.
5. ``predict(belief, u, dt) -> Belief`` moves it one step; `u` is (k, M). It advances
   ``belief.step``; own random numbers are keyed by it.
6. ``update(belief, sensor, z, u) -> (Belief, Innovation)`` uses one reading z (m, M) of one sensor;
   NaN components are missing in that run and must not count. Two sensors at one time are two calls.
7. ``posterior(belief)`` returns a `Gaussian` (covariance None if the filter keeps none) or a
   `Weighted` sample; moments on the manifold are derived from it once, outside.
8. A numerical failure is a value: set ``fault`` of that run, never raise, never touch other runs.
9. ``operations(rates) -> Counts``: what one prediction step costs with the given readings a step.

All arrays are component first, runs last. Inputs are never modified.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum
from typing import Any, Protocol, runtime_checkable

import numpy as np

from flyoff.models.model import LOG_2PI, Model, Sensor
from flyoff.models.priors import Prior
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.streams import Streams

__all__ = [
    "Belief",
    "Estimator",
    "Fault",
    "Filter",
    "Gaussian",
    "Innovation",
    "Weighted",
    "combine_faults",
    "moments",
]


class Fault(IntEnum):
    """Why a run was lost; zero means it was not."""

    NONE = 0
    NOT_POSITIVE_DEFINITE = 1
    NON_FINITE = 2
    WEIGHTS_COLLAPSED = 3
    EXCEPTION = 4

    @property
    def text(self) -> str:
        """For people."""
        return {
            0: "",
            1: "covariance not positive definite",
            2: "non-finite state",
            3: "all weights zero",
            4: "exception in the estimator",
        }[int(self)]


@dataclass(frozen=True)
class Belief:
    """What a filter knows after `step` predictions; `fault` (M,) holds `Fault` codes."""

    step: int
    fault: Array


@dataclass(frozen=True)
class Innovation:
    """Diagnostics of one update, taken with the prior covariance.

    Attributes
    ----------
    residual : (m, M), zero where missing
    factor : (m, m, M), lower factor L of S, unit rows where missing
    white : (m, M), L^-1 residual
    missing : (m, M) or None, which components were absent
    ess : (M,) or None, effective sample size after weighting
    likelihood : (M,) or None, log likelihood where it does not follow from the factor
    """

    residual: Array
    factor: Array
    white: Array
    missing: Array | None = None
    ess: Array | None = None
    likelihood: Array | None = None

    @property
    def nis(self) -> Array:
        """Residual' S^-1 residual over the present components (M,), worked out when asked for."""
        return np.einsum("mr,mr->r", self.white, self.white)

    @property
    def count(self) -> Array:
        """How many components were present (M,)."""
        m, runs = self.residual.shape
        if self.missing is None:
            return np.full(runs, m)
        out: Array = m - self.missing.sum(axis=0)
        return out

    @property
    def log_likelihood(self) -> Array:
        """Log likelihood of the reading (M,)."""
        if self.likelihood is not None:
            return self.likelihood
        log_det = np.log(np.einsum("iim->im", self.factor)).sum(axis=0)
        out: Array = -0.5 * self.nis - log_det - 0.5 * LOG_2PI * self.count
        return out


@dataclass(frozen=True)
class Gaussian:
    """Mean (n, M) and tangent covariance (d, d, M), or None where the filter keeps none."""

    mean: Array
    cov: Array | None


@dataclass(frozen=True)
class Weighted:
    """Points (n, N, M) with log weights (N, M), about a reference (n, M).

    `parents` (M,) is how many distinct points the last resampling kept: copies add no information,
    so the effective sample size is never above it.
    """

    points: Array
    log_weights: Array
    about: Array
    parents: Array


Posterior = Gaussian | Weighted


class Filter(Protocol):
    """An estimator bound to a model."""

    def start(self, prior: Prior) -> Any:
        """Belief at the start."""
        ...

    def predict(self, belief: Any, u: Array, dt: float) -> Any:
        """Belief one step later."""
        ...

    def update(self, belief: Any, sensor: Sensor, z: Array, u: Array) -> tuple[Any, Innovation]:
        """Belief after one reading."""
        ...

    def posterior(self, belief: Any) -> Posterior:
        """What the belief says about the state."""
        ...

    def operations(self, readings: Mapping[str, float]) -> Counts:
        """Operations of one step with `readings` of each sensor a step."""
        ...


@runtime_checkable
class Estimator(Protocol):
    """A registered options class."""

    def suits(self, model: Model) -> str | None:
        """None, or why this estimator cannot run on the model."""
        ...

    def batch(self, model: Model) -> int:
        """How many runs to evaluate at once."""
        ...

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> Filter:
        """A filter for the runs of `streams`."""
        ...


def combine_faults(fault: Array, bad: Array, code: Fault) -> Array:
    """Latch `code` in runs that are `bad` and had no fault before."""
    if not bad.any():
        return fault
    return np.where((fault == 0) & bad, np.uint8(code), fault)


def moments(space: StateSpace, posterior: Posterior) -> tuple[Array, Array | None, Array | None]:
    """Mean (n, M), covariance (d, d, M) or None, effective sample size (M,) or None.

    A weighted sample gives the weighted mean on the manifold and covariance/(1 - sum w^2).
    """
    if isinstance(posterior, Gaussian):
        return posterior.mean, posterior.cov, None
    lw = posterior.log_weights
    w = np.exp(lw - lw.max(axis=0))
    w /= w.sum(axis=0)
    # the reference is one of the points, not their centre
    mean, dev = space.mean(posterior.points, w, posterior.about, passes=3)
    square = np.einsum("jm,jm->m", w, w)
    with np.errstate(divide="ignore", invalid="ignore"):
        cov = np.einsum("ijm,kjm->ikm", dev * w, dev) / (1 - square)
    return mean, cov, np.minimum(1 / square, posterior.parents)
