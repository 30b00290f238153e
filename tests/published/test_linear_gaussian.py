"""Equivalences on a linear-Gaussian problem, where the Kalman filter is exact.

Nearly constant velocity, T = 1 s, Q = 0.1 [[1/3, 1/2], [1/2, 1]], R = 1, H = [1 0], m0 = (0, 1),
P0 = 10 I, 60 steps. R. E. Kalman, J. Basic Eng. 82:35-45, 1960. Expected values: a recursion
written out here with plain matrices, filterpy, and SciPy's algebraic Riccati equation.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from filterpy.kalman import KalmanFilter
from scipy.linalg import solve_discrete_are

from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.particle import Particle
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.filtering import run_filter
from flyoff.models.priors import GaussianPrior
from flyoff.numerics.streams import Streams
from flyoff.recordings import Readings, Recording
from tests.published.constant_velocity import SPACE, constant_velocity

F = np.array([[1.0, 1.0], [0.0, 1.0]])
H = np.array([[1.0, 0.0]])
Q = 0.1 * np.array([[1 / 3, 1 / 2], [1 / 2, 1.0]])
R = np.array([[1.0]])
M0, P0 = np.array([0.0, 1.0]), 10 * np.eye(2)
STEPS = 60


FILTERS = {
    "kalman": Kalman(),
    "linearised": Linearised(),
    "linearised-short": Linearised(form="short"),
    "scaled": SigmaPoint(points=Scaled()),
    "symmetric": SigmaPoint(points=Symmetric()),
    "cubature": SigmaPoint(points=Cubature()),
}


@pytest.fixture(scope="module")
def model():
    return constant_velocity()


def simulated(seed: int) -> np.ndarray:
    """Readings (60,) of one run."""
    rng = np.random.default_rng(seed)
    x, out = np.array([0.0, 1.0]), []
    for _ in range(STEPS):
        x = F @ x + np.linalg.cholesky(Q) @ rng.standard_normal(2)
        out.append((H @ x + rng.standard_normal(1))[0])
    return np.array(out)


def exact(z: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Kalman means (T, 2) and covariances (T, 2, 2), short form, plain matrices."""
    m, cov, means, covs = M0, P0, [], []
    for y in z:
        m, cov = F @ m, F @ cov @ F.T + Q
        s = H @ cov @ H.T + R
        k = cov @ H.T / s
        m, cov = m + k @ (y - H @ m), cov - k @ s @ k.T
        means.append(m)
        covs.append(cov)
    return np.array(means), np.array(covs)


def recording(z: np.ndarray) -> Recording:
    """A recording of readings (T, M)."""
    steps, runs = z.shape
    stamps = np.arange(1, steps + 1)
    prior = GaussianPrior(
        SPACE, np.repeat(M0[:, None], runs, axis=1), np.repeat(P0[:, :, None], runs, axis=2)
    )
    return Recording(
        np.arange(steps + 1.0),
        np.full((steps + 1, 2, runs), np.nan),
        np.zeros((steps, 0, runs)),
        (Readings("fix", stamps, stamps, z[:, None].copy()),),
        prior,
        tuple(range(runs)),
    )


class Keep:
    """Observer that keeps means (T, n, M) and covariances (T, d, d, M)."""

    def __init__(self) -> None:
        self.means: list[np.ndarray] = []
        self.covs: list[np.ndarray] = []

    def observe(self, step):
        self.means.append(step.mean)
        self.covs.append(step.cov)


@pytest.fixture(scope="module")
def data():
    return np.stack([simulated(2), simulated(3)], axis=1)


@pytest.mark.parametrize("name", FILTERS)
def test_every_gaussian_filter_is_the_kalman_filter(model, data, name):
    keep = Keep()
    bound = FILTERS[name].bind(model, Streams(0, "test", "linear", (0, 1)))
    outcome = run_filter(bound, model, recording(data), [keep])
    assert not outcome.fault.any()
    for run in (0, 1):
        means, covs = exact(data[:, run])
        got = np.array(keep.means)[:, :, run]
        np.testing.assert_allclose(got, means, rtol=0, atol=1e-10)
        np.testing.assert_allclose(np.array(keep.covs)[..., run], covs, rtol=0, atol=1e-10)


