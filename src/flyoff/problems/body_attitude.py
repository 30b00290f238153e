"""Attitude of a small multirotor from gyro, accelerometer and magnetometer.

Six error states: rotation (body frame) and gyro bias. The gyro is an input at 50 Hz; accelerometer
and magnetometer are sensors at their own rates. The truth is a 20 s flight with real manoeuvres:
attitude is flown, and velocity follows from thrust, gravity and linear rotor drag at constant
height (P. Martin, E. Salaun, "The true role of accelerometer feedback in quadrotor control", Proc.
ICRA 2010, from memory). The accelerometer therefore senses thrust and drag, not tilt; the filters
believe that it senses gravity. Invented vehicle, data-sheet values typical of the class (common
practice, no source).
"""

from __future__ import annotations

import math
from functools import cache
from typing import Annotated

import numpy as np

from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.numerics import algebra, discretise
from flyoff.numerics.spaces import Array, Rotation, StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.options import NonNegative, Positive, Unit, options
from flyoff.problems.contract import Expectation, Quantity, SimulatedProblem, block_error
from flyoff.recordings import Recording, draw_start, read_sensors
from flyoff.registry import register

__all__ = ["BodyAttitude"]

GRAVITY = 9.80665
_DEG = math.pi / 180
SPACE = StateSpace(Rotation("attitude"), Vector("gyro_bias", 3, "rad/s", 0.02))
GYRO = StateSpace(Vector("rate", 3, "rad/s", 1.0))
NOISE = StateSpace(Vector("angle", 3, "rad", 1e-3), Vector("bias", 3, "rad/s", 1e-4))
ACCELEROMETER = StateSpace(Vector("specific_force", 3, "m/s^2"))
MAGNETOMETER = StateSpace(Vector("field", 3, "T"))
# NED field of a mid-latitude site: 20 uT horizontal, 3 deg east, 44 uT down (our scenario)
FIELD = (19.97e-6, 1.05e-6, 44.0e-6)


