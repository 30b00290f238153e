"""The recorded foot walk: file, calibration, reference, stance flag and alignment."""

from __future__ import annotations

import dataclasses
import hashlib
import importlib.util
from pathlib import Path

import numpy as np
import pytest

from flyoff.errors import UserError
from flyoff.problems.recorded import foot_walk_data as data


@pytest.fixture(scope="module")
def raw() -> data.RawWalk:
    return data.load()


@pytest.fixture(scope="module")
def walk() -> data.FootWalk:
    return data.prepare()


def matrices(quaternion: np.ndarray) -> np.ndarray:
    """Body-to-NED matrices (T, 3, 3) of scalar-first quaternions, written out independently."""
    w, x, y, z = quaternion.T
    return np.stack(
        [
            np.stack([1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)], -1),
            np.stack([2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)], -1),
            np.stack([2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)], -1),
        ],
        -2,
    )


def test_file_is_the_documented_one_and_small():
    content = data.DATA_FILE.read_bytes()
    assert hashlib.sha256(content).hexdigest() == data.DATA_SHA256
    assert len(content) < 700_000
    provenance = (data.DATA_FILE.parent / "PROVENANCE.md").read_text(encoding="utf-8")
    assert data.DATA_SHA256 in provenance
    licence = (data.DATA_FILE.parent / "LICENSE-gaitmap.txt").read_text(encoding="utf-8")
    assert "Copyright (c) 2020 MaD-Lab Erlangen" in licence


def test_writing_the_arrays_again_gives_the_same_bytes(tmp_path):
    script = data.DATA_FILE.parent / "make_foot_walk.py"
    spec = importlib.util.spec_from_file_location("make_foot_walk", script)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    with np.load(data.DATA_FILE) as stored:
        arrays = {name: stored[name] for name in stored.files}
    assert module.write_npz(tmp_path / "again.npz", arrays) == data.DATA_SHA256


def test_damaged_file_is_named_in_one_line(tmp_path):
    content = bytearray(data.DATA_FILE.read_bytes())
    content[1000] ^= 1
    damaged = tmp_path / "foot_walk.npz"
    damaged.write_bytes(content)
    with pytest.raises(UserError) as caught:
        data.load(damaged)
    message = str(caught.value)
    assert "damaged" in message
    assert str(damaged) in message
    assert "\n" not in message


def test_missing_file_is_a_user_error(tmp_path):
    with pytest.raises(UserError, match="cannot read"):
        data.load(tmp_path / "nothing.npz")


def test_raw_values(raw):
    assert raw.specific_force.shape == raw.rate.shape == (7928, 3, 2)
    assert raw.markers.shape == (3870, 3, 3, 2)
    assert np.isfinite(raw.specific_force).all()
    # First row of the source tables, left foot.
    np.testing.assert_allclose(
        raw.specific_force[0, :, 0], [9.408650478, 0.880810707, 2.762208065], rtol=1e-6
    )
    np.testing.assert_allclose(
        np.degrees(raw.rate[0, :, 0]), [-0.062261054, -0.112401706, -0.032157165], rtol=1e-6
    )
    toe_from_heel = raw.markers[0, 1, :, 0] - raw.markers[0, 0, :, 0]
    source = (np.array([33006.83984375, 10512.23828125, 55.70233917236328])) - np.array(
        [33250.77734375, 10563.830078125, 45.80315017700195]
    )
    np.testing.assert_allclose(toe_from_heel, source * [-1e-3, 1e-3, -1e-3], atol=1e-9)
    # z is down: the heel marker is above the floor.
    assert (raw.markers[:, 0, 2] < 0).all()


def test_prepared_shapes_and_bounds(walk):
    n = 7928
    for name in ("specific_force", "rate", "position", "velocity"):
        assert getattr(walk, name).shape == (n, 3, 2)
    for name in ("attitude", "marker_attitude"):
        quaternion = getattr(walk, name)
        assert quaternion.shape == (n, 4, 2)
        np.testing.assert_allclose((quaternion**2).sum(1), 1.0, atol=1e-12)
        assert ((quaternion[1:] * quaternion[:-1]).sum(1) > 0).all()
    assert walk.heel_position.shape == walk.heel_velocity.shape == (n, 3, 2)
    assert walk.stance.shape == walk.valid.shape == (n, 2)
    assert walk.times[walk.score_start] >= data.CALIBRATION_END > walk.times[walk.score_start - 1]
    scored = np.zeros(n, dtype=int)
    for i in range(len(walk.segments)):
        scored += walk.segment_mask(i)
    assert scored[: walk.score_start].sum() == 0
    assert scored.max() == 1
    assert len(walk.segments) < 20
    assert len({round(b - a, 9) for a, b in walk.segments}) == 1
    assert walk.valid[scored == 1].all()
    # The marker recording ends before the inertial one.
    assert not walk.valid[-1].any()


