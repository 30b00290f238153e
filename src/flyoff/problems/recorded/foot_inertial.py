"""Recorded: a foot-mounted inertial sensor, zero velocity in stance, optical markers as truth.

One walk of 20 m out and back, both feet. State: position, velocity and attitude of the sensor and
gyro bias; specific force and rate are inputs; the only measurement is zero velocity in detected
stance (E. Foxlin, IEEE Comput. Graph. Appl. 25(6):38-46, 2005). The detector (I. Skog et al., IEEE
Trans. Biomed. Eng. 57(11):2657-2666, 2010), its threshold, the lever arm and the sensor's rotation
were fitted on the first 8 s, which are not scored. See `foot_walk_data` and
`foot_walk/PROVENANCE.md`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Annotated

import numpy as np

from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.numerics import algebra, discretise
from flyoff.numerics.spaces import Array, Rotation, StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.options import NonNegative, Positive, Unit, options
from flyoff.problems.contract import Expectation, Quantity, Segment, block_error
from flyoff.problems.recorded import foot_walk_data
from flyoff.recordings import Readings, Recording, draw_start
from flyoff.registry import register

__all__ = ["FootInertial"]

_DEG = np.pi / 180
SPACE = StateSpace(
    Vector("position", 3, "m", 10.0),
    Vector("velocity", 3, "m/s", 2.0),
    Rotation("attitude"),
    Vector("gyro_bias", 3, "rad/s", 0.01),
)
IMU = StateSpace(Vector("force", 3, "m/s^2", 10.0), Vector("rate", 3, "rad/s", 2.0))
NOISE = StateSpace(
    Vector("velocity", 3, "1", 0.1),
    Vector("angle", 3, "rad", 1e-3),
    Vector("bias", 3, "rad/s", 1e-4),
)
ZERO_VELOCITY = StateSpace(Vector("velocity", 3, "m/s"))
GRAVITY = foot_walk_data.GRAVITY


@register(
    "problem",
    "foot-inertial",
    cites=(
        "E. Foxlin, IEEE Comput. Graph. Appl. 25(6):38-46, 2005; I. Skog et al., IEEE "
        "Trans. Biomed. Eng. 57(11):2657-2666, 2010"
    ),
)
@options
class FootInertial:
    """Recorded walk: shoe-mounted inertial sensor, zero velocity in stance, markers as truth."""

    # what the filters assume; values chosen on the first part
    gyro_noise: Annotated[Positive, Unit("rad/s/sqrt(Hz)")] = 4e-3
    gyro_bias_walk: Annotated[Positive, Unit("rad/s^2/sqrt(Hz)")] = 1e-5
    force_noise: Annotated[Positive, Unit("m/s^2/sqrt(Hz)")] = 0.035
    force_noise_growth: Annotated[NonNegative, Unit("1")] = 0.4
    stance_speed_sigma: Annotated[Positive, Unit("m/s")] = 0.04
    # the first estimate, drawn about the markers' state
    position_sigma: Annotated[Positive, Unit("m")] = 0.005
    velocity_sigma: Annotated[Positive, Unit("m/s")] = 0.03
    attitude_sigma: Annotated[Positive, Unit("rad")] = 1 * _DEG
    gyro_bias_sigma: Annotated[Positive, Unit("rad/s")] = 7e-4

    @property
    def recorded(self) -> bool:
        """Read from a log."""
        return True

    @property
    def runs_by_default(self) -> int:
        """Sixteen drawn first estimates for each foot: more would say nothing new."""
        return 32

    @property
    def step(self) -> float:
        """Seconds between predictions: two samples of the sensor."""
        return float(_increments().times[-1]) / (len(_increments().times) - 1)

    @property
    def duration(self) -> float:
        """Seconds."""
        return float(_increments().times[-1])

    @property
    def segments(self) -> tuple[Segment, ...]:
        """Stretches of 5 s after the first part; both feet of one are one unit."""
        return tuple(
            Segment(f"segment-{i + 1}", a, b)
            for i, (a, b) in enumerate(foot_walk_data.prepare().segments)
        )

    @property
    def alignment(self) -> WholeTrackAlignment:
        """Yaw and origin, which nothing here can observe."""
        return WholeTrackAlignment()

    @property
    def truth_covariance(self) -> Array:
        """Variance of the markers' own state: 10 mm, 0.02 m/s, 0.7 deg (residuals of the fit)."""
        return np.diag(np.square([0.01] * 3 + [0.02] * 3 + [0.7 * _DEG] * 3 + [0.0] * 3))

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """Heel position and velocity after alignment; the rest for orientation."""
        return (
            Quantity("heel-horizontal", "m"),
            Quantity("heel-vertical", "m"),
            Quantity("heel-velocity", "m/s"),
            Quantity("heel-unaligned", "m"),
            Quantity(
                "attitude", "rad", block_error(SPACE, "attitude"), ("deg", 1 / _DEG), agreement=True
            ),
        )

    @property
    def expected(self) -> tuple[Expectation, ...]:
        """No difference between families."""
        return (
            Expectation(
                "families tie: the errors come from the sensors at heel strike and from the "
                "stance assumption, not from linearisation; about 0.1 to 0.2 m horizontal",
                "J.-O. Nilsson, I. Skog, P. Handel, Proc. UPINLBS 2012 (from memory)",
            ),
        )

    @property
    def mismatches(self) -> tuple[str, ...]:
        """What the recording has that the filter model has not."""
        fit = foot_walk_data.prepare().calibration
        size = 1000 * np.linalg.norm(fit.lever_arm, axis=0)
        return (
            "real data: one person, one walk of 41 m; it illustrates and never gates",
            "the accelerometers clip at some heel strikes and the shoe deforms",
            "zero-velocity readings are correlated within a stance; the filters take them as white",
            "the stance detector looks half its 0.1 s window ahead, the same for all",
            f"lever arm sensor to heel marker {size[0]:.0f} and {size[1]:.0f} mm (left, right) and "
            "sensor rotation fitted on the first 8 s; heel acceleration residual "
            f"{fit.force_first[0]:.2f} and {fit.force_first[1]:.2f} m/s^2 there, "
            f"{fit.force_scored[0]:.2f} and {fit.force_scored[1]:.2f} m/s^2 on the scored part",
            "marker velocity: zero-phase Butterworth low-pass, "
            f"{foot_walk_data.MARKER_CUTOFF:.0f} Hz, then a cubic spline",
            "attitude is agreement with the markers (truth good to 1-3 deg), never a gate; it "
            "follows the gyro within a stride, so it is not independent of it",
            f"alignment: {WholeTrackAlignment.rule}",
        )

    def filter_model(self) -> Model:
        """Strapdown mechanisation with force noise that grows away from 1 g."""
        return _model(
            self.gyro_noise,
            self.gyro_bias_walk,
            self.force_noise,
            self.force_noise_growth,
            self.stance_speed_sigma,
            1 / self.step,
        )

    def record(self, streams: Streams, error_scale: float) -> Recording:
        """The walk; run r is foot r mod 2 with drawn first estimate r div 2."""
        walk, grid = foot_walk_data.prepare(), _increments()
        feet = np.array(streams.runs) % 2
        truth = np.full((len(grid.times), SPACE.n, len(feet)), np.nan)
        for name in ("position", "velocity", "attitude"):
            truth[:, SPACE.ambient[name]] = getattr(walk, name)[grid.rows][:, :, feet]
        gone = ~walk.valid[grid.rows][:, feet]
        truth[np.broadcast_to(gone[:, None], truth.shape)] = np.nan
        inputs = grid.inputs[:, :, feet]
        still = walk.stance[grid.rows[1:]][:, feet]
        due = np.flatnonzero(still.any(axis=1))
        values = np.where(still[due, None], 0.0, np.nan)
        zero = Readings("zero-velocity", due + 1, due + 1, np.repeat(values, 3, axis=1))
        sd = [self.position_sigma] * 3 + [self.velocity_sigma] * 3
        sd += [self.attitude_sigma] * 3 + [self.gyro_bias_sigma] * 3
        start = np.nan_to_num(truth[0])
        turn, bias = walk.calibration.sensor_to_body, walk.calibration.rate_bias
        start[SPACE.ambient["gyro_bias"]] = np.einsum("bsf,sf->bf", turn, bias)[:, feet]
        prior = draw_start(SPACE, start, np.diag(np.square(sd)), streams, error_scale)
        return Recording(grid.times, truth, inputs, (zero,), prior, streams.runs)


