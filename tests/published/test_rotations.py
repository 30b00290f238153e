"""Quaternions, tangent means, coning and the coordinated turn against published or other answers.

F. L. Markley, Y. Cheng, J. Crassidis, Y. Oshman, "Averaging quaternions", JGCD 30(4):1193-1197,
2007 (two equal weights; from memory); E. Lefferts, F. L. Markley, M. Shuster, JGCD 5(5):417-429,
1982 (kinematics; from memory). Other references: SciPy's Rotation. Tolerance 1e-8 unless stated.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation as Reference

from flyoff.numerics import algebra
from flyoff.numerics.spaces import Rotation, StateSpace, right_jacobian
from flyoff.problems.body_attitude import BodyAttitude
from flyoff.problems.coordinated_turn import CoordinatedTurn

TURN = StateSpace(Rotation("attitude"))
IDENTITY = np.array([1.0, 0.0, 0.0, 0.0])
RATE = np.array([0.1, -0.2, 0.3])  # rad/s
AFTER_TWO_SECONDS = np.array([0.93081287, 0.09768295, -0.19536589, 0.29304884])


def to_reference(q: np.ndarray) -> Reference:
    """From scalar-first quaternions (4, K)."""
    return Reference.from_quat(np.asarray(q).T, scalar_first=True)


def vectors() -> np.ndarray:
    """Rotation vectors (3, K): zero, tiny, both sides of the series branch, up to nearly pi."""
    rng = np.random.default_rng(4)
    axes = rng.standard_normal((3, 40))
    axes /= np.linalg.norm(axes, axis=0)
    angles = [
        0,
        1e-12,
        1e-8,
        1e-4,
        0.05,
        0.0999,
        0.1001,
        0.1999,
        0.2001,
        0.5,
        1,
        2,
        3,
        3.14,
        3.1415,
    ]
    sizes = np.resize(np.array(angles, dtype=float), 40)
    return axes * sizes


# -- quaternions -----------------------------------------------------------------------------------


def test_quaternion_of_a_constant_rate():
    got = algebra.quat_exp(tuple(2.0 * RATE))
    np.testing.assert_allclose([float(c) for c in got], AFTER_TWO_SECONDS, rtol=0, atol=1e-8)


@pytest.mark.parametrize("steps", [1, 100])
def test_constant_rate_through_the_traced_attitude_model(steps):
    model = BodyAttitude().filter_model()
    x = np.zeros((7, 2))
    x[0] = 1
    u = np.repeat(RATE[:, None], 2, axis=1)
    for _ in range(steps):
        x = model.step(x, u, 2.0 / steps)
    want = np.repeat(AFTER_TWO_SECONDS[:, None], 2, axis=1)
    np.testing.assert_allclose(x[:4], want, rtol=0, atol=1e-8)
    np.testing.assert_array_equal(x[4:], 0)


def test_exponential_against_scipy():
    v = vectors()
    want = Reference.from_rotvec(v.T).as_quat(scalar_first=True).T
    np.testing.assert_allclose(algebra.quat_exp(tuple(v)), want, rtol=0, atol=1e-15)


def test_logarithm_against_scipy():
    v = vectors()
    q = Reference.from_rotvec(v.T).as_quat(scalar_first=True).T
    np.testing.assert_allclose(algebra.quat_log(tuple(q)), v, rtol=1e-12, atol=1e-15)
    # -q is the same rotation
    np.testing.assert_allclose(algebra.quat_log(tuple(-q)), v, rtol=1e-12, atol=1e-15)


def test_products_and_rotations_against_scipy():
    rng = np.random.default_rng(5)
    p, q = (Reference.random(30, rng=rng) for _ in range(2))
    a, b = (tuple(r.as_quat(scalar_first=True).T) for r in (p, q))
    v = rng.standard_normal((3, 30))
    np.testing.assert_allclose(algebra.rotate(a, tuple(v)), p.apply(v.T).T, atol=1e-14)
    np.testing.assert_allclose(algebra.unrotate(a, tuple(v)), p.inv().apply(v.T).T, atol=1e-14)
    product = to_reference(np.array(algebra.quat_mul(a, b)))
    np.testing.assert_allclose(product.as_matrix(), (p * q).as_matrix(), atol=1e-14)
    inverse = to_reference(np.array(algebra.quat_conj(a)))
    np.testing.assert_allclose(inverse.as_matrix(), p.inv().as_matrix(), atol=1e-14)


def test_euler_angles_against_scipy():
    # aerospace sequence: yaw, then pitch, then roll about the moved axes
    rng = np.random.default_rng(6)
    roll, pitch, yaw = rng.uniform(-1.5, 1.5, (3, 30))
    want = Reference.from_euler("ZYX", np.stack([yaw, pitch, roll], axis=1))
    got = to_reference(np.array(algebra.quat_from_euler(roll, pitch, yaw)))
    np.testing.assert_allclose(got.as_matrix(), want.as_matrix(), atol=1e-14)


# -- means -----------------------------------------------------------------------------------------


def two_points(angle: float, sign: float = 1.0) -> np.ndarray:
    """Identity and a turn by `angle` about z: (4, 2, 1)."""
    q = sign * np.array([math.cos(angle / 2), 0.0, 0.0, math.sin(angle / 2)])
    return np.stack([IDENTITY, q], axis=1)[:, :, None]


def heading(q: np.ndarray) -> float:
    return math.degrees(2 * math.atan2(q[3, 0], q[0, 0]))


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("about", [0, 1])
def test_mean_of_two_equal_weights(sign, about):
    # Markley et al. 2007: 1.2 rad apart, weights 1:1; sign flips change nothing
    points = two_points(1.2, sign)
    mean, deviations = TURN.mean(points, np.array([0.5, 0.5]), points[:, about])
    assert heading(mean) % 360 == pytest.approx(34.377468, abs=5e-7)
    assert abs(heading(mean) % 360 - math.degrees(0.6)) < 1e-8
    np.testing.assert_allclose(deviations[:, :, 0], [[0, 0], [0, 0], [-0.6, 0.6]], atol=1e-12)


def test_mean_of_unequal_weights_is_the_weighted_angle():
    # the tangent mean, derived: 3/4 of 1.2 rad; the eigenvector mean would be 53.26 deg
    points = two_points(1.2)
    mean, _ = TURN.mean(points, np.array([0.25, 0.75]), points[:, 0])
    assert heading(mean) == pytest.approx(math.degrees(0.9), abs=1e-8)


@pytest.mark.parametrize(("away", "passes"), [(0.0, 1), (0.1, 3), (0.35, 3)])
def test_mean_is_that_of_scipy_for_a_symmetric_set(away, passes):
    # a set symmetric about q has q as its mean by any rule; a reference off the centre wants more
    # than one pass
    q = Reference.from_rotvec([0.4, -1.1, 0.8])
    delta = 0.2 * np.concatenate([np.eye(3), -np.eye(3)])
    members = q * Reference.from_rotvec(delta)
    points = members.as_quat(scalar_first=True).T[:, :, None]
    about = (q * Reference.from_rotvec([0.0, away, 0.0])).as_quat(scalar_first=True)[:, None]
    mean, _ = TURN.mean(points, np.full(6, 1 / 6), about, passes=passes)
    assert (to_reference(mean) * members.mean().inv()).magnitude()[0] < 1e-8
    assert (to_reference(mean) * q.inv()).magnitude()[0] < 1e-8


# -- the right Jacobian ----------------------------------------------------------------------------


def test_right_jacobian_against_central_differences():
    # d Log(Exp(-v) Exp(v + e))/d e at e = 0; tolerance 1e-9
    v = vectors()
    got = right_jacobian(v)
    h = 1e-6
    for k in range(v.shape[1]):
        back = Reference.from_rotvec(v[:, k]).inv()
        for j, step in enumerate(h * np.eye(3)):
            ahead = (back * Reference.from_rotvec(v[:, k] + step)).as_rotvec()
            behind = (back * Reference.from_rotvec(v[:, k] - step)).as_rotvec()
            np.testing.assert_allclose(got[:, j, k], (ahead - behind) / (2 * h), rtol=0, atol=1e-9)


def test_right_jacobian_closed_form_at_half_a_radian():
    # I - (1 - cos t)/t^2 [v] + (t - sin t)/t^3 [v]^2: derived
    v = np.array([0.3, -0.2, 0.5])
    t = np.linalg.norm(v)
    skew = np.array([[0, -v[2], v[1]], [v[2], 0, -v[0]], [-v[1], v[0], 0]])
    want = np.eye(3) - (1 - np.cos(t)) / t**2 * skew + (t - np.sin(t)) / t**3 * skew @ skew
    np.testing.assert_allclose(right_jacobian(v[:, None])[..., 0], want, atol=1e-14)


# -- motion ----------------------------------------------------------------------------------------


def test_coordinated_turn_through_the_traced_model():
    # 50 m/s, 0.1 rad/s, 2 s: on a circle of 500 m, closed form
    model = CoordinatedTurn().filter_model()
    x = np.repeat(np.array([0.0, 0.0, 50.0, 0.0, 0.1])[:, None], 2, axis=1)
    got = model.step(x, np.zeros((0, 2)), 2.0)
    want = [99.33466540, 9.96671108, 49.00332889, 9.93346654, 0.1]
    np.testing.assert_allclose(got, np.array(want)[:, None] + np.zeros(2), rtol=0, atol=1e-8)


@pytest.mark.parametrize("rate", [0.0, 1e-12, 1e-6, -1e-3, 0.05, -0.052359877])
def test_coordinated_turn_at_small_rates(rate):
    # straight flight is the limit, without loss of digits: series to fourth order, derived
    model = CoordinatedTurn().filter_model()
    x = np.repeat(np.array([10.0, -20.0, 50.0, 30.0, rate])[:, None], 2, axis=1)
    got = model.step(x, np.zeros((0, 2)), 1.0)[:, 0]
    w = rate
    s = 1 - w**2 / 6 + w**4 / 120
    c = w / 2 - w**3 / 24 + w**5 / 720
    turn = np.array([[1 - w * c, -w * s], [w * s, 1 - w * c]])
    np.testing.assert_allclose(got[0], 10 + s * 50 - c * 30, rtol=1e-10)
    np.testing.assert_allclose(got[1], -20 + c * 50 + s * 30, rtol=1e-10)
    np.testing.assert_allclose(got[2:4], turn @ [50, 30], rtol=1e-10)


@pytest.fixture(scope="module")
def coning():
    """Attitudes (4, K) every 0.1 ms of 1 s of coning: half angle 2 deg at 3 Hz."""
    half, w = math.radians(2), 2 * math.pi * 3
    t = np.arange(10001) * 1e-4
    return np.array(
        algebra.quat_exp((half * np.cos(w * t), half * np.sin(w * t), np.zeros_like(t)))
    )


def test_coning_increments(coning):
    # classical non-commutativity drift about z: -W (1 - cos th) t, closed form
    before, after = tuple(coning[:, :-1]), tuple(coning[:, 1:])
    increments = algebra.quat_log(algebra.quat_mul(algebra.quat_conj(before), after))
    total = increments[2].sum()
    assert total == pytest.approx(-0.01148264, abs=1e-8)
    closed = -2 * math.pi * 3 * (1 - math.cos(math.radians(2)))
    assert total == pytest.approx(closed, abs=1e-8)


def test_coning_has_no_net_rotation(coning):
    # the increments, put on one after the other by the manifold, lead back to the start
    q = coning[:, :1]
    for k in range(1, coning.shape[1]):
        q = TURN.retract(q, TURN.local(coning[:, k - 1 : k], coning[:, k : k + 1]))
    assert np.abs(TURN.local(coning[:, :1], q)).max() < 1e-10
    assert abs(np.linalg.norm(q) - 1) < 1e-14