def test_prepared_is_cached_and_read_only(walk):
    assert data.prepare() is walk
    with pytest.raises(ValueError, match="read-only"):
        walk.position[0] = 0.0


def test_gravity_is_vertical_at_rest(walk):
    for start, end in ((0.0, 0.8), (36.8, 38.2)):
        use = (walk.times >= start) & (walk.times < end)
        for foot in range(2):
            turned = matrices(walk.attitude[use, :, foot])
            force = np.einsum("tij,tj->i", turned, walk.specific_force[use, :, foot]) / use.sum()
            assert force[2] == pytest.approx(-9.81, abs=0.06)
            assert np.hypot(force[0], force[1]) < 9.81 * np.radians(1.2)


def test_body_is_forward_right_down_at_rest(walk, raw):
    for foot in range(2):
        turned = matrices(walk.attitude[:100, :, foot])
        assert (turned[:, 2, 2] > np.cos(np.radians(1.5))).all()
        forward = raw.markers[0, 1, :2, foot] - raw.markers[0, 0, :2, foot]
        heading = np.arctan2(forward[1], forward[0])
        body = np.arctan2(turned[0, 1, 0], turned[0, 0, 0])
        assert abs(body - heading) < np.radians(3.0)


def test_lever_arm_is_behind_and_inside_of_the_sensor(walk):
    length = np.linalg.norm(walk.lever_arm, axis=0)
    assert ((length > 0.05) & (length < 0.13)).all()
    assert (walk.lever_arm[0] < -0.04).all()
    # The sensors sit on the outer side: the heel is to the right of the left one.
    assert walk.lever_arm[1, 0] > 0.03
    assert walk.lever_arm[1, 1] < -0.03


def test_calibration_residuals(walk):
    found = walk.calibration
    assert (found.force_first < 1.3).all()
    assert (found.force_scored < 1.6).all()
    assert (found.triangle_scored < 3e-3).all()
    assert (found.lever_arm_shift < 5e-3).all()
    assert (found.rotation_shift < np.radians(1.2)).all()
    assert (found.tilt_scored < np.radians(1.5)).all()
    assert (found.flat_scored < np.radians(1.8)).all()
    # The pitch rate agrees; the roll of the triangle does not (documented).
    assert (found.rate_scored[1] < 0.4).all()
    assert (found.rate_scored[0] > 2 * found.rate_scored[1]).all()
    for rotation in np.moveaxis(found.sensor_to_body, -1, 0):
        np.testing.assert_allclose(rotation @ rotation.T, np.eye(3), atol=1e-12)
        assert np.linalg.det(rotation) == pytest.approx(1.0)


def test_calibration_does_not_look_at_the_scored_part(raw, walk):
    rate, force = raw.rate.copy(), raw.specific_force.copy()
    markers = raw.markers.copy()
    after = walk.score_start
    rate[after:] *= 0.97
    force[after:] *= 1.02
    markers[int(data.CALIBRATION_END * raw.marker_rate) :] += 0.5
    changed = data.calibrate(
        dataclasses.replace(raw, rate=rate, specific_force=force, markers=markers)
    )
    np.testing.assert_array_equal(changed.sensor_to_body, walk.calibration.sensor_to_body)
    np.testing.assert_array_equal(changed.lever_arm, walk.calibration.lever_arm)
    np.testing.assert_array_equal(changed.force_first, walk.calibration.force_first)
    assert (changed.force_scored != walk.calibration.force_scored).all()


@pytest.mark.parametrize("end", [2.0, 38.0])
def test_calibration_refuses_a_useless_end(raw, end):
    with pytest.raises(ValueError, match="calibration must end"):
        data.calibrate(raw, end)