class WholeTrackAlignment:
    """One rotation about the vertical and one shift a run, by least squares."""

    rule = (
        "one rotation about the vertical and one shift a run, least squares of the horizontal "
        "heel track over the scored part, the same rule for every candidate"
    )

    def channels(self, estimate: Array) -> Array:
        """Heel position and velocity need position, velocity and attitude (10, M)."""
        return estimate[:10]

    def errors(self, recording: Recording, kept: Array) -> dict[str, Array]:
        """Heel error magnitudes (T, M) after alignment, and before it."""
        walk, grid = foot_walk_data.prepare(), _increments()
        feet = np.array(recording.runs) % 2
        rows = grid.rows[1:]
        q = tuple(np.moveaxis(kept[:, 6:10], 1, 0))
        lever = tuple(walk.lever_arm[:, feet])
        heel = kept[:, :3] + np.stack(algebra.rotate(q, lever), axis=1)
        # the rate at a step, less the rest bias: enough for a velocity of 8 cm of lever arm
        turn, bias = walk.calibration.sensor_to_body, walk.calibration.rate_bias
        rate = walk.rate[rows] - np.einsum("bsf,sf->bf", turn, bias)
        swing = algebra.cross(tuple(np.moveaxis(rate[:, :, feet], 1, 0)), lever)
        speed = kept[:, 3:6] + np.stack(algebra.rotate(q, swing), axis=1)
        valid = walk.valid[rows, None]
        want = np.where(valid, walk.heel_position[rows], np.nan)[:, :, feet]
        want_speed = np.where(valid, walk.heel_velocity[rows], np.nan)[:, :, feet]
        first, last = walk.segments[0][0], walk.segments[-1][1]
        scored = (grid.times[1:] >= first) & (grid.times[1:] < last)
        lost = np.isnan(heel[scored]).any(axis=(0, 1))
        fit = foot_walk_data.align(np.where(lost, 0.0, heel), want, scored)
        error = np.where(lost, np.nan, fit.positions(heel) - want)
        error_speed = np.where(lost, np.nan, fit.vectors(speed) - want_speed)
        raw = np.where(lost, np.nan, heel - want)
        return {
            "heel-horizontal": np.hypot(error[:, 0], error[:, 1]),
            "heel-vertical": np.abs(error[:, 2]),
            "heel-velocity": np.sqrt((error_speed**2).sum(axis=1)),
            "heel-unaligned": np.sqrt((raw**2).sum(axis=1)),
        }


