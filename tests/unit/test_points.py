"""A point set checks itself, and applies itself to covariance factors."""

from __future__ import annotations

import math

import numpy as np
import pytest

from flyoff.errors import UserError
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.points import PointSet, star
from flyoff.numerics import linalg


def cross(d: int = 2) -> tuple[np.ndarray, np.ndarray]:
    """Points and weights of the 2d-point rule."""
    points = math.sqrt(d) * np.concatenate([np.eye(d), -np.eye(d)], axis=1)
    return points, np.full(2 * d, 0.5 / d)


def triangle() -> tuple[np.ndarray, np.ndarray]:
    """Three points of equal weight: mean and covariance right, third moments not."""
    angles = 2 * math.pi * np.arange(3) / 3
    return math.sqrt(2) * np.array([np.cos(angles), np.sin(angles)]), np.full(3, 1 / 3)


def test_a_right_set_is_accepted():
    points, weights = cross()
    assert PointSet(points, weights, weights, 3, None).degree == 3
    assert PointSet(*triangle(), triangle()[1], 2, None).degree == 2


def test_weights_must_sum_to_one():
    points, weights = cross()
    # a centre point with weight takes no part in mean and covariance
    points = np.concatenate([np.zeros((2, 1)), points], axis=1)
    weights = np.concatenate([[0.1], weights])
    with pytest.raises(ValueError, match=r"`weights sum to one` by 1\.0e-01"):
        PointSet(points, weights, weights, 3, 0)


def test_mean_must_be_zero():
    points, weights = cross()
    with pytest.raises(ValueError, match="`zero mean`"):
        PointSet(points + np.array([[1e-9], [0.0]]), weights, weights, 3, None)


def test_covariance_must_be_the_identity():
    points, weights = cross()
    with pytest.raises(ValueError, match="`identity covariance`"):
        PointSet(1.001 * points, weights, weights, 3, None)
    turned = np.array([[1.0, 0.0], [0.1, 1.0]]) @ points
    with pytest.raises(ValueError, match="`identity covariance`"):
        PointSet(turned, weights, weights, 3, None)


def test_covariance_under_the_covariance_weights_must_be_the_identity():
    points, weights = cross()
    other = weights * np.array([1.01, 0.99, 1.01, 0.99])
    with pytest.raises(ValueError, match="covariance weights"):
        PointSet(points, weights, other, 3, None)


def test_nan_is_refused():
    points, weights = cross()
    for bad in (points * np.nan, points):
        w = weights * np.nan if bad is points else weights
        with pytest.raises(ValueError, match="breaks the rule"):
            PointSet(bad, w, w, 3, None)


def test_a_false_degree_is_refused():
    points, weights = triangle()
    with pytest.raises(ValueError, match="degree 3"):
        PointSet(points, weights, weights, 3, None)


@pytest.mark.parametrize("degree", [5, 7])
def test_a_false_higher_degree_is_refused(degree):
    # the cross is exact to degree 3 only: its fourth power at d = 2 is 2, not 3
    points, weights = cross()
    with pytest.raises(ValueError, match="degree"):
        PointSet(points, weights, weights, degree, None)


def test_a_false_degree_in_a_late_axis_is_refused():
    # the skewed pair sits on the fifth axis
    points, weights = cross(4)
    d = 5
    full = np.zeros((d, 10))
    full[:4, :8] = points * math.sqrt(5 / 4)
    w = np.zeros(10)
    w[:8] = weights * 4 / 5
    # two points at a and -b with weights p and q: mean 0, variance 1, third moment not 0
    full[4, 8], full[4, 9] = 3.0, -5 / 3
    w[8], w[9] = 1 / (3.0 * (3.0 + 5 / 3)), 3.0 / 5 * 3 / (3.0 * (3.0 + 5 / 3))
    w[:8] *= (1 - w[8] - w[9]) / w[:8].sum()
    full[:4] /= np.sqrt((w * full[0] ** 2).sum())
    assert PointSet(full, w, w, 2, None).degree == 2
    assert abs((w * full[4] ** 3).sum()) > 1
    with pytest.raises(ValueError, match="degree 3"):
        PointSet(full, w, w, 3, None)


def test_star():
    points, weights = star(3, 2.0, 0.25, 0.125)
    assert points.shape == (3, 7)
    assert weights.tolist() == [0.25, *[0.125] * 6]
    np.testing.assert_array_equal(points[:, 0], 0)
    np.testing.assert_array_equal(points[:, 1:4], 2 * np.eye(3))
    np.testing.assert_array_equal(points[:, 4:], -2 * np.eye(3))


@pytest.mark.parametrize("d", [1, 2, 5, 7])
@pytest.mark.parametrize("rule", [Scaled(), Symmetric(), Cubature()], ids=lambda r: r.rule)
def test_deviations_on_axes_equal_the_dense_product(rule, d):
    rng = np.random.default_rng(d)
    root = rng.standard_normal((d, d, 9))
    low, _ = linalg.cholesky(np.einsum("ikm,jkm->ijm", root, root) + np.eye(d)[:, :, None])
    points = rule.points(d)
    assert points.on_axes
    dense = np.einsum("ikm,kj->ijm", low, points.points)
    np.testing.assert_allclose(points.deviations(low), dense, rtol=1e-14, atol=1e-15)
    assert points.deviations(low.astype(np.float32)).dtype == np.float32


def test_deviations_off_axes():
    points, weights = triangle()
    off = PointSet(points, weights, weights, 2, None)
    assert not off.on_axes
    low = np.array([[2.0, 0.0], [0.7, 1.5]])[:, :, None] * np.array([1.0, 0.5, 3.0])
    want = np.stack([low[..., m] @ points for m in range(3)], axis=-1)
    np.testing.assert_allclose(off.deviations(low), want, rtol=1e-14, atol=1e-15)


@pytest.mark.parametrize(
    ("rule", "d"),
    [(Symmetric(kappa=-4.0), 4), (Scaled(kappa=-3.0), 3), (Scaled(kappa=-5.0), 3)],
)
def test_too_small_a_kappa_is_refused_with_the_limit(rule, d):
    with pytest.raises(UserError, match=rf"`kappa` must be above -{d} for {d} error states"):
        rule.points(d)


@pytest.mark.parametrize("alpha", [0.0, -0.1, 1.5, math.nan])
def test_alpha_outside_its_range_is_refused(alpha):
    with pytest.raises(ValueError, match="alpha"):
        Scaled(alpha=alpha)


def test_unknown_options_are_refused():
    with pytest.raises(ValueError, match="gamma"):
        Scaled(gamma=1.0)