def test_calibration_finds_a_known_rotation_and_lever_arm():
    """A synthetic rigid foot: the fit returns what the data were made with."""
    from scipy.spatial.transform import Rotation

    imu_rate, marker_rate, duration = 204.8, 100.0, 20.0
    to_body = Rotation.from_rotvec([0.3, -1.2, 0.4])
    lever_body = np.array([-0.07, 0.05, 0.01])
    triangle = np.array([[-0.15, 0.01, 0.0], [0.1, 0.03, 0.0], [0.05, 0.09, 0.01]])

    def pose(times):
        # Rest with flat foot for a quarter of each 1 s cycle after the first second.
        phase = np.clip((times - 1.0) % 1.0 - 0.25, 0, None) / 0.75 * (times >= 1.0)
        swing = np.sin(np.pi * phase) ** 4
        # Two axes: about one fixed axis the lever arm along it would be unobservable.
        twist = swing * np.cos(2 * np.pi * phase)
        turn = Rotation.from_rotvec(np.stack([0.6 * twist, 0.8 * swing, 0.3 * swing], 1))
        heel = np.stack([0.3 * swing * phase, 0.1 * swing, -0.15 * swing], 1)
        return turn, heel

    times = np.arange(int(duration * imu_rate)) / imu_rate
    h = 1e-4
    turn = pose(times)[0]
    sensor = [p - t.apply(lever_body) for t, p in (pose(times + k * h) for k in (-1, 0, 1))]
    acceleration = (sensor[0] - 2 * sensor[1] + sensor[2]) / h**2
    force = to_body.inv().apply(turn.inv().apply(acceleration - [0, 0, data.GRAVITY]))
    spin = (pose(times - h)[0].inv() * pose(times + h)[0]).as_rotvec() / (2 * h)
    rate = to_body.inv().apply(spin)
    marker_turn, marker_heel = pose(np.arange(int(duration * marker_rate)) / marker_rate)
    points = np.stack([marker_heel + marker_turn.apply(m - triangle[0]) for m in triangle], 1)
    raw = data.RawWalk(
        imu_rate, marker_rate, force[:, :, None], rate[:, :, None], points[..., None]
    )
    found = data.calibrate(raw)
    # The triangle defines the body axes, hence compare the lever arm in sensor axes.
    sensor_lever = found.sensor_to_body[..., 0].T @ found.lever_arm[:, 0]
    np.testing.assert_allclose(sensor_lever, to_body.inv().apply(lever_body), atol=1.5e-3)
    heading = Rotation.from_matrix(found.sensor_to_body[..., 0]) * to_body.inv()
    forward = np.arctan2(*(triangle[1] - triangle[0])[1::-1])
    np.testing.assert_allclose(heading.as_rotvec(), [0, 0, -forward], atol=5e-3)
    assert found.force_scored[0] < 0.1


def test_reference_is_a_rigid_body(walk):
    inner = slice(40, 7840)
    for foot in range(2):
        turned = matrices(walk.attitude[..., foot])
        np.testing.assert_allclose(
            walk.position[..., foot] + turned @ walk.lever_arm[:, foot],
            walk.heel_position[..., foot],
            atol=1e-12,
        )
        for where, speed, limit in (
            (walk.position, walk.velocity, 0.03),
            (walk.heel_position, walk.heel_velocity, 0.01),
        ):
            gap = np.gradient(where[..., foot], walk.times, axis=0) - speed[..., foot]
            assert np.sqrt((gap[inner] ** 2).sum(1).mean()) < limit
        # Rotating with the recorded rate over a swing reproduces the reference attitude.
        step = np.swapaxes(turned[:-1], 1, 2) @ turned[1:]
        spin = np.stack([step[:, 2, 1], step[:, 0, 2], step[:, 1, 0]], 1) * 204.8
        mean = (walk.rate[1:, :, foot] + walk.rate[:-1, :, foot]) / 2
        assert np.abs(np.mean((spin - mean)[inner], axis=0)).max() < 0.006
        assert np.std((spin - mean)[inner], axis=0).max() < 0.05


