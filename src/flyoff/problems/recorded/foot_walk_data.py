"""Recorded walk with an inertial sensor on each shoe and optical markers as the reference.

The data file `foot_walk/foot_walk.npz` and its origin are described in `foot_walk/PROVENANCE.md`.
This module turns it into specific force, rate, a stance flag and a reference state per foot.

Frames: world is NED (north = the outward walking direction of the laboratory, z down); body is
forward-right-down of the foot standing at rest, attached to the sensor; a quaternion is
scalar-first and maps body to NED, ``v_ned = R(q) v_body``. At rest ``R(q) f = (0, 0, -g)``.
Feet are the last axis in the order `FEET`. All values are SI.

What the reference is
    Heel position and velocity come from the heel marker alone. The attitude needs care: the
    marker triangle is not rigid (the forefoot bends and twists at push-off, where the triangle
    rolls up to 20 deg against the sensor). Hence the reference attitude follows the triangle only
    while the foot is flat and the rate sensor in between (see `calibrate`). It is therefore NOT
    independent of the rate data within a stride; the triangle alone is kept next to it.

References
    Kabsch (1976), Acta Cryst. A32, 922-923; Wahba (1965), SIAM Review 7(3), 409 (rigid fit).
    Skog, Handel, Nilsson, Rantakokko (2010), IEEE Trans. Biomed. Eng. 57(11), 2657-2666 (stance).
"""

from __future__ import annotations

import hashlib
import io
import math
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from flyoff.errors import UserError

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

DATA_FILE = Path(__file__).parent / "foot_walk" / "foot_walk.npz"
DATA_SHA256 = "6cc056f69218189488b893b49bce2f72e4deb5a4202a1000c740ad3d39da7f0c"

FEET = ("left", "right")
MARKERS = ("heel", "toe", "fifth metatarsal")

#: Magnitude of gravity in m/s^2; the sensors at rest show 9.82 to 9.84.
GRAVITY = 9.81
#: The foot stands still at the start for this long (s); rate biases are its mean.
REST_END = 0.8
#: End of the first part in s. It is used for the calibration and never scored.
CALIBRATION_END = 8.0
#: Scored part: segments of equal length from `CALIBRATION_END` on.
SEGMENT_LENGTH = 5.0
SEGMENT_COUNT = 6
#: Cut-off in Hz of the marker low-pass. The spectrum of the marker positions falls to its floor
#: (about 0.06 mm/sqrt(Hz)) near 20 Hz; white noise of that density up to 20 Hz makes 0.02 m/s of
#: velocity noise.
MARKER_CUTOFF = 20.0
#: Cut-off in Hz of both sides of the lever arm fit. Above it the shoe deforms at heel strike.
FIT_CUTOFF = 10.0
#: The foot counts as flat while all its markers are slower than this (m/s).
FLAT_SPEED = 0.15
#: Standard deviation in s of the kernel that averages flat samples for the reference attitude:
#: the kernel spans about two strides, so that marker noise averages out and the drift of the
#: integrated rate (0.25 deg/s at most) is followed. Any value from 0.4 to 1.6 s leaves gravity in
#: stance vertical to 0.9 to 1.1 deg rms.
ATTITUDE_KERNEL = 0.8

#: Stance detector, chosen on the first part only (see `stance`).
#: The threshold is the largest of 300, 600, 1200, 2400, 5000, ... 40000 for which no sensor moves
#: faster than 0.15 m/s in any stance of the first part.
STANCE_WINDOW = 0.1
STANCE_FORCE_SIGMA = 0.05
STANCE_RATE_SIGMA = math.radians(0.5)
STANCE_THRESHOLD = 5000.0

# Source world (x, y horizontal, z up) to NED: the first leg of the walk runs along -x.
_SOURCE_TO_NED = np.array([-1.0, 1.0, -1.0])


@dataclass(frozen=True)
class RawWalk:
    """The recording in SI units, sensors in their own axes, markers in NED.

    Attributes
    ----------
    imu_rate, marker_rate : float
        Sample rates in Hz. Sample k is at k / rate for both; their clocks have no offset.
    specific_force : (T, xyz, foot) m/s^2
    rate : (T, xyz, foot) rad/s
    markers : (K, marker, ned, foot) m
        NaN where a marker is missing. The origin is the mean of the first heel positions
        (horizontal) and the laboratory floor (vertical).
    """

    imu_rate: float
    marker_rate: float
    specific_force: FloatArray
    rate: FloatArray
    markers: FloatArray

    def until(self, end: float) -> RawWalk:
        """Return the samples before the time `end` in s."""
        n = math.ceil(end * self.imu_rate)
        k = math.ceil(end * self.marker_rate)
        return RawWalk(
            self.imu_rate,
            self.marker_rate,
            self.specific_force[:n],
            self.rate[:n],
            self.markers[:k],
        )


