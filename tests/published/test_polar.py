"""The polar-to-Cartesian transform of a short-range sonar, through the project's filters.

S. Julier, J. Uhlmann, "A new extension of the Kalman filter to nonlinear systems", Proc. SPIE
3068:182-193, 1997, and Proc. IEEE 92(3):401-422, 2004 (from memory): range 1 m with 2 cm, bearing
90 deg with 15 deg. Exact moments: closed form, derived. Tolerances: 1e-7; 1e-6 for the scaled set,
whose weights are of size 1e6.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from flyoff.estimators.contract import moments
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.particle import Particle
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.models.model import ModelSpec, SensorSpec, trace
from flyoff.models.priors import GaussianPrior
from flyoff.numerics.discretise import diagonal
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams

RANGE_SIGMA, BEARING_SIGMA = 0.02, math.radians(15)
NOISE = 1e-3  # m^2, known variance of the sensor that looks at the transformed point

POLAR = StateSpace(Vector("polar", 2))
POINT = StateSpace(Vector("point", 2, "m"))

# estimator, mean y, var x, var y, tolerance
ROWS = {
    "linearised": (Linearised(), 1.0, 0.06853892, 0.00040000, 1e-7),
    "unscented": (
        SigmaPoint(points=Symmetric(kappa=1.0)),
        0.96631373,
        0.06396825,
        0.00266953,
        1e-7,
    ),
    "scaled": (
        SigmaPoint(points=Scaled(alpha=1e-3, beta=2.0, kappa=0.0)),
        0.96573054,
        0.06853892,
        0.00274879,
        1e-6,
    ),
    "cubature": (SigmaPoint(points=Cubature()), 0.96612022, 0.06546388, 0.00154784, 1e-7),
}


def to_cartesian(pair):
    r, angle = pair
    return r * np.cos(angle), r * np.sin(angle)


def move(x, u, w, p, dt):
    return to_cartesian(x.polar)


def no_noise(p, dt):
    return diagonal(0.0, 0.0)


def see(x, u, p):
    return to_cartesian(x.polar)


def seen_noise(x, u, p):
    return diagonal(NOISE, NOISE)


@pytest.fixture(scope="module")
def model():
    return trace(
        ModelSpec(
            space=POLAR,
            transition=move,
            noise=POLAR,
            noise_covariance=no_noise,
            sensors=(SensorSpec("point", POINT, see, seen_noise, 1.0),),
        )
    )


def prior(runs: int = 2) -> GaussianPrior:
    mean = np.repeat([[1.0], [math.pi / 2]], runs, axis=1)
    cov = np.repeat(np.diag([RANGE_SIGMA**2, BEARING_SIGMA**2])[:, :, None], runs, axis=2)
    return GaussianPrior(POLAR, mean, cov)


@pytest.mark.parametrize("name", ROWS)
def test_predicted_mean_and_covariance(model, name):
    estimator, mean_y, var_x, var_y, tolerance = ROWS[name]
    bound = estimator.bind(model, Streams(0, "test", "polar", (0, 1)))
    moved = bound.predict(bound.start(prior()), np.zeros((0, 2)), 1.0)
    np.testing.assert_allclose(moved.mean[0], 0, atol=tolerance)
    np.testing.assert_allclose(moved.mean[1], mean_y, rtol=0, atol=tolerance)
    np.testing.assert_allclose(moved.cov[0, 0], var_x, rtol=0, atol=tolerance)
    np.testing.assert_allclose(moved.cov[1, 1], var_y, rtol=0, atol=tolerance)
    np.testing.assert_allclose(moved.cov[0, 1], 0, atol=tolerance)


@pytest.mark.parametrize("name", ROWS)
def test_predicted_measurement_and_its_covariance(model, name):
    estimator, mean_y, var_x, var_y, tolerance = ROWS[name]
    bound = estimator.bind(model, Streams(0, "test", "polar", (0, 1)))
    reading = np.zeros((2, 2))
    _, innovation = bound.update(
        bound.start(prior()), model.sensors["point"], reading, np.zeros((0, 2))
    )
    s = np.einsum("ikm,jkm->ijm", innovation.factor, innovation.factor)
    s -= NOISE * np.eye(2)[:, :, None]
    np.testing.assert_allclose(-innovation.residual[0], 0, atol=tolerance)
    np.testing.assert_allclose(-innovation.residual[1], mean_y, rtol=0, atol=tolerance)
    np.testing.assert_allclose(s[0, 0], var_x, rtol=0, atol=tolerance)
    np.testing.assert_allclose(s[1, 1], var_y, rtol=0, atol=tolerance)
    np.testing.assert_allclose(s[0, 1], 0, atol=tolerance)


def test_particles_come_to_the_exact_moments(model):
    # closed form, derived: mean r exp(-s^2/2); second moments from (r^2 + sr^2)(1 -+ exp(-2 s^2))/2
    s2 = BEARING_SIGMA**2
    mean_y = math.exp(-s2 / 2)
    second = 1 + RANGE_SIGMA**2
    var_x = second * (1 - math.exp(-2 * s2)) / 2
    var_y = second * (1 + math.exp(-2 * s2)) / 2 - mean_y**2
    assert mean_y == pytest.approx(0.966311088, abs=1e-9)
    assert var_x == pytest.approx(0.06407444, abs=1e-8)
    assert var_y == pytest.approx(0.00256844, abs=1e-8)

    runs, count = 100, 2000
    streams = Streams(3, "test", "polar", range(runs))
    bound = Particle(particles=count).bind(model, streams)
    cloud = bound.predict(bound.start(prior(runs)), np.zeros((0, runs)), 1.0)
    mean, cov, _ = moments(POLAR, bound.posterior(cloud))
    assert cov is not None
    # four standard errors over all 200 000 draws; the spread between runs gives the error
    for got, want in (
        (mean[0], 0.0),
        (mean[1], mean_y),
        (cov[0, 0], var_x),
        (cov[1, 1], var_y),
        (cov[0, 1], 0.0),
    ):
        error = got.std(ddof=1) / math.sqrt(runs)
        assert abs(got.mean() - want) < 4 * error
        assert error < 3e-3 * math.sqrt(var_x)
