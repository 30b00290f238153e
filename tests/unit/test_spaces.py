"""Spaces of named blocks: layout, packing, retraction, means, covariance reset."""

from __future__ import annotations

import math
import pickle

import numpy as np
import pytest
from scipy.spatial.transform import Rotation as Reference

from flyoff.estimators.point_rules.unscented import Scaled
from flyoff.numerics.spaces import Angle, Rotation, StateSpace, Vector, right_jacobian

MIXED = StateSpace(
    Vector("position", 2, "m", 100.0),
    Rotation("attitude"),
    Angle("heading"),
    Vector("bias", 1, "rad/s"),
)
FLAT = StateSpace(Vector("position", 2, "m"), Vector("speed", 1, "m/s"))
BEARING = StateSpace(Angle("bearing"))
DTYPES = (np.float64, np.float32)


def element(runs: int, seed: int = 0) -> np.ndarray:
    """Points (8, runs) of MIXED."""
    rng = np.random.default_rng(seed)
    x = rng.standard_normal((8, runs))
    x[2:6] /= np.linalg.norm(x[2:6], axis=0)
    x[6] = rng.uniform(-math.pi, math.pi, runs)
    return x


# -- layout ----------------------------------------------------------------------------------------


def test_layout():
    assert (MIXED.n, MIXED.d) == (8, 7)
    assert MIXED.ambient == {
        "position": slice(0, 2),
        "attitude": slice(2, 6),
        "heading": slice(6, 7),
        "bias": slice(7, 8),
    }
    assert MIXED.tangent == {
        "position": slice(0, 2),
        "attitude": slice(2, 5),
        "heading": slice(5, 6),
        "bias": slice(6, 7),
    }
    assert not MIXED.flat
    assert MIXED.has_rotation
    assert FLAT.flat
    assert not FLAT.has_rotation
    assert not BEARING.flat


def test_components_and_indices():
    assert MIXED.components() == [
        ("position[0]", "m"),
        ("position[1]", "m"),
        ("attitude[0]", "rad"),
        ("attitude[1]", "rad"),
        ("attitude[2]", "rad"),
        ("heading", "rad"),
        ("bias", "rad/s"),
    ]
    assert MIXED.indices(["bias", "attitude"]) == [6, 2, 3, 4]
    with pytest.raises(KeyError, match="wind"):
        MIXED.indices(["wind"])


def test_equality_pickle_and_repr():
    again = pickle.loads(pickle.dumps(MIXED))
    assert again == MIXED
    assert hash(again) == hash(MIXED)
    assert MIXED != FLAT
    assert StateSpace(Vector("a", 1)) != StateSpace(Angle("a"))
    assert repr(FLAT) == "StateSpace(position, speed)"


def test_a_name_used_twice_is_refused():
    with pytest.raises(ValueError, match="block `a` is named twice"):
        StateSpace(Vector("a", 1), Angle("a"))


# -- packing ---------------------------------------------------------------------------------------


def test_unpack_gives_tuples_and_bare_scalars():
    blocks = MIXED.unpack(list("abcdefgh"))
    assert blocks.position == ("a", "b")
    assert blocks.attitude == ("c", "d", "e", "f")
    assert blocks.heading == "g"
    assert blocks.bias == "h"


def test_pack_is_the_inverse_of_unpack():
    blocks = MIXED.unpack(list("abcdefgh"))
    flat = MIXED.pack((blocks.position, blocks.attitude, blocks.heading, blocks.bias), "f")
    assert flat == list("abcdefgh")
    # a one-component block may come as a tuple too
    assert FLAT.pack(((1, 2), (3,)), "f") == [1, 2, 3]


@pytest.mark.parametrize("value", [5, (5,), ((5,),)])
def test_pack_of_a_single_scalar_block(value):
    assert BEARING.pack(value, "f") == [5]


@pytest.mark.parametrize("value", [(1, 2, 3), ((1, 2, 3),)])
def test_pack_of_a_single_vector_block(value):
    assert StateSpace(Vector("v", 3)).pack(value, "f") == [1, 2, 3]