@dataclass(frozen=True)
class _Increments:
    """Pre-integrated input: times (K + 1,), rows of the samples (K + 1,), inputs (K, 6, foot)."""

    times: Array
    rows: Array
    inputs: Array


@cache
def _increments() -> _Increments:
    """Pairs of samples integrated with coning and sculling terms, as mean force and rate.

    Two-sample algorithm: R. B. Miller, J. Guid. Control Dyn. 6(4):287-291, 1983 (coning);
    P. Savage, J. Guid. Control Dyn. 21(2):208-221, 1998 (sculling), both from memory. The force is
    referred to the attitude at the middle of the pair, where the model rotates it.
    """
    walk = foot_walk_data.prepare()
    rows = np.arange(0, len(walk.times), 2)
    h = float(walk.times[1] - walk.times[0])
    middle = (rows[:-1] + rows[1:]) // 2
    # increments of each half from the trapezoid of its samples
    angle = [
        h / 2 * (walk.rate[a] + walk.rate[b]) for a, b in ((rows[:-1], middle), (middle, rows[1:]))
    ]
    speed = [
        h / 2 * (walk.specific_force[a] + walk.specific_force[b])
        for a, b in ((rows[:-1], middle), (middle, rows[1:]))
    ]

    def cross(a: Array, b: Array) -> Array:
        return np.cross(a, b, axis=1)

    turn = angle[0] + angle[1] + 2 / 3 * cross(angle[0], angle[1])
    scull = 2 / 3 * (cross(angle[0], speed[1]) + cross(speed[0], angle[1]))
    push = speed[0] + speed[1] + scull
    inputs = np.concatenate([push, turn], axis=1) / (2 * h)
    return _Increments(walk.times[rows], rows, inputs)


@cache
def _model(
    gyro: float, walk: float, force: float, growth: float, still: float, rate: float
) -> Model:
    def strapdown(x, u, w, p, dt):  # type: ignore[no-untyped-def]
        angle = tuple(
            (r - b) * dt - e for r, b, e in zip(u.rate, x.gyro_bias, w.angle, strict=True)
        )
        half_turn = algebra.quat_exp(tuple(a / 2 for a in angle))
        half = algebra.quat_mul(x.attitude, half_turn)
        # noise of the mean force of a step; it grows with the impact
        sigma = p.force * (1 + p.growth * abs(algebra.norm(u.force) - GRAVITY)) / np.sqrt(dt)
        noisy = tuple(f + sigma * e for f, e in zip(u.force, w.velocity, strict=True))
        a = algebra.rotate(half, noisy)
        a = (a[0], a[1], a[2] + GRAVITY)
        position = tuple(
            s + v * dt + c * dt * dt / 2 for s, v, c in zip(x.position, x.velocity, a, strict=True)
        )
        velocity = tuple(v + c * dt for v, c in zip(x.velocity, a, strict=True))
        attitude = algebra.quat_mul(half, half_turn)
        bias = tuple(b + e for b, e in zip(x.gyro_bias, w.bias, strict=True))
        return position, velocity, attitude, bias

    def noise(p, dt):  # type: ignore[no-untyped-def]
        a, b = p.gyro**2 * dt, p.walk**2 * dt
        return discretise.diagonal(1.0, 1.0, 1.0, a, a, a, b, b, b)

    def zero_velocity(x, u, p):  # type: ignore[no-untyped-def]
        return x.velocity

    def stillness(x, u, p):  # type: ignore[no-untyped-def]
        return discretise.diagonal(*[p.still**2] * 3)

    return trace(
        ModelSpec(
            space=SPACE,
            transition=strapdown,
            noise=NOISE,
            noise_covariance=noise,
            inputs=IMU,
            sensors=(SensorSpec("zero-velocity", ZERO_VELOCITY, zero_velocity, stillness, rate),),
            parameters={
                "gyro": gyro,
                "walk": walk,
                "force": force,
                "growth": growth,
                "still": still,
            },
            noise_is="piecewise-constant",
        )
    )
