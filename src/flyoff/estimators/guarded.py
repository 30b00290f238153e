"""A batched filter from outside the package: an exception is a counted failure, not the end."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from flyoff.estimators.contract import Belief, Fault, Filter, Gaussian, Innovation, Posterior
from flyoff.models.model import Model, Sensor
from flyoff.models.priors import Prior
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array

__all__ = ["Guarded"]


@dataclass(frozen=True)
class _Broken(Belief):
    """All runs of a batch ended by one exception: which run it was cannot be told."""

    messages: tuple[str, ...]


class Guarded:
    """Wraps a bound filter; an exception fails every run of the batch, with its message."""

    def __init__(self, inner: Filter, model: Model, runs: int) -> None:
        self.inner, self.model, self.runs = inner, model, runs

    def _try(self, step: int, do: Callable[[], Any]) -> Any:
        try:
            return do()
        except (Exception, SystemExit) as why:
            text = f"{type(why).__name__}: {why}".splitlines()[0][:200]
            fault = np.full(self.runs, Fault.EXCEPTION, np.uint8)
            return _Broken(step, fault, (text,) * self.runs)

    def start(self, prior: Prior) -> Any:
        """As the filter's."""
        return self._try(0, lambda: self.inner.start(prior))

    def predict(self, belief: Any, u: Array, dt: float) -> Any:
        """As the filter's."""
        if isinstance(belief, _Broken):
            return belief
        return self._try(belief.step, lambda: self.inner.predict(belief, u, dt))

    def update(self, belief: Any, sensor: Sensor, z: Array, u: Array) -> tuple[Any, Innovation]:
        """As the filter's."""
        if not isinstance(belief, _Broken):
            after = self._try(belief.step, lambda: self.inner.update(belief, sensor, z, u))
            if not isinstance(after, _Broken):
                return after
            belief = after
        m = sensor.m
        nothing = np.full((m, self.runs), np.nan)
        factor = np.full((m, m, self.runs), np.nan)
        gone = np.ones((m, self.runs), dtype=bool)
        return belief, Innovation(nothing, factor, nothing, gone)

    def posterior(self, belief: Any) -> Posterior:
        """As the filter's; NaN once it has broken."""
        lost = Gaussian(np.full((self.model.space.n, self.runs), np.nan), None)
        if isinstance(belief, _Broken):
            return lost
        got = self._try(belief.step, lambda: self.inner.posterior(belief))
        return lost if isinstance(got, _Broken) else got

    def operations(self, readings: Mapping[str, float]) -> Counts:
        """As the filter's, or not a number."""
        got = self._try(0, lambda: self.inner.operations(readings))
        return Counts(add=float("nan")) if isinstance(got, _Broken) else got
