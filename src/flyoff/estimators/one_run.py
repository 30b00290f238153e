"""Write an estimator for one run with plain arrays; the adapter runs it over all of them.

Subclass `OneRun`, decorate it with `options` and `register`, and fill in four methods::

    @register("estimator", "my-filter")
    @options
    class MyFilter(OneRun):
        gain: Positive = 0.1

        def start(self, model, mean, cov): ...          # -> state: anything you like
        def predict(self, model, state, u, dt): ...     # -> state
        def update(self, model, state, sensor, z, u): ...  # -> state
        def estimate(self, model, state): ...           # -> mean (n,), cov (d, d) or None

`model` and `sensor` are views with plain (n,), (d, d) and (m,) arrays. NaN in `z` is a missing
component. You may change `state` in place: you get a copy. An exception ends that run, and only
that run, as a failure with its message. No covariance makes consistency "not assessable".
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from flyoff.estimators.contract import Belief, Fault, Gaussian, Innovation
from flyoff.models.model import Model, Sensor, mask_missing
from flyoff.models.priors import Prior
from flyoff.numerics import linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.streams import Streams

__all__ = ["OneRun", "PlainModel", "PlainSensor"]


def _twice(a: Array) -> Array:
    """A batch of two equal runs: the tapes and reductions never see a batch of one."""
    return np.repeat(np.asarray(a, dtype=float)[:, None], 2, axis=1)


class PlainSensor:
    """One sensor for one run: arrays (m,), (m, d), (m, m)."""

    def __init__(self, sensor: Sensor, model: Model) -> None:
        self._sensor, self._model = sensor, model
        self.name: str = sensor.name
        self.rate: float = sensor.rate
        self.space: StateSpace = sensor.space

    def measure(self, x: Array, u: Array) -> Array:
        """Noise-free measurement."""
        return self._model.measure(self._sensor, _twice(x), _twice(u))[:, 0]

    def jacobian(self, x: Array, u: Array) -> Array:
        """H (m, d) in tangent coordinates."""
        p = self._model.parameters
        return self._sensor.linearise(_twice(x), _twice(u), p)[1][..., 0]

    def covariance(self, x: Array, u: Array) -> Array:
        """R (m, m)."""
        return self._sensor.covariance(_twice(x), _twice(u), self._model.parameters)[..., 0]

    def residual(self, predicted: Array, z: Array) -> Array:
        """z - predicted, angles the shortest way (m,)."""
        return self.space.local(_twice(predicted), _twice(z))[:, 0]


class PlainModel:
    """A model for one run: arrays (n,), (d, d)."""

    def __init__(self, model: Model) -> None:
        self._model = model
        self.space: StateSpace = model.space
        self.sensors = {name: PlainSensor(s, model) for name, s in model.sensors.items()}

    def step(self, x: Array, u: Array, dt: float) -> Array:
        """Noise-free transition."""
        return self._model.step(_twice(x), _twice(u), dt)[:, 0]

    def jacobian(self, x: Array, u: Array, dt: float) -> Array:
        """F (d, d) in tangent coordinates."""
        return self._model.linearise(_twice(x), _twice(u), dt)[1][..., 0]

    def noise(self, x: Array, u: Array, dt: float) -> Array:
        """Q (d, d), the tangent covariance one step adds."""
        return self._model.added_noise(_twice(x), _twice(u), dt)[..., 0]

    def retract(self, x: Array, delta: Array) -> Array:
        """Move the state `x` by the tangent vector `delta` (d,)."""
        return self.space.retract(_twice(x), _twice(delta))[:, 0]

    def local(self, x: Array, y: Array) -> Array:
        """Tangent vector (d,) at `x` that leads to `y`."""
        return self.space.local(_twice(x), _twice(y))[:, 0]

    def block(self, x: Array, name: str) -> Array:
        """One block of a state."""
        return x[self.space.ambient[name]]


class OneRun:
    """Base of estimators written for one run; see the recipe at the top of this file."""

    def suits(self, model: Model) -> str | None:
        """None, or why it cannot run on the model; override where it matters."""
        return None

    def batch(self, model: Model) -> int:
        """Runs evaluated at once."""
        return 64

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> _OneRunFilter:
        """A filter over the runs of `streams`."""
        return _OneRunFilter(self, model)

    def start(self, model: PlainModel, mean: Array, cov: Array) -> Any:
        """State at the start from the prior's mean (n,) and covariance (d, d)."""
        raise NotImplementedError

    def predict(self, model: PlainModel, state: Any, u: Array, dt: float) -> Any:
        """State one step later; `u` is (k,)."""
        raise NotImplementedError

    def update(self, model: PlainModel, state: Any, sensor: PlainSensor, z: Array, u: Array) -> Any:
        """State after a reading z (m,)."""
        raise NotImplementedError

    def estimate(self, model: PlainModel, state: Any) -> tuple[Array, Array | None]:
        """Mean (n,) and covariance (d, d), or None where none is kept."""
        raise NotImplementedError