def test_stance_fires_only_when_the_foot_is_slow(walk):
    speed = np.linalg.norm(walk.velocity, axis=1)
    first = walk.times < data.CALIBRATION_END
    scored = (walk.times >= data.CALIBRATION_END) & (walk.times < 38.0)
    for foot in range(2):
        flag = walk.stance[:, foot]
        assert speed[flag & first, foot].max() < 0.15
        assert np.sqrt(np.mean(speed[flag & scored, foot] ** 2)) < 0.08
        assert speed[flag & scored, foot].max() < 0.6
        assert 0.25 < flag[scored].mean() < 0.4
        # One stance per stride, and no gap longer than the two-step turn.
        start = np.flatnonzero(np.diff(flag.astype(int)) == 1)
        start = start[(walk.times[start] > 8.0) & (walk.times[start] < 33.0)]
        assert 20 <= len(start) <= 26
        assert np.diff(walk.times[start]).max() < 1.5


def test_stance_on_synthetic_signals():
    rng = np.random.default_rng(1)
    n = 400
    force = np.zeros((n, 3, 1))
    force[:, :, 0] = [3.0, 0.0, -np.sqrt(data.GRAVITY**2 - 9.0)]
    force += 0.05 * rng.standard_normal(force.shape)
    rate = 0.01 * rng.standard_normal((n, 3, 1))
    rate[200:, 1] += 2.0
    flag = data.stance(force, rate, 200.0)
    half = 10
    assert not flag[:half].any()
    assert flag[half : 200 - half].all()
    assert not flag[200 + half :].any()
    force[:, 2] -= 6.0
    assert not data.stance(force, rate, 200.0).any()
    with pytest.raises(ValueError, match="fewer than the window"):
        data.stance(force[:5], rate[:5], 200.0)


def test_stance_statistic_is_the_published_one():
    """Windowed definition evaluated literally at one sample."""
    rng = np.random.default_rng(2)
    force = np.array([0.5, 0.2, -9.8])[None, :, None] + 0.3 * rng.standard_normal((21, 3, 1))
    rate = 0.1 * rng.standard_normal((21, 3, 1))
    mean = force[..., 0].mean(0)
    up = data.GRAVITY * mean / np.linalg.norm(mean)
    value = np.mean(
        ((force[..., 0] - up) ** 2).sum(1) / 0.2**2 + (rate[..., 0] ** 2).sum(1) / 0.03**2
    )
    settings = {"window": 0.105, "force_sigma": 0.2, "rate_sigma": 0.03}
    assert data.stance(force, rate, 200.0, threshold=value * 1.0001, **settings)[10, 0]
    assert not data.stance(force, rate, 200.0, threshold=value * 0.9999, **settings)[10, 0]


def test_align_removes_a_known_yaw_and_origin_exactly(walk):
    true = walk.position
    yaw = np.array([0.7, -2.9])
    c, s = np.cos(yaw), np.sin(yaw)
    moved = np.stack([c * true[:, 0] - s * true[:, 1], s * true[:, 0] + c * true[:, 1], true[:, 2]])
    moved = np.moveaxis(moved, 0, 1) + np.array([[4.0, -1.0], [2.0, 3.0], [0.5, -0.25]])
    mask = walk.times >= data.CALIBRATION_END
    found = data.align(moved, true, mask)
    np.testing.assert_allclose(found.yaw, -yaw, atol=1e-12)
    np.testing.assert_allclose(found.positions(moved), true, atol=1e-10)
    speed = walk.velocity
    turned = np.stack(
        [c * speed[:, 0] - s * speed[:, 1], s * speed[:, 0] + c * speed[:, 1], speed[:, 2]]
    )
    np.testing.assert_allclose(found.vectors(np.moveaxis(turned, 0, 1)), speed, atol=1e-12)
    attitude = matrices(found.attitudes(walk.attitude)[:, :, 0])
    np.testing.assert_allclose(
        attitude, found.rotation[..., 0] @ matrices(walk.attitude[..., 0]), atol=1e-12
    )


def test_align_ignores_unmasked_and_missing_samples():
    rng = np.random.default_rng(3)
    true = rng.standard_normal((50, 3, 1))
    estimated = true + 1.0
    estimated[40:] += 100.0
    mask = np.arange(50) < 40
    estimated[5] = np.nan
    found = data.align(estimated, true, mask)
    np.testing.assert_allclose(found.yaw, 0.0, atol=1e-12)
    np.testing.assert_allclose(found.shift, -1.0, atol=1e-12)