@register(
    "problem",
    "body-attitude",
    cites=(
        "E. J. Lefferts, F. L. Markley, M. D. Shuster, J. Guid. Control Dyn. "
        "5(5):417-429, 1982; P. Martin, E. Salaun, Proc. ICRA 2010"
    ),
)
@options
class BodyAttitude(SimulatedProblem):
    """Multirotor attitude from gyro, accelerometer, magnetometer in a flown 20 s history."""

    # the sensors as they are
    gyro_noise: Annotated[Positive, Unit("rad/s/sqrt(Hz)")] = 0.007 * _DEG
    gyro_bias_walk: Annotated[Positive, Unit("rad/s^2/sqrt(Hz)")] = 0.002 * _DEG
    accelerometer_noise: Annotated[Positive, Unit("m/s^2/sqrt(Hz)")] = 120e-6 * GRAVITY
    vibration: Annotated[NonNegative, Unit("m/s^2")] = 0.3
    magnetometer_sigma: Annotated[Positive, Unit("T")] = 0.5e-6
    hard_iron_sigma: Annotated[NonNegative, Unit("T")] = 0.3e-6
    rotor_drag: Annotated[NonNegative, Unit("1/s")] = 0.3
    # what the filters assume: in flight the effective noise exceeds the data sheet
    assumed_gyro_factor: Positive = 10.0
    assumed_specific_force_sigma: Annotated[Positive, Unit("m/s^2")] = 2.0
    assumed_field_sigma: Annotated[Positive, Unit("T")] = 1.0e-6
    # the start
    tilt_sigma: Annotated[Positive, Unit("rad")] = 10 * _DEG
    heading_sigma: Annotated[Positive, Unit("rad")] = 20 * _DEG
    gyro_bias_sigma: Annotated[Positive, Unit("rad/s")] = 0.5 * _DEG
    # the rates
    accelerometer_rate: Annotated[Positive, Unit("Hz")] = 50.0
    magnetometer_rate: Annotated[Positive, Unit("Hz")] = 25.0
    magnetometer_latency: Annotated[NonNegative, Unit("s")] = 0.0

    @property
    def step(self) -> float:
        """Seconds between predictions."""
        return 0.02

    @property
    def duration(self) -> float:
        """Seconds of the flown history."""
        return 20.0

    def filter_model(self) -> Model:
        """Accelerometer taken for gravity, magnetometer without hard iron, inflated noise."""
        return _model(
            self.gyro_noise * self.assumed_gyro_factor,
            self.gyro_bias_walk,
            self.assumed_specific_force_sigma,
            self.assumed_field_sigma,
            self.accelerometer_rate,
            self.magnetometer_rate,
            self.magnetometer_latency,
        )

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """Attitude and gyro bias."""
        return (
            Quantity("attitude", "rad", block_error(SPACE, "attitude"), ("deg", 1 / _DEG)),
            Quantity("gyro-bias", "rad/s", block_error(SPACE, "gyro_bias"), ("deg/s", 1 / _DEG)),
        )

    @property
    def expected(self) -> tuple[Expectation, ...]:
        """Tie once converged, difference in convergence."""
        return (
            Expectation(
                "linearised and sigma-point filters tie in steady state, the linearised one is "
                "cheaper; from large initial errors sigma points converge faster",
                "J. Crassidis, F. L. Markley, J. Guid. Control Dyn. 26(4):536-542, 2003 "
                "(a hypothesis taken from it)",
            ),
        )

    @property
    def mismatches(self) -> tuple[str, ...]:
        """What the truth has that the filter model has not."""
        return (
            "the accelerometer senses thrust and rotor drag, the filters take it for gravity",
            "residual hard iron, constant in each run, is not estimated",
            "gyro noise is assumed larger than it is by a factor for vibration",
        )

    def record(self, streams: Streams, error_scale: float) -> Recording:
        """The flown history with drawn sensor errors."""
        flight = flown_history(self.rotor_drag)
        steps, runs = len(flight.times) - 1, len(streams)
        dt = self.step
        attitude = np.repeat(flight.attitude[:, :, None], runs, axis=2)
        bias0 = self.gyro_bias_sigma * streams.normal("gyro:bias", (3,))
        walk = self.gyro_bias_walk * math.sqrt(dt) * streams.normal("gyro:walk", (steps, 3))
        bias = bias0 + np.concatenate([np.zeros((1, 3, runs)), np.cumsum(walk, axis=0)])
        white = self.gyro_noise / math.sqrt(dt) * streams.normal("gyro:white", (steps, 3))
        rate = flight.rate[:, :, None] + bias[:-1] + white
        truth = np.concatenate([attitude, bias], axis=1)

        model = _truth_sensors(
            self.accelerometer_noise,
            self.vibration,
            self.magnetometer_sigma,
            self.accelerometer_rate,
            self.magnetometer_rate,
            self.magnetometer_latency,
        )
        iron = self.hard_iron_sigma * streams.normal("magnetometer:hard-iron", (3,))
        force = np.repeat(flight.specific_force[1:, :, None], runs, axis=2)
        known = np.concatenate([force, np.repeat(iron[None], steps, axis=0)], axis=1)
        readings = read_sensors(model, flight.times, truth, known, streams)

        sd = [self.tilt_sigma] * 2 + [self.heading_sigma]
        cov = np.diag(np.square([*sd, *[self.gyro_bias_sigma] * 3]))
        # the bias is drawn as part of the truth, so the filter starts from zero bias
        drawn = draw_start(SPACE, truth[0], cov, streams, error_scale)
        start = drawn.mean.copy()
        start[SPACE.ambient["gyro_bias"]] = truth[0, 4:] * (1 - error_scale)
        prior = type(drawn)(SPACE, start, drawn.cov)
        return Recording(flight.times, truth, rate, readings, prior, streams.runs)