@dataclass(frozen=True)
class _States(Belief):
    """One state a run, their estimates, and what a failed run said."""

    states: tuple[Any, ...]
    mean: Array
    cov: Array | None
    messages: tuple[str, ...]


class _OneRunFilter:
    def __init__(self, choice: OneRun, model: Model) -> None:
        self.choice, self.model, self.plain = choice, model, PlainModel(model)

    def _each(self, belief: _States | None, runs: int, do: Callable[[int], Any]) -> _States:
        """Call `do` for every run that is still alive and collect the estimates."""
        n, d = self.model.space.n, self.model.space.d
        fault = np.zeros(runs, np.uint8) if belief is None else belief.fault.copy()
        states = [None] * runs if belief is None else list(belief.states)
        messages = [""] * runs if belief is None else list(belief.messages)
        mean = np.full((n, runs), np.nan)
        cov = np.full((d, d, runs), np.nan)
        any_cov = False
        for r in range(runs):
            if fault[r]:
                continue
            try:
                states[r] = do(r)
                m, p = self.choice.estimate(self.plain, states[r])
                mean[:, r] = _shaped(m, (n,), "mean")
                if p is not None:
                    cov[:, :, r] = _shaped(p, (d, d), "covariance")
                    any_cov = True
            except (Exception, SystemExit) as why:
                fault[r] = Fault.EXCEPTION
                messages[r] = f"{type(why).__name__}: {why}".splitlines()[0][:200]
        step = 0 if belief is None else belief.step
        kept = cov if any_cov else None
        return _States(step, fault, tuple(states), mean, kept, tuple(messages))

    def start(self, prior: Prior) -> _States:
        mean, cov = prior.moments()
        return self._each(
            None,
            mean.shape[1],
            lambda r: self.choice.start(self.plain, mean[:, r].copy(), cov[:, :, r].copy()),
        )

    def predict(self, belief: _States, u: Array, dt: float) -> _States:
        def one(r: int) -> Any:
            state = copy.deepcopy(belief.states[r])
            return self.choice.predict(self.plain, state, u[:, r].copy(), dt)

        after = self._each(belief, len(belief.states), one)
        return _States(
            belief.step + 1, after.fault, after.states, after.mean, after.cov, after.messages
        )

    def update(
        self, belief: _States, sensor: Sensor, z: Array, u: Array
    ) -> tuple[_States, Innovation]:
        plain = self.plain.sensors[sensor.name]

        def one(r: int) -> Any:
            if np.isnan(z[:, r]).all():
                return belief.states[r]
            state = copy.deepcopy(belief.states[r])
            return self.choice.update(self.plain, state, plain, z[:, r].copy(), u[:, r].copy())

        innovation = self._innovation(belief, sensor, z, u)
        return self._each(belief, len(belief.states), one), innovation

    def _innovation(self, belief: _States, sensor: Sensor, z: Array, u: Array) -> Innovation:
        """Innovation from the estimate and its linearised covariance."""
        p = self.model.parameters
        predicted, h = sensor.linearise(belief.mean, u, p)
        residual = sensor.space.local(predicted, z)
        gone = np.isnan(z)
        if belief.cov is None:
            s = np.full((sensor.m, *residual.shape), np.nan)
        else:
            cross = sensor.project(h, belief.cov)
            s = sensor.spread(cross, h) + sensor.covariance(belief.mean, u, p)
        s, residual = mask_missing(s, residual, gone)
        low, _ = linalg.cholesky(s)
        return Innovation(residual, low, linalg.solve_lower(low, residual.copy()), gone)

    def posterior(self, belief: _States) -> Gaussian:
        return Gaussian(belief.mean, belief.cov)

    def operations(self, readings: Mapping[str, float]) -> Counts:
        return Counts(add=float("nan"))


def _shaped(value: Any, shape: tuple[int, ...], what: str) -> Array:
    out = np.asarray(value, dtype=float)
    if out.shape != shape:
        raise ValueError(f"{what} must have shape {shape}, got {out.shape}")
    return out