def test_agrees_with_filterpy(model, data):
    keep = Keep()
    bound = Kalman().bind(model, Streams(0, "test", "linear", (0, 1)))
    run_filter(bound, model, recording(data), [keep])
    for run in (0, 1):
        other = KalmanFilter(2, 1)
        other.x, other.P = M0.copy(), P0.copy()
        other.F, other.H, other.Q, other.R = F, H, Q, R
        for k in range(STEPS):
            other.predict()
            other.update(data[k, run])
            mean, cov = keep.means[k][:, run], keep.covs[k][..., run]
            np.testing.assert_allclose(mean, np.ravel(other.x), rtol=0, atol=1e-10)
            np.testing.assert_allclose(cov, other.P, rtol=0, atol=1e-10)


@pytest.mark.parametrize("name", FILTERS)
def test_steady_state(model, data, name):
    bound = FILTERS[name].bind(model, Streams(0, "test", "linear", (0, 1)))
    rec = recording(data)
    u, sensor = np.zeros((0, 2)), model.sensors["fix"]
    belief = bound.start(rec.prior)
    for k in range(STEPS):
        predicted = bound.predict(belief, u, 1.0)
        belief, innovation = bound.update(predicted, sensor, data[k][None], u)
    cov = predicted.cov[..., 0]
    gain = (belief.mean - predicted.mean) / innovation.residual
    riccati = solve_discrete_are(F.T, H.T, Q, R)
    np.testing.assert_allclose(cov, riccati, rtol=0, atol=1e-8)
    printed = [[1.21497496, 0.47063520], [0.47063520, 0.30815641]]
    np.testing.assert_allclose(cov, printed, rtol=0, atol=1e-8)
    want = (riccati @ H.T / (H @ riccati @ H.T + R)).ravel()
    np.testing.assert_allclose(want, [0.54852763, 0.21247879], rtol=0, atol=1e-8)
    np.testing.assert_allclose(gain.T, [want, want], rtol=0, atol=1e-8)


def test_log_likelihood_of_the_data(model, data):
    # sum of log N(residual; 0, S) with the recursion written out: derived
    z = data[:, 0]
    m, cov, want = M0, P0, 0.0
    for y in z:
        m, cov = F @ m, F @ cov @ F.T + Q
        s = (H @ cov @ H.T + R)[0, 0]
        r = y - m[0]
        want += -0.5 * (math.log(2 * math.pi * s) + r * r / s)
        k = cov[:, 0] / s
        m, cov = m + k * r, cov - np.outer(k, k) * s

    class Likelihood:
        def __init__(self) -> None:
            self.total = np.zeros(2)

        def observe(self, step):
            for _, innovation in step.innovations:
                self.total = self.total + innovation.log_likelihood

    for estimator in FILTERS.values():
        watch = Likelihood()
        bound = estimator.bind(model, Streams(0, "test", "linear", (0, 1)))
        run_filter(bound, model, recording(data), [watch])
        assert watch.total[0] == pytest.approx(want, abs=1e-9)


def test_particle_filter_comes_close_as_one_over_root_n(model):
    # rms deviation of the mean from the exact one: slope -1/2 of N (law of large numbers)
    z = simulated(2)[:20]
    means, _ = exact(z)
    repeats = 60
    rec = recording(np.repeat(z[:, None], repeats, axis=1))
    sizes = (100, 400, 1600, 6400)
    rms = []
    for size in sizes:
        keep = Keep()
        bound = Particle(particles=size).bind(
            model, Streams(11, "test", f"linear-{size}", range(repeats))
        )
        outcome = run_filter(bound, model, rec, [keep])
        assert not outcome.fault.any()
        gap = np.array(keep.means)[5:, 0] - means[5:, 0, None]
        rms.append(math.sqrt(np.mean(gap**2)))
    slope = np.polyfit(np.log(sizes), np.log(rms), 1)[0]
    assert slope == pytest.approx(-0.5, abs=0.08)
    # an independent bootstrap filter that resamples at every step came to 0.165 with 100 particles
    assert 0.1 < rms[0] < 0.2
