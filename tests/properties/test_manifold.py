"""Properties of the manifold operations that must hold for any element."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from flyoff.numerics import algebra
from flyoff.numerics.spaces import Angle, Rotation, StateSpace, Vector, right_jacobian

few = settings(max_examples=60, deadline=None, database=None, derandomize=True)

SPACE = StateSpace(
    Vector("position", 2, "m"), Rotation("attitude"), Angle("heading"), Vector("bias", 1)
)
TURN = StateSpace(Rotation("attitude"))
EPS = np.finfo(float).eps


def finite(bound: float) -> st.SearchStrategy[float]:
    return st.floats(-bound, bound, allow_nan=False, allow_subnormal=True)


@st.composite
def rotation_vectors(draw, largest: float = math.pi - 1e-6) -> np.ndarray:
    """Rotation vectors (3,) of any length up to `largest`, tiny ones and axes included."""
    axis = draw(arrays(float, 3, elements=finite(1)))
    length = np.linalg.norm(axis)
    axis = axis / length if length > 1e-3 else np.array([0.0, 0.0, 1.0])
    exponent = draw(st.floats(-12, 0))
    return axis * largest * 10**exponent


@st.composite
def quaternions(draw) -> np.ndarray:
    q = draw(arrays(float, 4, elements=finite(1)))
    length = np.linalg.norm(q)
    return q / length if length > 1e-3 else np.array([1.0, 0.0, 0.0, 0.0])


@st.composite
def elements(draw) -> np.ndarray:
    """Elements (8, 1) of SPACE."""
    position = draw(arrays(float, 2, elements=finite(1e6)))
    heading = draw(finite(math.pi))
    bias = draw(finite(1e3))
    return np.concatenate([position, draw(quaternions()), [heading, bias]])[:, None]


@st.composite
def tangents(draw) -> np.ndarray:
    """Tangent vectors (7, 1) of SPACE within half a turn."""
    position = draw(arrays(float, 2, elements=finite(1e6)))
    heading = draw(finite(math.pi - 1e-6))
    bias = draw(finite(1e3))
    return np.concatenate([position, draw(rotation_vectors()), [heading, bias]])[:, None]


@few
@given(elements(), tangents())
def test_local_undoes_retract(x, delta):
    back = SPACE.local(x, SPACE.retract(x, delta))
    size = np.abs(np.concatenate([x[:2], delta[:2], x[7:], delta[6:]])).max()
    np.testing.assert_allclose(back[[0, 1, 6]], delta[[0, 1, 6]], rtol=0, atol=4 * EPS * size)
    np.testing.assert_allclose(back[5], delta[5], rtol=0, atol=1e-14)
    np.testing.assert_allclose(back[2:5], delta[2:5], rtol=0, atol=1e-8)
    if np.linalg.norm(delta[2:5]) < 3:
        np.testing.assert_allclose(back[2:5], delta[2:5], rtol=0, atol=1e-13)


@few
@given(elements(), elements())
def test_retract_undoes_local(x, y):
    again = SPACE.retract(x, SPACE.local(x, y))
    size = np.abs(np.concatenate([x, y])).max()
    np.testing.assert_allclose(again[[0, 1, 7]], y[[0, 1, 7]], rtol=0, atol=4 * EPS * size)
    # the same rotation, the same direction
    assert abs(abs(float((again[2:6] * y[2:6]).sum())) - 1) < 1e-14
    assert abs(math.sin((again[6, 0] - y[6, 0]) / 2)) < 1e-14


@few
@given(elements(), elements())
def test_local_is_never_longer_than_half_a_turn(x, y):
    delta = SPACE.local(x, y)
    assert np.linalg.norm(delta[2:5]) <= math.pi * (1 + 4 * EPS)
    assert abs(delta[5, 0]) <= math.pi * (1 + 4 * EPS)
    # and there and back are opposite
    back = SPACE.local(y, x)
    np.testing.assert_allclose(np.linalg.norm(back[2:5]), np.linalg.norm(delta[2:5]), atol=1e-7)


@few
@given(finite(1e6))
def test_wrap_range_and_direction(angle):
    wrapped = float(algebra.wrap(np.array(angle)))
    # rounding of the whole turns that are taken off
    slack = 4 * EPS * max(abs(angle), 1.0)
    assert abs(wrapped) <= math.pi + slack
    assert abs(math.sin((wrapped - angle) / 2)) <= slack
    again = float(algebra.wrap(np.array(wrapped)))
    assert abs(math.sin((again - wrapped) / 2)) <= 4 * EPS


@few
@given(finite(math.pi - 1e-9))
def test_wrap_leaves_an_angle_within_half_a_turn_alone(angle):
    assert float(algebra.wrap(np.array(angle))) == angle


@few
@given(
    elements(),
    st.lists(tangents(), min_size=1, max_size=4),
    st.floats(0.01, 0.5),
    st.integers(0, 7),
)
def test_mean_of_points_symmetric_about_a_centre_is_the_centre(centre, deltas, size, about):
    # pairs retract(c, d) and retract(c, -d), at most 0.5 rad away
    half = size / (1 + np.abs(np.concatenate(deltas, axis=1)).max(axis=1, keepdims=True))
    moves = np.stack([s * half * d for d in deltas for s in (1, -1)], axis=1)
    points = SPACE.retract(centre[:, None], moves)
    weights = np.full(points.shape[1], 1 / points.shape[1])
    mean, deviations = SPACE.mean(points, weights, centre)
    gap = SPACE.local(centre, mean)
    scale = 1 + np.abs(centre).max()
    np.testing.assert_allclose(gap, 0, rtol=0, atol=1e-14 * scale)
    np.testing.assert_allclose(deviations, moves, rtol=0, atol=1e-13 * scale)
    # about another of the points: the same centre, to what a fixed number of passes leaves
    other = points[:, about % points.shape[1]]
    mean, _ = SPACE.mean(points, weights, other, passes=3)
    gap = SPACE.local(centre, mean)
    np.testing.assert_allclose(gap[[0, 1, 5, 6]], 0, rtol=0, atol=1e-14 * scale)
    np.testing.assert_allclose(gap[2:5], 0, rtol=0, atol=1e-4 * np.abs(moves[2:5]).max() + 1e-14)


@few
@given(quaternions(), st.lists(rotation_vectors(), min_size=1, max_size=8), st.integers(1, 300))
def test_quaternions_keep_unit_length_after_many_retractions(q, turns, repeats):
    x = q[:, None]
    for _ in range(repeats):
        for v in turns:
            x = TURN.retract(x, v[:, None])
    assert abs(float(np.linalg.norm(x)) - 1) < 4 * EPS


@few
@given(quaternions(), quaternions(), arrays(float, 3, elements=finite(100)))
def test_rotations_compose_and_keep_lengths(p, q, v):
    a, b, u = tuple(p), tuple(q), tuple(v)
    one = np.array(algebra.rotate(algebra.quat_mul(a, b), u))
    two = np.array(algebra.rotate(a, algebra.rotate(b, u)))
    np.testing.assert_allclose(one, two, rtol=0, atol=1e-13 * (1 + np.abs(v).max()))
    assert abs(np.linalg.norm(one) - np.linalg.norm(v)) < 1e-13 * (1 + np.abs(v).max())
    back = np.array(algebra.unrotate(a, algebra.rotate(a, u)))
    np.testing.assert_allclose(back, v, rtol=0, atol=1e-13 * (1 + np.abs(v).max()))


@few
@given(rotation_vectors(largest=3.0), rotation_vectors(largest=1e-3))
def test_right_jacobian_is_the_derivative_of_the_exponential(v, small):
    # Log(Exp(-v) Exp(v + e)) = J(v) e to second order in e
    ahead = algebra.quat_mul(
        algebra.quat_conj(algebra.quat_exp(tuple(v))), algebra.quat_exp(tuple(v + small))
    )
    moved = np.array(algebra.quat_log(ahead))
    linear = right_jacobian(v[:, None])[..., 0] @ small
    bound = np.linalg.norm(small) ** 2 + 1e-14
    np.testing.assert_allclose(moved, linear, rtol=0, atol=bound)


@few
@given(st.floats(-0.3, 0.3))
def test_series_join_their_closed_forms(x):
    # sinc-like functions on both sides of their branch, against higher precision by half angles
    if x != 0:
        assert abs(float(algebra.sinc(np.array(x))) - math.sin(x) / x) < 4 * EPS
        exact = 2 * math.sin(x / 2) ** 2 / x
        assert abs(float(algebra.cosc(np.array(x))) - exact) < 1e-15
