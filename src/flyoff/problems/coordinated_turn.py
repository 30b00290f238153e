"""A manoeuvring aircraft tracked by a radar that measures range and bearing.

Five states: position, velocity and an unknown turn rate; exact coordinated-turn transition (Y.
Bar-Shalom, X. R. Li, T. Kirubarajan 2001, eq. 11.7.1-4). Default values: I. Arasaratnam, S. Haykin,
IEEE Trans. Automat. Contr. 54(6):1254-1269, 2009, section VII (from memory), at 200 steps.
"""

from __future__ import annotations

from functools import cache
from typing import Annotated

import numpy as np

from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.numerics import algebra, discretise
from flyoff.numerics.spaces import Angle, StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.options import Count, NonNegative, Number, Positive, Unit, options
from flyoff.problems.contract import Expectation, Quantity, SimulatedProblem, block_error
from flyoff.recordings import Recording, draw_start, simulate
from flyoff.registry import register

__all__ = ["CoordinatedTurn"]

SPACE = StateSpace(
    Vector("position", 2, "m", 1000.0),
    Vector("velocity", 2, "m/s", 300.0),
    Vector("turn_rate", 1, "rad/s", 0.1),
)
RADAR = StateSpace(Vector("range", 1, "m"), Angle("bearing"))
_DEG = np.pi / 180


@register(
    "problem",
    "coordinated-turn",
    cites=(
        "I. Arasaratnam, S. Haykin, IEEE Trans. Automat. Contr. 54(6):1254-1269, 2009, "
        "section VII (parameters from memory)"
    ),
)
@options
class CoordinatedTurn(SimulatedProblem):
    """An aircraft in a turn of unknown rate, radar range and bearing; 5 states, 200 steps."""

    range_sigma: Annotated[Positive, Unit("m")] = 10.0
    bearing_sigma: Annotated[Positive, Unit("rad")] = 10**0.5 * 1e-3
    acceleration_density: Annotated[Positive, Unit("m^2/s^3")] = 0.1
    turn_density: Annotated[Positive, Unit("rad^2/s^3")] = 1.75e-4
    turn_rate: Annotated[Number, Unit("rad/s")] = -3 * _DEG
    speed: Annotated[Positive, Unit("m/s")] = 300.0
    position_sigma: Annotated[Positive, Unit("m")] = 10.0
    velocity_sigma: Annotated[Positive, Unit("m/s")] = 10**0.5
    turn_rate_sigma: Annotated[Positive, Unit("rad/s")] = 0.01
    latency: Annotated[NonNegative, Unit("s")] = 0.0
    step: Annotated[Positive, Unit("s")] = 1.0
    steps: Count = 200

    def filter_model(self) -> Model:
        """The same as the truth model."""
        return _model(
            self.acceleration_density,
            self.turn_density,
            self.range_sigma,
            self.bearing_sigma,
            1 / self.step,
            self.latency,
        )

    @property
    def duration(self) -> float:
        """Seconds."""
        return self.steps * self.step

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """Position, velocity and turn rate."""
        return (
            Quantity("position", "m", block_error(SPACE, "position")),
            Quantity("velocity", "m/s", block_error(SPACE, "velocity")),
            Quantity("turn-rate", "rad/s", block_error(SPACE, "turn_rate"), ("deg/s", 1 / _DEG)),
        )

    @property
    def expected(self) -> tuple[Expectation, ...]:
        """Sigma-point filters ahead of the linearised one."""
        return (
            Expectation(
                "cubature <= symmetric sigma points < linearised in position; the linearised "
                "filter has a heavy tail of lost runs",
                "I. Arasaratnam, S. Haykin 2009, section VII (from memory: curves only)",
            ),
        )

    def start_covariance(self) -> np.ndarray:
        """P0 (5, 5), diagonal."""
        sd = [self.position_sigma] * 2 + [self.velocity_sigma] * 2 + [self.turn_rate_sigma]
        return np.diag(np.square(sd))

    def record(self, streams: Streams, error_scale: float) -> Recording:
        """Draw one batch."""
        runs = len(streams)
        x0 = np.array([1000.0, 1000.0, self.speed, 0.0, self.turn_rate])
        times = np.arange(self.steps + 1) * self.step
        prior = draw_start(SPACE, x0[:, None], self.start_covariance(), streams, error_scale)
        inputs = np.zeros((self.steps, 0, runs))
        start = np.repeat(x0[:, None], runs, axis=1)
        truth, readings = simulate(self.filter_model(), times, start, inputs, streams)
        return Recording(times, truth, inputs, readings, prior, streams.runs)


@cache
def _model(q1: float, q2: float, sr: float, st: float, rate: float, latency: float) -> Model:
    def turn(x, u, w, p, dt):  # type: ignore[no-untyped-def]
        (px, py), (vx, vy), rate = x.position, x.velocity, x.turn_rate
        # sin(wT)/w, (1 - cos wT)/w, sin(wT) and cos(wT) from half the angle: one branch, and exact
        # at zero rate
        half = rate * (dt / 2)
        chord = dt * algebra.sinc(half)
        s = chord * np.cos(half)
        c = rate * (chord * chord * 0.5)
        sin, cos = rate * s, 1 - rate * c
        return (
            (px + s * vx - c * vy + w.position[0], py + c * vx + s * vy + w.position[1]),
            (
                cos * vx - sin * vy + w.velocity[0],
                sin * vx + cos * vy + w.velocity[1],
            ),
            rate + w.turn_rate,
        )

    def noise(p, dt):  # type: ignore[no-untyped-def]
        (a, b), (_, c) = discretise.white_acceleration(p.q1, dt)
        return (
            (a, 0, b, 0, 0),
            (0, a, 0, b, 0),
            (b, 0, c, 0, 0),
            (0, b, 0, c, 0),
            (0, 0, 0, 0, p.q2 * dt),
        )

    def radar(x, u, p):  # type: ignore[no-untyped-def]
        px, py = x.position
        return np.hypot(px, py), np.arctan2(py, px)

    def radar_noise(x, u, p):  # type: ignore[no-untyped-def]
        return discretise.diagonal(p.range_sigma**2, p.bearing_sigma**2)

    return trace(
        ModelSpec(
            space=SPACE,
            transition=turn,
            noise=SPACE,
            noise_covariance=noise,
            sensors=(SensorSpec("radar", RADAR, radar, radar_noise, rate, latency=latency),),
            parameters={"q1": q1, "q2": q2, "range_sigma": sr, "bearing_sigma": st},
        )
    )