@dataclass(frozen=True)
class Calibration:
    """Constants of each foot fitted on the first part, with residuals.

    ``first`` residuals are those of the fit; ``scored`` residuals apply the same constants,
    unchanged, to the scored part. Every residual is an rms over samples and axes.

    Attributes
    ----------
    start, end : float
        The first part in s.
    sensor_to_body : (body, sensor, foot)
        Rotation matrix, ``v_body = sensor_to_body @ v_sensor``.
    lever_arm : (body, foot) m
        From the sensor to the heel marker.
    lever_arm_shift : (foot,) m
        Length of the difference to a lever arm fitted on the scored part (a check only).
    rotation_shift : (foot,) rad
        Angle between `sensor_to_body` and the one fitted on the scored part (a check only).
    rate_bias : (sensor, foot) rad/s
        Mean rate of the initial rest.
    triangle : (marker, body, foot) m
        Mean marker triangle of the flat foot about its centroid.
    triangle_first, triangle_scored : (foot,) m
        Distance of markers to the rigidly fitted triangle.
    force_first, force_scored : (foot,) m/s^2
        Specific force moved to the heel against the twice differentiated heel marker, both below
        `FIT_CUTOFF`.
    rate_first, rate_scored : (body, foot) rad/s
        Rate sensor against the differentiated triangle attitude below `FIT_CUTOFF`, per body
        axis. The forward axis is large because the triangle is twisted at push-off.
    flat_first, flat_scored : (foot,) rad
        Triangle attitude against the reference attitude while the foot is flat.
    swing_scored : (foot,) rad
        The same while it is not flat.
    tilt_first, tilt_scored : (foot,) rad
        Angle of the mean specific force of each stance to the vertical, in the reference
        attitude, weighted by the length of the stance.
    """

    start: float
    end: float
    sensor_to_body: FloatArray
    lever_arm: FloatArray
    lever_arm_shift: FloatArray
    rotation_shift: FloatArray
    rate_bias: FloatArray
    triangle: FloatArray
    triangle_first: FloatArray
    triangle_scored: FloatArray
    force_first: FloatArray
    force_scored: FloatArray
    rate_first: FloatArray
    rate_scored: FloatArray
    flat_first: FloatArray
    flat_scored: FloatArray
    swing_scored: FloatArray
    tilt_first: FloatArray
    tilt_scored: FloatArray


@dataclass(frozen=True)
class FootWalk:
    """Measurements and reference at the IMU times. Arrays are read-only.

    Attributes
    ----------
    times : (T,) s
    specific_force : (T, body, foot) m/s^2
        Raw, only rotated into body axes; no bias removed.
    rate : (T, body, foot) rad/s
        Raw, only rotated into body axes; no bias removed.
    stance : (T, foot) bool
        Zero-velocity flag of `stance`.
    position, velocity : (T, ned, foot) m, m/s
        Reference of the sensor: heel marker minus the rotated lever arm.
    attitude : (T, wxyz, foot)
        Reference attitude, body to NED, sign continuous.
    marker_attitude : (T, wxyz, foot)
        Attitude of the marker triangle alone.
    heel_position, heel_velocity : (T, ned, foot) m, m/s
        Heel marker, low-passed at `MARKER_CUTOFF`.
    lever_arm : (body, foot) m
        Sensor to heel marker, ``heel = position + R(q) lever_arm``.
    valid : (T, foot) bool
        False where a marker of the foot is missing or the marker recording has ended.
    score_start : int
        Index of the first scored sample.
    segments : tuple of (t0, t1) in s
        Scored segments ``t0 <= t < t1``.
    calibration : Calibration
    """

    times: FloatArray
    specific_force: FloatArray
    rate: FloatArray
    stance: BoolArray
    position: FloatArray
    velocity: FloatArray
    attitude: FloatArray
    marker_attitude: FloatArray
    heel_position: FloatArray
    heel_velocity: FloatArray
    lever_arm: FloatArray
    valid: BoolArray
    score_start: int
    segments: tuple[tuple[float, float], ...]
    calibration: Calibration

    def segment_mask(self, index: int) -> BoolArray:
        """Return the mask (T,) of segment `index`; IndexError if there is none."""
        t0, t1 = self.segments[index]
        mask: BoolArray = (self.times >= t0) & (self.times < t1)
        return mask


