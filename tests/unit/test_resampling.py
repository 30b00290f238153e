"""Systematic resampling by counts.

Counts of weights .55 .25 .20 with three particles: means 1.65, 0.75, 0.60 (N w, derived).
Counter-example of R. Douc, O. Cappe, E. Moulines, Proc. ISPA 2005 (from memory): alternating
weights, for which systematic resampling has variance 0.04 at every N. Effective sample size:
A. Kong, J. Liu, W. Wong, JASA 89:278-288, 1994.
"""

from __future__ import annotations

import numpy as np
import pytest

from flyoff.estimators.contract import Weighted, moments
from flyoff.estimators.resampling import ancestors, systematic_counts
from flyoff.numerics.spaces import StateSpace, Vector


def midpoints(count: int) -> np.ndarray:
    """Uniforms that integrate over [0, 1) by the midpoint rule."""
    return (np.arange(count) + 0.5) / count


def repeated(weights, runs: int) -> np.ndarray:
    return np.repeat(np.asarray(weights, dtype=float)[:, None], runs, axis=1)


def test_mean_counts():
    u = midpoints(2000)
    copies = systematic_counts(repeated([0.55, 0.25, 0.20], len(u)), u)
    np.testing.assert_allclose(copies.mean(axis=1), [1.65, 0.75, 0.60], atol=1e-3)


@pytest.mark.parametrize("size", [2, 3, 10, 100, 1000])
def test_counts_sum_to_n_and_stay_within_one_of_n_w(size):
    rng = np.random.default_rng(size)
    weights = rng.random((size, 200)) ** 8 + 1e-300
    weights /= weights.sum(axis=0)
    copies = systematic_counts(weights, rng.random(200))
    assert copies.dtype == np.intp
    assert copies.min() >= 0
    np.testing.assert_array_equal(copies.sum(axis=0), size)
    assert np.abs(copies - size * weights).max() < 1 + 1e-9


def test_mean_counts_of_many_particles():
    rng = np.random.default_rng(1)
    weights = rng.random(50)
    weights /= weights.sum()
    u = midpoints(5000)
    copies = systematic_counts(repeated(weights, len(u)), u)
    np.testing.assert_allclose(copies.mean(axis=1), 50 * weights, atol=1e-3)


@pytest.mark.parametrize("size", [10, 50])
def test_variance_of_the_counter_example(size):
    # weights alternate 0.8/N and 1.2/N, the function 1 and 0: 0.5 with probability 0.8, else 0
    weights = np.where(np.arange(size) % 2 == 0, 0.8, 1.2) / size
    values = np.where(np.arange(size) % 2 == 0, 1.0, 0.0)
    u = midpoints(1000)
    copies = systematic_counts(repeated(weights, len(u)), u)
    estimate = values @ copies / size
    np.testing.assert_allclose(estimate.mean(), 0.4, atol=1e-12)
    np.testing.assert_allclose(estimate.var(), 0.04, atol=1e-12)
    assert set(np.round(estimate, 12)) == {0.0, 0.5}


@pytest.mark.parametrize("u", [0.0, 1e-17, 0.3, 0.5, 1 - 1e-12])
def test_edges(u):
    at = np.array([u, u])
    # even weights: one copy each; all weight on one: N copies; no weight: no copy
    np.testing.assert_array_equal(systematic_counts(repeated([0.25] * 4, 2), at), 1)
    for j in range(4):
        alone = np.zeros(4)
        alone[j] = 1
        np.testing.assert_array_equal(systematic_counts(repeated(alone, 2), at)[:, 0], 4 * alone)


def test_weights_that_sum_to_one_only_nearly():
    # rounding of a sum over many particles must not lose or add a copy
    rng = np.random.default_rng(2)
    weights = rng.random((20_000, 4))
    weights /= weights.sum(axis=0)
    for scale in (1 - 1e-12, 1 + 1e-12):
        copies = systematic_counts(weights * scale, np.array([0.0, 1e-16, 0.5, 1 - 2**-53]))
        np.testing.assert_array_equal(copies.sum(axis=0), 20_000)
        assert copies.min() >= 0


def test_counts_do_not_depend_on_the_batch_and_leave_weights_alone():
    rng = np.random.default_rng(3)
    weights = rng.random((30, 9))
    weights /= weights.sum(axis=0)
    kept, u = weights.copy(), rng.random(9)
    whole = systematic_counts(weights, u)
    np.testing.assert_array_equal(weights, kept)
    for m in range(8):
        part = systematic_counts(weights[:, m : m + 2].copy(), u[m : m + 2])
        np.testing.assert_array_equal(part, whole[:, m : m + 2])


def test_ancestors_are_in_order_with_the_right_multiplicity():
    copies = np.array([[0, 2, 1], [3, 0, 1], [0, 1, 1]])
    want = np.array([[1, 0, 0], [1, 0, 1], [1, 2, 2]])
    parents = ancestors(copies)
    np.testing.assert_array_equal(parents, want)
    assert parents.flags.c_contiguous
    rng = np.random.default_rng(4)
    weights = rng.random((40, 15)) ** 3
    weights /= weights.sum(axis=0)
    copies = systematic_counts(weights, rng.random(15))
    parents = ancestors(copies)
    assert (np.diff(parents, axis=0) >= 0).all()
    for m in range(15):
        np.testing.assert_array_equal(np.bincount(parents[:, m], minlength=40), copies[:, m])


def test_effective_sample_size():
    # (.5, .25, .125, .125): 2.909091 = N/(1 + cv^2)
    w = repeated([0.5, 0.25, 0.125, 0.125], 2)
    points = np.arange(8.0).reshape(1, 4, 2)
    space = StateSpace(Vector("x", 1))
    posterior = Weighted(points, np.log(w) - 3.0, points[:, 0], np.array([4, 4]))
    mean, cov, ess = moments(space, posterior)
    np.testing.assert_allclose(ess, 32 / 11, rtol=1e-12)
    np.testing.assert_allclose(ess, 2.909091, rtol=0, atol=5e-7)
    # weighted mean and unbiased covariance, by hand
    assert cov is not None
    x = points[0]
    want = (w * x).sum(axis=0)
    np.testing.assert_allclose(mean[0], want, rtol=1e-12)
    spread = (w * (x - want) ** 2).sum(axis=0) / (1 - (w**2).sum(axis=0))
    np.testing.assert_allclose(cov[0, 0], spread, rtol=1e-12)
    # copies add no information
    few = Weighted(points, np.log(w), points[:, 0], np.array([2, 4]))
    np.testing.assert_allclose(moments(space, few)[2], [2.0, 32 / 11], rtol=1e-12)