@cache
def _model(
    gyro: float, walk: float, force: float, field: float, fa: float, fm: float, latency: float
) -> Model:
    def turn(x, u, w, p, dt):  # type: ignore[no-untyped-def]
        angle = tuple(
            (rate - bias) * dt - noise
            for rate, bias, noise in zip(u.rate, x.gyro_bias, w.angle, strict=True)
        )
        bias = tuple(b + e for b, e in zip(x.gyro_bias, w.bias, strict=True))
        return algebra.quat_mul(x.attitude, algebra.quat_exp(angle)), bias

    def noise(p, dt):  # type: ignore[no-untyped-def]
        a, b = p.gyro**2 * dt, p.walk**2 * dt
        return discretise.diagonal(a, a, a, b, b, b)

    def gravity(x, u, p):  # type: ignore[no-untyped-def]
        return algebra.unrotate(x.attitude, (0.0, 0.0, -GRAVITY))

    def gravity_noise(x, u, p):  # type: ignore[no-untyped-def]
        return discretise.diagonal(*[p.force**2] * 3)

    def magnetic(x, u, p):  # type: ignore[no-untyped-def]
        return algebra.unrotate(x.attitude, FIELD)

    def magnetic_noise(x, u, p):  # type: ignore[no-untyped-def]
        return discretise.diagonal(*[p.field**2] * 3)

    return trace(
        ModelSpec(
            space=SPACE,
            transition=turn,
            noise=NOISE,
            noise_covariance=noise,
            inputs=GYRO,
            sensors=(
                SensorSpec("accelerometer", ACCELEROMETER, gravity, gravity_noise, fa),
                SensorSpec(
                    "magnetometer", MAGNETOMETER, magnetic, magnetic_noise, fm, latency=latency
                ),
            ),
            parameters={"gyro": gyro, "walk": walk, "force": force, "field": field},
        )
    )


@cache
def _truth_sensors(
    noise: float, vibration: float, field: float, fa: float, fm: float, latency: float
) -> Model:
    """The sensors as they are: specific force is an input here, hard iron adds to the field."""
    known = StateSpace(Vector("force", 3, "m/s^2", 10.0), Vector("iron", 3, "T", 1e-6))

    def stay(x, u, w, p, dt):  # type: ignore[no-untyped-def]
        return x.attitude, x.gyro_bias

    def no_noise(p, dt):  # type: ignore[no-untyped-def]
        return ()

    def force(x, u, p):  # type: ignore[no-untyped-def]
        return u.force

    def force_noise(x, u, p):  # type: ignore[no-untyped-def]
        # band-limited at half the sample rate, as a data sheet's density is read
        v = p.noise**2 * fa / 2 + p.vibration**2
        return discretise.diagonal(v, v, v)

    def magnetic(x, u, p):  # type: ignore[no-untyped-def]
        body = algebra.unrotate(x.attitude, FIELD)
        return tuple(b + i for b, i in zip(body, u.iron, strict=True))

    def magnetic_noise(x, u, p):  # type: ignore[no-untyped-def]
        return discretise.diagonal(*[p.field**2] * 3)

    return trace(
        ModelSpec(
            space=SPACE,
            transition=stay,
            noise=StateSpace(),
            noise_covariance=no_noise,
            inputs=known,
            sensors=(
                SensorSpec("accelerometer", ACCELEROMETER, force, force_noise, fa),
                SensorSpec(
                    "magnetometer", MAGNETOMETER, magnetic, magnetic_noise, fm, latency=latency
                ),
            ),
            parameters={"noise": noise, "vibration": vibration, "field": field},
        )
    )


# -- the flown history -----------------------------------------------------------------------------


class Flight:
    """A flown history on the prediction grid.

    Attributes
    ----------
    times (T + 1,), attitude (T + 1, 4), velocity (T + 1, 3) m/s NED, specific_force (T + 1, 3)
    m/s^2 body, rate (T, 3) rad/s body: the mean rate of each step, whose integral is exact
    """

    def __init__(
        self, times: Array, attitude: Array, velocity: Array, specific_force: Array
    ) -> None:
        self.times, self.attitude, self.velocity = times, attitude, velocity
        self.specific_force = specific_force
        step = algebra.quat_mul(algebra.quat_conj(tuple(attitude[:-1].T)), tuple(attitude[1:].T))
        self.rate = np.array(algebra.quat_log(step)).T / np.diff(times)[:, None]


