"""Recordings: what every candidate is given, for one batch of runs, and how they are simulated.

A recording holds truth, inputs and sensor readings with their arrival steps. It is the same for
every estimator and does not know them. Readings arrive on prediction steps; a missing component is
NaN. Draws come from streams keyed by role, so conditions, batching and order change nothing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from flyoff.models.model import Model, Sensor
from flyoff.models.priors import GaussianPrior, Prior
from flyoff.numerics import linalg
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.streams import Streams

__all__ = ["Readings", "Recording", "draw_start", "read_sensors", "schedule", "simulate"]


@dataclass(frozen=True)
class Readings:
    """One sensor's readings.

    Attributes
    ----------
    steps : (E,), the prediction step each reading is stamped with (1 to T)
    arrivals : (E,), the step at which it is available
    values : (E, m, M), ambient measurement, NaN where missing
    """

    sensor: str
    steps: Array
    arrivals: Array
    values: Array


@dataclass(frozen=True)
class Recording:
    """Truth and data of one batch.

    Attributes
    ----------
    times : (T + 1,), seconds
    truth : (T + 1, n, M), in the filter's state space, NaN where unknown
    inputs : (T, k, M), input k-1 leads from time k-1 to time k
    readings : tuple of Readings
    prior : Prior, what the filters are told at the start
    """

    times: Array
    truth: Array
    inputs: Array
    readings: tuple[Readings, ...]
    prior: Prior
    runs: tuple[int, ...]

    def select(self, index: slice) -> Recording:
        """The recording of a part of the runs."""
        return self._take(np.arange(len(self.runs))[index])

    def padded(self) -> Recording:
        """The recording with its last run repeated once."""
        return self._take(np.array([*range(len(self.runs)), len(self.runs) - 1]))

    def stretch(self, first: int, steps: int) -> Recording:
        """`steps` steps from step `first` on, as a recording of its own (for timing)."""
        last = min(first + steps, self.steps)
        readings = []
        for r in self.readings:
            inside = (r.steps > first) & (r.arrivals <= last)
            readings.append(
                replace(
                    r,
                    steps=r.steps[inside] - first,
                    arrivals=r.arrivals[inside] - first,
                    values=r.values[inside],
                )
            )
        return replace(
            self,
            times=self.times[first : last + 1],
            truth=self.truth[first : last + 1],
            inputs=self.inputs[first:last],
            readings=tuple(readings),
        )

    def _take(self, index: Array) -> Recording:
        return replace(
            self,
            truth=np.ascontiguousarray(self.truth[:, :, index]),
            inputs=np.ascontiguousarray(self.inputs[:, :, index]),
            readings=tuple(
                replace(r, values=np.ascontiguousarray(r.values[:, :, index]))
                for r in self.readings
            ),
            prior=self.prior.runs(index),
            runs=tuple(self.runs[i] for i in index),
        )

    @property
    def dt(self) -> float:
        """Seconds a step; the grid is uniform."""
        return float(self.times[-1] - self.times[0]) / self.steps

    @property
    def steps(self) -> int:
        """Number of prediction steps."""
        return len(self.times) - 1

    def readings_per_step(self) -> dict[str, float]:
        """Mean number of readings of each sensor a step."""
        return {r.sensor: len(r.steps) / self.steps for r in self.readings}


def schedule(sensor: Sensor, times: Array) -> tuple[Array, Array]:
    """Stamp and arrival steps of a sensor on a uniform grid of prediction times.

    A reading falls on the prediction step nearest to its nominal time; one that would arrive after
    the last step is not there.
    """
    last = len(times) - 1
    dt = float(times[-1] - times[0]) / last
    count = math.floor((last * dt - sensor.phase) * sensor.rate + 1e-9) + 1
    nominal = sensor.phase + np.arange(max(count, 0)) / sensor.rate
    steps = np.unique(np.clip(np.rint(nominal / dt).astype(int), 1, last))
    arrivals = steps + math.ceil(sensor.latency / dt - 1e-9)
    return steps[arrivals <= last], arrivals[arrivals <= last]


def draw_start(
    space: StateSpace, truth: Array, cov: Array, streams: Streams, error_scale: float = 1.0
) -> GaussianPrior:
    """First estimates (n, M) whose error is drawn from `cov` (d, d), scaled by `error_scale`.

    The truth is the estimate moved by delta ~ N(0, cov), so the filter's N(estimate, cov) is exact
    at scale one, on rotations too.
    """
    runs = len(streams)
    low, _ = linalg.cholesky(cov[:, :, None])
    z = streams.normal("start", (space.d,))
    delta = error_scale * np.einsum("ijm,jm->im", low, z)
    wide = np.repeat(cov[:, :, None], runs, axis=2)
    start = np.ascontiguousarray(np.broadcast_to(truth, (space.n, runs)))
    return GaussianPrior(space, space.retract(start, -delta), wide)


def read_sensors(
    model: Model,
    times: Array,
    truth: Array,
    inputs: Array,
    streams: Streams,
    only: Mapping[str, Sensor] | None = None,
) -> tuple[Readings, ...]:
    """Noisy readings of every sensor of the *truth* model along a true trajectory.

    Parameters
    ----------
    truth : (T + 1, n, M)
    inputs : (T, k, M), the true inputs; a reading at step k uses input k - 1
    """
    out = []
    for name, sensor in (only or model.sensors).items():
        steps, arrivals = schedule(sensor, times)
        z = streams.normal(f"sensor:{name}", (len(steps), sensor.m))
        values = np.empty((len(steps), sensor.space.n, len(streams)))
        for e, k in enumerate(steps):
            values[e] = sensor.sample(z[e], truth[k], inputs[k - 1], model.parameters)
        out.append(Readings(name, steps, arrivals, values))
    return tuple(out)


def simulate(
    model: Model, times: Array, start: Array, inputs: Array, streams: Streams
) -> tuple[Array, tuple[Readings, ...]]:
    """Truth (T + 1, n, M) and readings drawn from a truth model.

    Parameters
    ----------
    start : (n, M), true state at times[0]
    inputs : (T, k, M)
    """
    steps = len(times) - 1
    truth = np.empty((steps + 1, *start.shape))
    truth[0] = start
    w = streams.normal("process", (steps, model.noise.d))
    dt = float(times[-1] - times[0]) / steps
    for k in range(steps):
        noise = np.einsum("ijm,jm->im", model.noise_factor(dt, np.float64), w[k])
        truth[k + 1] = model.step_noisy(truth[k], inputs[k], noise, dt)
    return truth, read_sensors(model, times, truth, inputs, streams)