def test_align_is_the_least_squares_yaw():
    rng = np.random.default_rng(4)
    true = rng.standard_normal((60, 3, 1))
    estimated = true + 0.3 * rng.standard_normal(true.shape)
    found = data.align(estimated, true)

    def cost(alignment):
        return ((alignment.positions(estimated) - true)[:, :2] ** 2).sum()

    for step in (-1e-3, 1e-3):
        c, s = np.cos(found.yaw + step), np.sin(found.yaw + step)
        zero, one = np.zeros(1), np.ones(1)
        rotation = np.array([[c, -s, zero], [s, c, zero], [zero, zero, one]])
        shift = true.mean(0) - np.einsum("ijm,jm->im", rotation, estimated.mean(0))
        assert cost(data.Alignment(found.yaw + step, rotation, shift)) > cost(found)


def test_align_refuses_bad_input():
    with pytest.raises(ValueError, match="must be"):
        data.align(np.zeros((5, 2, 1)), np.zeros((5, 2, 1)))
    with pytest.raises(ValueError, match="two finite samples"):
        data.align(np.zeros((5, 3, 1)), np.zeros((5, 3, 1)), np.zeros(5, dtype=bool))


def test_derivatives_of_an_analytic_path():
    rate, frequency = 100.0, 3.0
    omega = 2 * np.pi * frequency
    k = np.arange(1000) / rate
    path = np.stack([0.3 * np.sin(omega * k), 2.0 + 1.5 * k], 1)
    times = np.arange(1600) / 204.8 + 1.0
    position, velocity, acceleration = data.smooth_path(path, rate, times)
    wave = 0.3 * np.sin(omega * times)
    # Gain of the two passes at 3 Hz: 1 / (1 + (tan ratio)^4), -3 dB at the cut-off.
    assert np.abs(position[:, 0] - wave).max() < 1e-3 * 0.3
    assert np.abs(velocity[:, 0] - 0.3 * omega * np.cos(omega * times)).max() < 2e-3 * 0.3 * omega
    assert np.abs(acceleration[:, 0] + omega**2 * wave).max() < 5e-3 * 0.3 * omega**2
    np.testing.assert_allclose(velocity[:, 1], 1.5, atol=1e-3)


def test_low_pass_has_its_cutoff_and_no_delay():
    rate, cutoff = 204.8, 10.0
    k = np.arange(8192) / rate
    tone = np.sin(2 * np.pi * cutoff * k)
    out = data.low_pass(tone, cutoff, rate)[2000:-2000]
    tone = tone[2000:-2000]
    # The pre-warped corner makes -3 dB exact only in the limit of a high sample rate.
    assert (out @ tone) / (tone @ tone) == pytest.approx(np.sqrt(0.5), abs=0.01)
    quadrature = np.cos(2 * np.pi * cutoff * k)[2000:-2000]
    assert abs(out @ quadrature) / (tone @ tone) < 1e-3
    with pytest.raises(ValueError, match="too high"):
        data.low_pass(tone, 100.0, rate)


def test_missing_markers_are_bridged_and_masked(raw, monkeypatch):
    markers = raw.markers.copy()
    markers[1200:1205, 1, :, 0] = np.nan
    monkeypatch.setattr(data, "load", lambda: dataclasses.replace(raw, markers=markers))
    found = data.prepare.__wrapped__()
    gap = (found.times > 11.995) & (found.times < 12.045)
    assert not found.valid[gap, 0].any()
    assert found.valid[gap, 1].all()
    assert found.valid[:2000, 0].all()
    assert np.isfinite(found.position).all()


def test_rigid_rotation_recovers_a_rotation():
    from scipy.spatial.transform import Rotation

    rng = np.random.default_rng(5)
    reference = rng.standard_normal((4, 3))
    turns = Rotation.random(6, random_state=6).as_matrix()
    points = np.einsum("tij,nj->tni", turns, reference)
    np.testing.assert_allclose(data.rigid_rotation(reference, points), turns, atol=1e-12)


def test_module_is_independent_of_the_source_package():
    text = Path(data.__file__).read_text(encoding="utf-8")
    assert "import gaitmap" not in text
    assert "import casadi" not in text