@dataclass(frozen=True)
class Alignment:
    """Rotation about the vertical and shift that bring an estimate onto the reference.

    Attributes
    ----------
    yaw : (M,) rad
        Rotation about the down axis applied to the estimate, in (-pi, pi].
    rotation : (ned, ned, M)
    shift : (ned, M) m
    """

    yaw: FloatArray
    rotation: FloatArray
    shift: FloatArray

    def positions(self, position: FloatArray) -> FloatArray:
        """Return the aligned positions (T, ned, M) in m."""
        return self.vectors(position) + self.shift

    def vectors(self, vector: FloatArray) -> FloatArray:
        """Return rotated NED vectors (T, ned, M), e.g. velocities."""
        out: FloatArray = np.einsum("ijm,tjm->tim", self.rotation, vector)
        return out

    def attitudes(self, quaternion: FloatArray) -> FloatArray:
        """Return body-to-NED quaternions (T, wxyz, M) turned by the same yaw."""
        c, s = np.cos(self.yaw / 2), np.sin(self.yaw / 2)
        w, x, y, z = (quaternion[:, i] for i in range(4))
        return np.stack([c * w - s * z, c * x - s * y, c * y + s * x, c * z + s * w], 1)


def load(path: Path | None = None) -> RawWalk:
    """Read the recording and verify its sha256.

    Raises UserError if the file is missing or is not the shipped one.
    """
    path = DATA_FILE if path is None else Path(path)
    try:
        content = path.read_bytes()
    except OSError as error:
        raise UserError(f"cannot read the foot walk data {path}: {error.strerror}") from error
    found = hashlib.sha256(content).hexdigest()
    if found != DATA_SHA256:
        raise UserError(
            f"the foot walk data {path} is damaged: sha256 {found[:12]}..., "
            f"expected {DATA_SHA256[:12]}... (reinstall, or re-make it with make_foot_walk.py)"
        )
    with np.load(io.BytesIO(content), allow_pickle=False) as data:
        markers = data["markers_mm"].astype(float) * 1e-3 * _SOURCE_TO_NED[None, None, :, None]
        markers[:, :, :2] -= np.nanmean(markers[0, 0, :2], axis=-1)[None, None, :, None]
        return RawWalk(
            imu_rate=float(data["imu_rate_hz"]),
            marker_rate=float(data["marker_rate_hz"]),
            specific_force=data["specific_force_m_s2"].astype(float),
            rate=np.radians(data["rate_deg_s"].astype(float)),
            markers=markers,
        )


def low_pass(values: FloatArray, cutoff: float, rate: float) -> FloatArray:
    """Zero-phase low-pass along the first axis.

    A second-order Butterworth filter run forward and backward. Its corner is moved up such that
    the two passes together have -3 dB at `cutoff` (Hz); `rate` is the sample rate in Hz.

    Raises ValueError if the corner is not below the Nyquist rate.
    """
    from scipy.signal import butter, sosfiltfilt

    corner = cutoff / (math.sqrt(2.0) - 1.0) ** 0.25
    if not 0.0 < corner < rate / 2:
        raise ValueError(f"cut-off {cutoff} Hz is too high for a rate of {rate} Hz")
    out: FloatArray = sosfiltfilt(butter(2, corner, fs=rate, output="sos"), values, axis=0)
    return out