@pytest.mark.parametrize(
    ("blocks", "message"),
    [
        ([(1, 2), 3], r"`f` must return a tuple, one entry a block \(StateSpace\(position, speed"),
        (None, "`f` must return a tuple"),
        ((1, 2, 3), "`f` returned 3 blocks, "),
        (((1, 2),), "`f` returned 1 blocks, "),
        (((1, 2, 3), 4), "`f`: block `position` has 2 components, got 3"),
        ((1, 3), "`f`: block `position` has 2 components, got 1"),
        (((1, 2), (3, 4)), "`f`: block `speed` has 1 components, got 2"),
    ],
)
def test_pack_names_the_function_and_the_block(blocks, message):
    with pytest.raises(ValueError, match=message):
        FLAT.pack(blocks, "`f`")


# -- retract and local -----------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", DTYPES)
def test_retract_and_local_are_inverse(dtype):
    x = element(50).astype(dtype)
    rng = np.random.default_rng(1)
    delta = rng.standard_normal((7, 50)).astype(dtype)
    delta[2:5] *= rng.uniform(0, 3, 50) / np.linalg.norm(delta[2:5], axis=0)
    y = MIXED.retract(x, delta)
    back = MIXED.local(x, y)
    assert y.dtype == dtype
    assert back.dtype == dtype
    tolerance = 1e-12 if dtype is np.float64 else 2e-5
    np.testing.assert_allclose(back, delta, rtol=0, atol=tolerance)
    np.testing.assert_allclose(np.linalg.norm(y[2:6], axis=0), 1, atol=tolerance)


def test_retract_moves_the_rotation_in_the_body_frame():
    x = element(10)
    delta = np.zeros((7, 10))
    delta[2:5] = np.random.default_rng(2).uniform(-1, 1, (3, 10))
    y = MIXED.retract(x, delta)
    before = Reference.from_quat(x[2:6].T, scalar_first=True)
    after = Reference.from_quat(y[2:6].T, scalar_first=True)
    want = before * Reference.from_rotvec(delta[2:5].T)
    np.testing.assert_allclose(after.as_matrix(), want.as_matrix(), atol=1e-14)
    np.testing.assert_array_equal(y[[0, 1, 7]], x[[0, 1, 7]])


def test_zero_moves_nothing():
    x = element(10)
    still = MIXED.retract(x, np.zeros((7, 10)))
    np.testing.assert_allclose(still, x, rtol=0, atol=1e-15)
    np.testing.assert_array_equal(MIXED.local(x, x)[[0, 1, 5, 6]], 0)
    np.testing.assert_allclose(MIXED.local(x, x), 0, atol=1e-15)


def test_angles_take_the_shortest_way():
    x = np.array([[3.0, -3.0, 0.1, 100.0]])
    y = np.array([[-3.0, 3.0, 0.1 + 2 * math.pi, 100.0 - 0.3]])
    want = np.array([[2 * math.pi - 6.0, 6.0 - 2 * math.pi, 0.0, -0.3]])
    np.testing.assert_allclose(BEARING.local(x, y), want, atol=1e-12)
    delta = np.array([[1.0, -1.0, 7.0, 0.0]])
    moved = BEARING.retract(x, delta)
    assert np.abs(moved).max() <= math.pi
    np.testing.assert_allclose(np.sin(moved), np.sin(x + delta), atol=1e-12)
    np.testing.assert_allclose(np.cos(moved), np.cos(x + delta), atol=1e-12)


def test_rotations_take_the_shortest_way():
    space = StateSpace(Rotation("q"))
    x = np.array([[1.0], [0.0], [0.0], [0.0]])
    y = space.retract(x, np.array([[0.0], [0.0], [4.0]]))
    want = [[0.0], [0.0], [4.0 - 2 * math.pi]]
    np.testing.assert_allclose(space.local(x, y), want, atol=1e-12)
    np.testing.assert_allclose(space.local(x, -y), want, atol=1e-12)