# (start s, end s, roll deg, pitch deg): each a smooth pulse; and yaw steps (start, end, deg)
_TILTS = (
    (2.0, 4.0, 0.0, -22.0),  # dash
    (4.2, 6.2, 0.0, 24.0),  # stop
    (6.8, 8.2, 25.0, 0.0),  # sidestep right
    (8.2, 9.8, -27.0, 0.0),  # and back past the start
    (9.8, 11.2, 20.0, 4.0),
    (11.5, 13.5, 8.0, -18.0),  # curved dash
    (13.5, 16.0, -14.0, 12.0),
    (16.2, 17.8, 10.0, 14.0),  # stop
)
_TURNS = ((1.0, 2.2, 30.0), (6.4, 8.4, -100.0), (11.0, 15.0, 210.0), (17.0, 18.5, -60.0))


def _attitude(t: float) -> tuple[float, ...]:
    # hover is never still: a slow sway
    roll = 1.5 * math.sin(2.1 * t)
    pitch = 1.2 * math.sin(1.7 * t + 0.6)
    for start, end, r, p in _TILTS:
        if start < t < end:
            pulse = math.sin(math.pi * (t - start) / (end - start)) ** 2
            roll, pitch = roll + r * pulse, pitch + p * pulse
    yaw = 40.0
    for start, end, angle in _TURNS:
        s = min(max((t - start) / (end - start), 0.0), 1.0)
        yaw += angle * s**3 * (10 - 15 * s + 6 * s * s)
    q = algebra.quat_from_euler(roll * _DEG, pitch * _DEG, yaw * _DEG)
    return tuple(float(c) for c in q)


def _specific_force(q: tuple[float, ...], v: tuple[float, ...], drag: float) -> tuple[float, ...]:
    """Rotor drag in the rotor plane, and the thrust that holds the height."""
    bx, by, _ = algebra.unrotate(q, v)
    fx, fy = -drag * bx, -drag * by
    down = algebra.rotate(q, (fx, fy, 0.0))[2]
    axis = algebra.rotate(q, (0.0, 0.0, 1.0))[2]
    return fx, fy, -(GRAVITY + down) / axis


@cache
def flown_history(drag: float) -> Flight:
    """Integrate the flight at constant height for a linear rotor drag [1/s]: 20 s at 50 Hz."""
    steps, dt, fine = 1000, 0.02, 4
    h = dt / fine

    def rate(t: float, v: tuple[float, ...]) -> tuple[float, ...]:
        q = _attitude(t)
        a = algebra.rotate(q, _specific_force(q, v, drag))
        return a[0], a[1], a[2] + GRAVITY

    def ahead(v: tuple[float, ...], k: tuple[float, ...], s: float) -> tuple[float, ...]:
        return tuple(a + s * b for a, b in zip(v, k, strict=True))

    times = np.arange(steps + 1) * dt
    attitude, velocity, force = np.empty((steps + 1, 4)), np.zeros((steps + 1, 3)), []
    v: tuple[float, ...] = (0.0, 0.0, 0.0)
    for k in range(steps + 1):
        q = _attitude(times[k])
        attitude[k], velocity[k] = q, v
        force.append(_specific_force(q, v, drag))
        for i in range(fine):
            t = times[k] + i * h
            k1 = rate(t, v)
            k2 = rate(t + h / 2, ahead(v, k1, h / 2))
            k3 = rate(t + h / 2, ahead(v, k2, h / 2))
            k4 = rate(t + h, ahead(v, k3, h))
            total = tuple(a + 2 * b + 2 * c + d for a, b, c, d in zip(k1, k2, k3, k4, strict=True))
            v = ahead(v, total, h / 6)
    return Flight(times, attitude, velocity, np.array(force))