def smooth_path(
    positions: FloatArray, rate: float, times: FloatArray, cutoff: float = MARKER_CUTOFF
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Low-pass sampled positions and evaluate them with two derivatives at other times.

    A cubic spline through the `low_pass` output is evaluated: far below the Nyquist rate it
    differentiates without bias, and it moves the values to the IMU times.

    Parameters
    ----------
    positions : (K, ...) m
        Sample k is at k / rate. A NaN is bridged linearly before filtering (mask it afterwards).
    rate : float
        Hz.
    times : (T,) s
    cutoff : float
        Hz.

    Returns
    -------
    position, velocity, acceleration : (T, ...) m, m/s, m/s^2
    """
    from scipy.interpolate import CubicSpline

    k = np.arange(positions.shape[0])
    flat = positions.reshape(len(k), -1).copy()
    for column in flat.T:
        bad = np.isnan(column)
        if bad.any():
            column[bad] = np.interp(k[bad], k[~bad], column[~bad])
    spline = CubicSpline(k / rate, low_pass(flat, cutoff, rate))
    shape = (len(times), *positions.shape[1:])
    return (
        spline(times).reshape(shape),
        spline(times, 1).reshape(shape),
        spline(times, 2).reshape(shape),
    )


def rigid_rotation(reference: FloatArray, points: FloatArray) -> FloatArray:
    """Rotation that best maps one centred point set onto another in least squares.

    Kabsch (1976) / Wahba (1965), solved by a singular value decomposition.

    Parameters
    ----------
    reference : (N, xyz) or (T, N, xyz)
    points : (T, N, xyz)

    Returns
    -------
    rotation : (T, xyz, xyz)
        ``points ~ rotation @ reference``.
    """
    cross = np.swapaxes(points, -1, -2) @ np.broadcast_to(reference, points.shape)
    u, _, vt = np.linalg.svd(cross)
    u[..., 2] *= np.sign(np.linalg.det(u @ vt))[..., None]
    out: FloatArray = u @ vt
    return out


def stance(
    specific_force: FloatArray,
    rate: FloatArray,
    sample_rate: float,
    *,
    window: float = STANCE_WINDOW,
    force_sigma: float = STANCE_FORCE_SIGMA,
    rate_sigma: float = STANCE_RATE_SIGMA,
    threshold: float = STANCE_THRESHOLD,
) -> BoolArray:
    """Zero-velocity detector (SHOE) of Skog et al. (2010).

    The generalised likelihood ratio of a sensor at rest with unknown direction of gravity,
    ``mean(|f - g u|^2 / force_sigma^2 + |w|^2 / rate_sigma^2)`` over a window with ``u`` the
    direction of the mean specific force, is compared with a threshold. The window is centred, so
    the flag looks half a window ahead; it is computed once and is the same for all candidates.

    Parameters
    ----------
    specific_force : (T, xyz, M) m/s^2
    rate : (T, xyz, M) rad/s
    sample_rate : float
        Hz.
    window : float
        s, rounded to an odd number of samples.
    force_sigma, rate_sigma : float
        m/s^2, rad/s. Only the ratio and the threshold matter.
    threshold : float
        Stance where the statistic is below it.

    Returns
    -------
    flag : (T, M) bool
        False within half a window of both ends.

    Raises ValueError if the record is shorter than the window.
    """
    half = max(1, round((window * sample_rate - 1) / 2))
    size = 2 * half + 1
    n = specific_force.shape[0]
    if n < size:
        raise ValueError(f"{n} samples are fewer than the window of {size}")

    def mean(values: FloatArray) -> FloatArray:
        total = np.concatenate([np.zeros_like(values[:1]), np.cumsum(values, axis=0)])
        out: FloatArray = (total[size:] - total[:-size]) / size
        return out

    # |f - g u|^2 = |f|^2 - 2 g f.u + g^2, and the mean of f.u is |mean f|.
    length = np.linalg.norm(mean(specific_force), axis=1)
    force_term = mean((specific_force**2).sum(1)) - 2 * GRAVITY * length + GRAVITY**2
    statistic = force_term / force_sigma**2 + mean((rate**2).sum(1)) / rate_sigma**2
    flag = np.zeros((n, *statistic.shape[1:]), dtype=bool)
    flag[half : n - half] = statistic < threshold
    return flag


def align(estimated: FloatArray, true: FloatArray, mask: BoolArray | None = None) -> Alignment:
    """Least-squares yaw and shift of each run, the one rule for all candidates.

    Heading and origin are not observable from an inertial sensor with stance flags. The rotation
    about the vertical and the translation that minimise the sum of squared horizontal distances
    are removed; the vertical shift is the mean difference. Nothing else (no scale, no tilt).

    Parameters
    ----------
    estimated, true : (T, ned, M) m
    mask : (T,) bool, optional
        Samples to use (the scored part); all by default.

    Raises ValueError if the shapes differ or fewer than two finite samples are left in a run.
    """
    if estimated.shape != true.shape or estimated.ndim != 3 or estimated.shape[1] != 3:
        raise ValueError(f"positions must be (T, 3, M), got {estimated.shape} and {true.shape}")
    use: BoolArray = np.asarray(np.isfinite(estimated + true).all(axis=1), dtype=bool)
    if mask is not None:
        use = use & np.asarray(mask, dtype=bool)[:, None]
    count = use.sum(0)
    if (count < 2).any():
        raise ValueError("an alignment needs at least two finite samples in each run")
    weight = use[:, None, :]
    a = np.where(weight, estimated, 0.0)
    b = np.where(weight, true, 0.0)
    a_mean, b_mean = a.sum(0) / count, b.sum(0) / count
    a, b = np.where(weight, a - a_mean, 0.0), np.where(weight, b - b_mean, 0.0)
    yaw = np.arctan2(
        (a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]).sum(0),
        (a[:, 0] * b[:, 0] + a[:, 1] * b[:, 1]).sum(0),
    )
    c, s, zero, one = np.cos(yaw), np.sin(yaw), np.zeros_like(yaw), np.ones_like(yaw)
    rotation = np.stack(
        [np.stack([c, -s, zero]), np.stack([s, c, zero]), np.stack([zero, zero, one])]
    )
    return Alignment(yaw, rotation, b_mean - np.einsum("ijm,jm->im", rotation, a_mean))


@dataclass(frozen=True)
class _Foot:
    """One foot on the IMU times: what the fit and the reference share."""

    times: FloatArray
    rate_hz: float
    force: FloatArray  # (T, sensor)
    rate: FloatArray  # (T, sensor), bias removed
    heel: tuple[FloatArray, FloatArray, FloatArray]  # position, velocity, acceleration (T, ned)
    markers: FloatArray  # (T, marker, ned)
    flat: NDArray[np.intp]  # indices of flat samples
    turned: FloatArray  # (T, 3, 3) integrated rate, first sample = identity

    def triangle_attitude(self, triangle: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the attitude (T, ned, body) of the triangle and the residual (T, marker)."""
        centred = self.markers - self.markers.mean(1, keepdims=True)
        attitude = rigid_rotation(triangle, centred)
        residual = np.einsum("tij,nj->tni", attitude, triangle) - centred
        return attitude, np.linalg.norm(residual, axis=2)

    def reference_attitude(self, triangle_attitude: FloatArray, to_body: FloatArray) -> FloatArray:
        """Return the reference attitude (T, ned, body).

        The integrated rate, turned in the world by the kernel mean of its difference to the
        triangle at flat samples.
        """
        from scipy.interpolate import CubicSpline
        from scipy.spatial.transform import Rotation

        first = self.flat[0]
        start = triangle_attitude[first] @ to_body @ self.turned[first].T
        sensor = start @ self.turned
        body = sensor @ to_body.T
        difference = Rotation.from_matrix(
            triangle_attitude[self.flat] @ np.swapaxes(body[self.flat], 1, 2)
        ).as_rotvec()
        # The mean changes over ATTITUDE_KERNEL: a grid of an eighth of it is enough.
        grid = self.times[:: max(1, round(ATTITUDE_KERNEL / 8 * self.rate_hz))]
        kernel = np.exp(
            -0.5 * ((grid[:, None] - self.times[None, self.flat]) / ATTITUDE_KERNEL) ** 2
        )
        slow = CubicSpline(grid, (kernel @ difference) / kernel.sum(1, keepdims=True))(self.times)
        out: FloatArray = Rotation.from_rotvec(slow).as_matrix() @ body
        return out

    def low_pass(self, values: FloatArray) -> FloatArray:
        return low_pass(values, FIT_CUTOFF, self.rate_hz)

    def lever_matrix(self) -> FloatArray:
        """Return K (T, sensor, sensor): a point at l accelerates K l more than the sensor."""
        spin = _skew(self.rate)
        euler = _skew(np.gradient(self.rate, 1.0 / self.rate_hz, axis=0))
        out: FloatArray = euler + spin @ spin
        return out

    def force_residual(
        self, triangle_attitude: FloatArray, to_body: FloatArray, lever: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return the heel residual (T, ned) and its Jacobian (T, ned, turn + lever).

        ``turn`` is a small rotation of `to_body` in body axes, `lever` is in sensor axes.
        """
        attitude = self.reference_attitude(triangle_attitude, to_body)
        to_world = attitude @ to_body
        force = self.low_pass(np.einsum("tij,tj->ti", to_world, self.force))
        moved = self.low_pass(to_world @ self.lever_matrix())
        target = self.low_pass(self.heel[2] - np.array([0.0, 0.0, GRAVITY]))
        total = force + moved @ lever
        in_body = np.einsum("tji,tj->ti", attitude, total)
        jacobian = np.concatenate([-attitude @ _skew(in_body), moved], axis=2)
        return target - total, jacobian

    def fit(
        self, triangle_attitude: FloatArray, to_body: FloatArray, use: BoolArray
    ) -> tuple[FloatArray, FloatArray]:
        """Gauss-Newton for (to_body, lever arm in sensor axes) over the samples `use`."""
        from scipy.spatial.transform import Rotation

        lever = np.zeros(3)
        for _ in range(30):
            residual, jacobian = self.force_residual(triangle_attitude, to_body, lever)
            step = np.linalg.lstsq(
                jacobian[use].reshape(-1, 6), residual[use].reshape(-1), rcond=None
            )[0]
            to_body = Rotation.from_rotvec(step[:3]).as_matrix() @ to_body
            lever = lever + step[3:]
            if np.abs(step).max() < 1e-7:
                break
        return to_body, lever


def _skew(v: FloatArray) -> FloatArray:
    """Cross-product matrices (T, 3, 3) of vectors (T, 3)."""
    out = np.zeros((*v.shape, 3))
    out[..., 0, 1], out[..., 0, 2], out[..., 1, 2] = -v[..., 2], v[..., 1], -v[..., 0]
    return out - np.swapaxes(out, -1, -2)


def _imu_times(raw: RawWalk) -> FloatArray:
    return np.arange(raw.specific_force.shape[0]) / raw.imu_rate


def _foot(raw: RawWalk, foot: int, rate_bias: FloatArray) -> _Foot:
    """Put one foot on the IMU times up to the last marker sample."""
    from scipy.spatial.transform import Rotation

    times = _imu_times(raw)
    times = times[times <= (raw.markers.shape[0] - 1) / raw.marker_rate]
    n = len(times)
    markers, speed, bend = smooth_path(raw.markers[..., foot], raw.marker_rate, times)
    rate = raw.rate[:n, :, foot] - rate_bias
    steps = Rotation.from_rotvec((rate[1:] + rate[:-1]) / (2 * raw.imu_rate)).as_matrix()
    turned = np.empty((n, 3, 3))
    turned[0] = np.eye(3)
    for k in range(n - 1):
        turned[k + 1] = turned[k] @ steps[k]
    seen = np.interp(
        times,
        np.arange(raw.markers.shape[0]) / raw.marker_rate,
        np.isnan(raw.markers[..., foot]).any((1, 2)).astype(float),
    )
    slow = np.linalg.norm(speed, axis=2).max(1) < FLAT_SPEED
    return _Foot(
        times=times,
        rate_hz=raw.imu_rate,
        force=raw.specific_force[:n, :, foot],
        rate=rate,
        heel=(markers[:, 0], speed[:, 0], bend[:, 0]),
        markers=markers,
        flat=np.flatnonzero(slow & (seen == 0.0)),
        turned=turned,
    )


def _mean_triangle(foot: _Foot) -> FloatArray:
    """Mean triangle (marker, body) of the flat foot, body axes set by the initial rest."""
    centred = foot.markers - foot.markers.mean(1, keepdims=True)
    rest = centred[foot.times < REST_END].mean(0)
    forward = rest[1] - rest[0]
    forward[2] = 0.0
    forward /= np.linalg.norm(forward)
    down = np.array([0.0, 0.0, 1.0])
    triangle: FloatArray = rest @ np.stack([forward, np.cross(down, forward), down], axis=1)
    flat = centred[foot.flat]
    for _ in range(10):
        attitude = rigid_rotation(triangle, flat)
        triangle = np.einsum("tji,tnj->tni", attitude, flat).mean(0)
    return triangle


def _triangle_rate(foot: _Foot, attitude: FloatArray) -> FloatArray:
    """Rate (T, body) of the triangle by central differences of its attitude."""
    from scipy.spatial.transform import Rotation

    rate = np.zeros((len(attitude), 3))
    step = np.swapaxes(attitude[:-2], 1, 2) @ attitude[2:]
    rate[1:-1] = Rotation.from_matrix(step).as_rotvec() * foot.rate_hz / 2
    return rate


def _start_rotation(foot: _Foot, attitude: FloatArray) -> FloatArray:
    """First guess of sensor_to_body: Wahba fit of rates and specific forces, no lever arm."""
    heel = np.einsum("tji,tj->ti", attitude, foot.heel[2] - np.array([0.0, 0.0, GRAVITY]))
    body = [foot.low_pass(_triangle_rate(foot, attitude)), foot.low_pass(heel) / 3.0]
    sensor = [foot.low_pass(foot.rate), foot.low_pass(foot.force) / 3.0]
    out: FloatArray = rigid_rotation(np.concatenate(sensor)[None], np.concatenate(body)[None])[0]
    return out


def _rms(values: FloatArray) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


def _angle(rotations: FloatArray) -> FloatArray:
    from scipy.spatial.transform import Rotation

    out: FloatArray = np.atleast_1d(Rotation.from_matrix(rotations).magnitude())
    return out


def _stance_tilt(force: FloatArray, attitude: FloatArray, flag: BoolArray) -> float:
    """Angle between the mean specific force of a stance and the vertical, rms over samples."""
    world = np.einsum("tij,tj->ti", attitude, force)
    edge = np.flatnonzero(np.diff(np.concatenate([[0], flag.astype(int), [0]]))).reshape(-1, 2)
    mean = np.array([world[a:b].mean(0) for a, b in edge])
    tilt = np.arctan2(np.linalg.norm(mean[:, :2], axis=1), -mean[:, 2])
    return _rms(np.repeat(tilt, np.diff(edge)[:, 0]))


def calibrate(raw: RawWalk, end: float = CALIBRATION_END) -> Calibration:
    """Fit the sensor rotation and lever arm of each foot on the samples before `end` (s).

    The first part holds 1 s of rest and about six strides. Only samples before `end` enter the
    fit (also its filters). Steps, per foot:

    1. The rate bias is the mean of the initial rest.
    2. Markers are low-passed at `MARKER_CUTOFF` and moved to the IMU times; the triangle gives an
       attitude by a rigid fit (Kabsch 1976) to its mean over flat samples.
    3. The reference attitude is the integrated rate, turned by the `ATTITUDE_KERNEL` mean of its
       difference to the triangle attitude at flat samples.
    4. Rotation and lever arm ``l`` minimise the residual of the rigid body relation
       ``a_heel - g = R (f + dw/dt x l + w x (w x l))`` below `FIT_CUTOFF` (Gauss-Newton).
       Gravity fixes the tilt, the swing the heading of the sensor and the lever arm.

    Raises ValueError if `end` is below 3 s or leaves less than `SEGMENT_LENGTH` to check on.
    """
    times = _imu_times(raw)
    if not 3.0 <= end <= times[-1] - SEGMENT_LENGTH:
        raise ValueError(
            f"the calibration must end between 3 s and {times[-1] - SEGMENT_LENGTH:.1f} s"
        )
    n_feet = raw.rate.shape[2]
    bias = raw.rate[times < REST_END].mean(0)
    flags = stance(raw.specific_force, raw.rate, raw.imu_rate)
    last = end + SEGMENT_COUNT * SEGMENT_LENGTH
    rows: dict[str, list[object]] = {}
    for i in range(n_feet):
        part = _foot(raw.until(end), i, bias[:, i])
        triangle = _mean_triangle(part)
        attitude, gap = part.triangle_attitude(triangle)
        everything = np.ones(len(part.times), dtype=bool)
        to_body, lever = part.fit(attitude, _start_rotation(part, attitude), everything)
        whole = _foot(raw, i, bias[:, i])
        whole_attitude, whole_gap = whole.triangle_attitude(triangle)
        scored = (whole.times >= end) & (whole.times < last)
        again, lever_again = whole.fit(whole_attitude, to_body, scored)
        row: dict[str, object] = {
            "sensor_to_body": to_body,
            "lever_arm": to_body @ lever,
            "lever_arm_shift": np.linalg.norm(again @ lever_again - to_body @ lever),
            "rotation_shift": _angle(again @ to_body.T)[0],
            "rate_bias": bias[:, i],
            "triangle": triangle,
        }
        checks = (
            ("first", part, attitude, gap, everything),
            ("scored", whole, whole_attitude, whole_gap, scored),
        )
        for name, data, seen, distance, use in checks:
            reference = data.reference_attitude(seen, to_body)
            flat = np.zeros(len(use), dtype=bool)
            flat[data.flat] = True
            apart = _angle(np.swapaxes(reference, 1, 2) @ seen)
            heel = data.force_residual(seen, to_body, lever)[0]
            spin = data.low_pass(data.rate @ to_body.T - _triangle_rate(data, seen))
            force = data.force @ to_body.T
            still = flags[: len(use), i] & use
            row[f"triangle_{name}"] = _rms(distance[use])
            row[f"force_{name}"] = _rms(heel[use])
            row[f"rate_{name}"] = np.sqrt(np.mean(spin[use] ** 2, axis=0))
            row[f"flat_{name}"] = _rms(apart[use & flat])
            row[f"tilt_{name}"] = _stance_tilt(force, reference, still)
            if name == "scored":
                row["swing_scored"] = _rms(apart[use & ~flat])
        for key, value in row.items():
            rows.setdefault(key, []).append(value)
    stacked = {key: _frozen(np.stack([np.asarray(v) for v in vs], -1)) for key, vs in rows.items()}
    return Calibration(start=0.0, end=end, **stacked)


def _frozen(array: NDArray) -> NDArray:
    """Return a read-only copy: the prepared data are cached and shared."""
    array = np.array(array)
    array.flags.writeable = False
    return array


def _quaternion(rotations: FloatArray) -> FloatArray:
    """Scalar-first quaternions (T, wxyz) of matrices (T, 3, 3), without sign jumps."""
    from scipy.spatial.transform import Rotation

    q = Rotation.from_matrix(rotations).as_quat()[:, [3, 0, 1, 2]]
    sign = np.where((q[1:] * q[:-1]).sum(1) < 0, -1.0, 1.0)
    q[1:] *= np.cumprod(sign)[:, None]
    out: FloatArray = q if q[0, 0] >= 0 else -q
    return out


@lru_cache(maxsize=1)
def prepare() -> FootWalk:
    """Load, calibrate and return everything at the IMU times (cached, read-only).

    The sensor velocity is the heel velocity minus the rotated ``w x l``, low-passed at the same
    `MARKER_CUTOFF`. After the last marker sample the reference is held and `FootWalk.valid` is
    False.

    Raises UserError if the data file is missing or damaged.
    """
    raw = load()
    calibration = calibrate(raw)
    times = _imu_times(raw)
    names = (
        "position",
        "velocity",
        "attitude",
        "marker_attitude",
        "heel_position",
        "heel_velocity",
        "valid",
    )
    columns: dict[str, list[NDArray]] = {name: [] for name in names}
    marker_times = np.arange(raw.markers.shape[0]) / raw.marker_rate
    for i in range(raw.rate.shape[2]):
        foot = _foot(raw, i, calibration.rate_bias[:, i])
        to_body = calibration.sensor_to_body[..., i]
        lever = calibration.lever_arm[:, i]
        seen, _ = foot.triangle_attitude(calibration.triangle[..., i])
        attitude = foot.reference_attitude(seen, to_body)
        swing = np.einsum("tij,tj->ti", attitude, np.cross(foot.rate @ to_body.T, lever))
        missing = np.isnan(raw.markers[..., i]).any((1, 2)).astype(float)
        valid = (times <= marker_times[-1]) & (np.interp(times, marker_times, missing) == 0.0)
        rows = {
            "position": foot.heel[0] - attitude @ lever,
            "velocity": foot.heel[1] - low_pass(swing, MARKER_CUTOFF, raw.imu_rate),
            "attitude": _quaternion(attitude),
            "marker_attitude": _quaternion(seen),
            "heel_position": foot.heel[0],
            "heel_velocity": foot.heel[1],
        }
        for name, values in rows.items():
            tail = np.repeat(values[-1:], len(times) - len(values), axis=0)
            columns[name].append(np.concatenate([values, tail]))
        columns["valid"].append(valid)
    to_body = calibration.sensor_to_body
    reference = {name: _frozen(np.stack(value, -1)) for name, value in columns.items()}
    return FootWalk(
        times=_frozen(times),
        specific_force=_frozen(np.einsum("bsf,tsf->tbf", to_body, raw.specific_force)),
        rate=_frozen(np.einsum("bsf,tsf->tbf", to_body, raw.rate)),
        stance=_frozen(stance(raw.specific_force, raw.rate, raw.imu_rate)),
        lever_arm=calibration.lever_arm,
        score_start=math.ceil(CALIBRATION_END * raw.imu_rate),
        segments=tuple(
            (
                CALIBRATION_END + SEGMENT_LENGTH * i,
                CALIBRATION_END + SEGMENT_LENGTH * (i + 1),
            )
            for i in range(SEGMENT_COUNT)
        ),
        calibration=calibration,
        **reference,
    )