def test_broadcasting_over_points():
    x, delta = element(6), np.random.default_rng(3).standard_normal((7, 5, 6))
    wide = MIXED.retract(x[:, None], delta)
    assert wide.shape == (8, 5, 6)
    for j in range(5):
        np.testing.assert_array_equal(wide[:, j], MIXED.retract(x, delta[:, j]))
    back = MIXED.local(x[:, None], wide)
    assert back.shape == (7, 5, 6)
    for j in range(5):
        np.testing.assert_array_equal(back[:, j], MIXED.local(x, wide[:, j]))
    # one point, moved for all
    np.testing.assert_array_equal(
        MIXED.retract(x[:, :1, None], delta[:, :, :3])[:, 2],
        MIXED.retract(np.repeat(x[:, :1], 3, axis=1), delta[:, 2, :3]),
    )
    # flat spaces broadcast as well
    flat = FLAT.retract(np.zeros((3, 1, 4)), np.ones((3, 5, 1)))
    np.testing.assert_array_equal(flat, np.ones((3, 5, 4)))


def test_inputs_are_not_modified():
    x, delta = element(6), np.random.default_rng(4).standard_normal((7, 6))
    y = MIXED.retract(x, delta)
    weights = np.full(5, 0.2)
    points = MIXED.retract(x[:, None], 0.1 * np.random.default_rng(5).standard_normal((7, 5, 6)))
    cov = np.repeat(np.eye(7)[:, :, None], 6, axis=2)
    kept = [a.copy() for a in (x, delta, y, weights, points, cov)]
    for a in (x, delta, y, weights, points, cov):
        a.flags.writeable = False
    MIXED.retract(x, delta)
    MIXED.local(x, y)
    MIXED.mean(points, weights, x)
    MIXED.reset(cov, delta)
    for a, b in zip((x, delta, y, weights, points, cov), kept, strict=True):
        np.testing.assert_array_equal(a, b)


# -- means -----------------------------------------------------------------------------------------


def test_flat_mean_and_deviations():
    rng = np.random.default_rng(6)
    points, weights = rng.standard_normal((3, 5, 4)), np.array([0.1, 0.2, 0.3, 0.25, 0.15])
    mean, deviations = FLAT.mean(points, weights, points[:, 2])
    want = np.tensordot(weights, points, (0, 1))
    np.testing.assert_allclose(mean, want, atol=1e-14)
    np.testing.assert_allclose(deviations, points - want[:, None], atol=1e-14)


def test_weights_may_differ_from_run_to_run():
    rng = np.random.default_rng(7)
    x = element(4)
    points = MIXED.retract(x[:, None], 0.1 * rng.standard_normal((7, 5, 4)))
    weights = rng.random((5, 4))
    weights /= weights.sum(axis=0)
    mean, deviations = MIXED.mean(points, weights, x, passes=3)
    np.testing.assert_allclose(deviations, MIXED.local(mean[:, None], points), atol=1e-14)
    for m in range(4):
        one = slice(m, m + 1)
        alone, _ = MIXED.mean(points[..., one], weights[:, m], x[:, one], passes=3)
        np.testing.assert_allclose(alone, mean[:, one], atol=1e-13)
        # a weighted mean has no weighted deviation
        left = np.einsum("j,dj->d", weights[:, m], deviations[..., m])
        np.testing.assert_allclose(left, 0, atol=1e-9)


def test_bearings_are_averaged_about_the_reference():
    # at the cut, where a plain average would be near zero
    points = np.array([[[3.1], [-3.1], [3.0]]])
    weights = np.array([0.5, 0.25, 0.25])
    mean, _ = BEARING.mean(points, weights, points[:, 0])
    want = 0.5 * 3.1 + 0.25 * (2 * math.pi - 3.1) + 0.25 * 3.0
    assert mean[0, 0] == pytest.approx(want - 2 * math.pi if want > math.pi else want, abs=1e-12)


def test_a_large_negative_centre_weight_does_not_turn_the_mean():
    # the scaled set with alpha = 1e-3 has a centre weight of -1e6 (common practice, no source:
    # sums of sines and cosines flip by half a turn there)
    rule = Scaled(alpha=1e-3).points(1)
    sigma = 0.2
    for centre in (0.0, 3.1, -math.pi):
        points = BEARING.retract(np.full((1, 1, 1), centre), sigma * rule.points[:, :, None])
        mean, deviations = BEARING.mean(points, rule.mean_weights, points[:, rule.centre])
        assert abs(BEARING.local(np.full((1, 1), centre), mean)[0, 0]) < 1e-8
        spread = (rule.cov_weights * deviations[0, :, 0] ** 2).sum()
        assert spread == pytest.approx(sigma**2, rel=1e-5)


def test_mean_bits_do_not_depend_on_the_batch():
    rng = np.random.default_rng(8)
    x = element(20)
    points = MIXED.retract(x[:, None], 0.3 * rng.standard_normal((7, 15, 20)))
    weights = np.full(15, 1 / 15)
    mean, deviations = MIXED.mean(points, weights, x)
    for first, size in ((0, 2), (3, 5), (9, 11)):
        cut = slice(first, first + size)
        part, dev = MIXED.mean(np.ascontiguousarray(points[..., cut]), weights, x[:, cut].copy())
        np.testing.assert_array_equal(part, mean[:, cut])
        np.testing.assert_array_equal(dev, deviations[..., cut])


# -- covariance reset ------------------------------------------------------------------------------


def test_reset_leaves_flat_spaces_alone():
    cov = np.repeat(np.eye(3)[:, :, None], 4, axis=2)
    np.testing.assert_array_equal(FLAT.reset(cov, np.ones((3, 4))), cov)


def test_reset_carries_the_covariance_to_the_corrected_frame():
    # derivative of local(retract(x, d), retract(x, d + e)) by central differences, at e = 0
    x, rng = element(5), np.random.default_rng(9)
    delta = 0.6 * rng.standard_normal((7, 5))
    root = rng.standard_normal((7, 7, 5))
    cov = np.einsum("ikm,jkm->ijm", root, root)
    after, h = MIXED.retract(x, delta), 1e-6
    jac = np.empty((7, 7, 5))
    for j in range(7):
        step = np.zeros((7, 1))
        step[j] = h
        ahead = MIXED.local(after, MIXED.retract(x, delta + step))
        behind = MIXED.local(after, MIXED.retract(x, delta - step))
        jac[:, j] = (ahead - behind) / (2 * h)
    want = np.einsum("ikm,klm,jlm->ijm", jac, cov, jac)
    got = MIXED.reset(cov, delta)
    np.testing.assert_allclose(got, want, rtol=0, atol=1e-7)
    np.testing.assert_allclose(got, np.swapaxes(got, 0, 1), atol=1e-12)
    # it is not nothing
    assert np.abs(got - cov).max() > 0.1


@pytest.mark.parametrize("angle", [0.0, 1e-9, 0.01, 0.0999, 0.1001, 0.2, 0.5])
def test_right_jacobian_against_its_power_series(angle):
    # sum of (-[v])^k/(k + 1)!, derived; on both sides of the branch at 0.1 rad
    v = angle * np.array([2.0, -1.0, 2.0]) / 3
    skew = np.array([[0, -v[2], v[1]], [v[2], 0, -v[0]], [-v[1], v[0], 0]])
    want, term = np.zeros((3, 3)), np.eye(3)
    for k in range(20):
        want += term
        term = -term @ skew / (k + 2)
    np.testing.assert_allclose(right_jacobian(v[:, None])[..., 0], want, rtol=0, atol=1e-15)


def test_reset_by_zero_changes_nothing():
    root = np.random.default_rng(10).standard_normal((7, 7, 5))
    cov = np.einsum("ikm,jkm->ijm", root, root)
    np.testing.assert_allclose(MIXED.reset(cov, np.zeros((7, 5))), cov, rtol=1e-15, atol=1e-15)


@pytest.mark.parametrize("dtype", DTYPES)
def test_reset_keeps_the_type(dtype):
    cov = np.repeat(np.eye(7, dtype=dtype)[:, :, None], 3, axis=2)
    assert MIXED.reset(cov, np.full((7, 3), 0.1, dtype=dtype)).dtype == dtype


# -- length of quaternions -------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", DTYPES)
def test_quaternions_keep_their_length_over_a_long_flight(dtype):
    space = StateSpace(Rotation("q"))
    x = np.array([[1.0], [0.0], [0.0], [0.0]], dtype=dtype)
    delta = np.array([[0.011], [-0.007], [0.02]], dtype=dtype)
    for _ in range(5000):
        x = space.retract(x, delta)
    error = abs(float(np.linalg.norm(x.astype(float))) - 1)
    assert error < (1e-15 if dtype is np.float64 else 2e-7)
