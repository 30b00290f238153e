"""Closed-form Gaussian expectations, through traced sensors, point rules and the manifold.

All closed forms are derived (and agree with adaptive quadrature to 1e-12). What the linearised
filter, the symmetric set with kappa = 3 - n (S. Julier, J. Uhlmann, H. Durrant-Whyte, IEEE TAC
45(3), 2000) and the cubature rule (I. Arasaratnam, S. Haykin, IEEE TAC 54(6), 2009) make of the
same functions are six-digit numbers of an independent script.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from flyoff.estimators.linearised import Linearised
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.models.model import ModelSpec, SensorSpec, trace
from flyoff.models.priors import GaussianPrior
from flyoff.numerics import algebra
from flyoff.numerics.discretise import diagonal
from flyoff.numerics.spaces import Rotation, StateSpace, Vector
from flyoff.numerics.streams import Streams

# name: traced function
FUNCTIONS = {
    "sin": lambda x: np.sin(x),
    "cos": lambda x: np.cos(x),
    "sin^2": lambda x: np.sin(x) ** 2,
    "exp": lambda x: np.exp(x),
    "exp2": lambda x: np.exp(2 * x),
    "x^2": lambda x: x**2,
    "x^3": lambda x: x**3,
    "x^4": lambda x: x**4,
    "x^6": lambda x: x**6,
    "x sin x": lambda x: x * np.sin(x),
    "x exp x": lambda x: x * np.exp(x),
    "|x|": lambda x: np.abs(x),
    # the same as a maximum, with the mean of the one-sided derivatives at the kink
    "max(x,0)": lambda x: (x + np.abs(x)) / 2,
    "exp(-x^2/2)": lambda x: np.exp(-x * x / 2),
}

# (mu, s): name: closed form, linearised, symmetric kappa = 2, cubature
TABLE = {
    (0.7, 0.5): {
        "sin": (0.568520113577, 0.644218, 0.568599, 0.565354),
        "cos": (0.674970861245, 0.764842, 0.675065, 0.671212),
        "sin^2": (0.448454858344, 0.415016, 0.447893, 0.454083),
        "exp": (2.281880765329, 2.013753, 2.281603, 2.270760),
        "exp2": (6.685894442279, 4.055200, 6.643198, 6.257501),
        "x^2": (0.740000000000, 0.490000, 0.740000, 0.740000),
        "x^3": (0.868000000000, 0.343000, 0.868000, 0.868000),
        "x^4": (1.162600000000, 0.240100, 1.162600, 1.037600),
        "x^6": (2.630524000000, 0.117649, 2.536774, 1.493024),
        "x sin x": (0.566706794815, 0.450952, 0.566209, 0.579090),
        "x exp x": (2.167786727063, 1.409627, 2.165892, 2.114210),
        "|x|": (0.736668142708, 0.700000, 0.755342, 0.700000),
        "max(x,0)": (0.718334071354, 0.700000, 0.727671, 0.700000),
        "exp(-x^2/2)": (0.735230094031, 0.782705, 0.735088, 0.733475),
    },
    (-1.2, 0.8): {
        "sin": (-0.676799284790, -0.932039, -0.678555, -0.649358),
        "cos": (0.263125734489, 0.362358, 0.263808, 0.252457),
        "sin^2": (0.602511479020, 0.868697, 0.631230, 0.489234),
        "exp": (0.414782911682, 0.301194, 0.414019, 0.402828),
        "exp2": (0.326279794623, 0.090718, 0.303023, 0.233822),
        "x^2": (2.080000000000, 1.440000, 2.080000, 2.080000),
        "x^3": (-4.032000000000, -1.728000, -4.032000, -4.032000),
        "x^4": (8.832000000000, 2.073600, 8.832000, 8.012800),
        "x^6": (53.366784000000, 2.985984, 51.793920, 32.002048),
        "x sin x": (0.980559611821, 1.118447, 0.978772, 0.987181),
        "x exp x": (-0.232278430542, -0.361433, -0.236174, -0.269399),
        "|x|": (1.246890870020, 1.200000, 1.261880, 1.200000),
        "max(x,0)": (0.023445435010, 0.000000, 0.030940, 0.000000),
        "exp(-x^2/2)": (0.503398834690, 0.486752, 0.494211, 0.529226),
    },
    (0.0, 1.0): {
        "sin": (0.000000000000, 0.000000, 0.000000, 0.000000),
        "cos": (0.606530659713, 1.000000, 0.613148, 0.540302),
        "sin^2": (0.432332358382, 0.000000, 0.324741, 0.708073),
        "exp": (1.648721270700, 1.000000, 1.638192, 1.543081),
        "exp2": (7.389056098931, 1.000000, 5.996508, 3.762196),
        "x^2": (1.000000000000, 0.000000, 1.000000, 1.000000),
        "x^3": (0.000000000000, 0.000000, 0.000000, 0.000000),
        "x^4": (3.000000000000, 0.000000, 3.000000, 1.000000),
        "x^6": (15.000000000000, 0.000000, 9.000000, 1.000000),
        "x sin x": (0.606530659713, 0.000000, 0.569860, 0.841471),
        "x exp x": (1.648721270700, 0.000000, 1.580587, 1.175201),
        "|x|": (0.797884560803, 0.000000, 0.577350, 1.000000),
        "max(x,0)": (0.398942280401, 0.000000, 0.288675, 0.500000),
        "exp(-x^2/2)": (0.707106781187, 1.000000, 0.741043, 0.606531),
    },
}
ESTIMATORS = {
    "linearised": (Linearised(), 1),
    "symmetric": (SigmaPoint(points=Symmetric()), 2),
    "cubature": (SigmaPoint(points=Cubature()), 3),
}

LINE = StateSpace(Vector("x", 1))
SEEN = StateSpace(Vector("seen", len(FUNCTIONS)))


def stay(x, u, w, p, dt):
    return x.x


def no_noise(p, dt):
    return ((0.0,),)


def see(x, u, p):
    return tuple(f(x.x) for f in FUNCTIONS.values())


def unit_noise(x, u, p):
    return diagonal(*[1.0] * len(FUNCTIONS))


@pytest.fixture(scope="module")
def model():
    return trace(
        ModelSpec(
            space=LINE,
            transition=stay,
            noise=LINE,
            noise_covariance=no_noise,
            sensors=(SensorSpec("functions", SEEN, see, unit_noise, 1.0),),
        )
    )


def prior(mu: float, s: float, runs: int = 2) -> GaussianPrior:
    return GaussianPrior(LINE, np.full((1, runs), mu), np.full((1, 1, runs), s * s))


@pytest.mark.parametrize("name", ESTIMATORS)
@pytest.mark.parametrize(("mu", "s"), TABLE)
def test_predicted_means_of_the_filters(model, mu, s, name):
    estimator, column = ESTIMATORS[name]
    bound = estimator.bind(model, Streams(0, "test", "moments", (0, 1)))
    reading = np.zeros((len(FUNCTIONS), 2))
    _, innovation = bound.update(
        bound.start(prior(mu, s)), model.sensors["functions"], reading, np.zeros((0, 2))
    )
    want = np.array([TABLE[mu, s][f][column] for f in FUNCTIONS])
    # half of the sixth printed digit
    np.testing.assert_allclose(-innovation.residual[:, 0], want, rtol=0, atol=5.1e-7)


@pytest.mark.parametrize(("mu", "s"), TABLE)
def test_polynomials_up_to_the_declared_degree_are_exact(model, mu, s):
    # closed forms; the symmetric set is exact to degree 5 in one dimension, cubature to degree 3
    u = np.zeros((0, 2))
    reading = np.zeros((len(FUNCTIONS), 2))
    names = list(FUNCTIONS)
    for estimator, exact in (
        (ESTIMATORS["symmetric"][0], ("x^2", "x^3", "x^4")),
        (ESTIMATORS["cubature"][0], ("x^2", "x^3")),
    ):
        bound = estimator.bind(model, Streams(0, "test", "moments", (0, 1)))
        start = bound.start(prior(mu, s))
        _, innovation = bound.update(start, model.sensors["functions"], reading, u)
        for f in exact:
            got = -innovation.residual[names.index(f), 0]
            assert got == pytest.approx(TABLE[mu, s][f][0], abs=1e-10)


@pytest.mark.parametrize(("mu", "s"), TABLE)
def test_traced_functions_integrate_to_the_closed_forms(model, mu, s):
    # 60-point Gauss-Hermite over the tape, a batch of sigma points per run; not for the kinks
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    points = np.repeat((mu + s * nodes)[None, :, None], 2, axis=2)
    seen = model.measure(model.sensors["functions"], points, np.zeros((0, 2)))
    for i, f in enumerate(FUNCTIONS):
        if f not in ("|x|", "max(x,0)"):
            got = weights @ seen[i] / weights.sum()
            np.testing.assert_allclose(got, TABLE[mu, s][f][0], atol=1e-10, rtol=1e-10, err_msg=f)


@pytest.mark.parametrize(("mu", "s"), TABLE)
def test_draws_from_the_prior_average_to_the_closed_forms(model, mu, s):
    runs, count = 50, 4000
    draws = prior(mu, s, runs).sample(Streams(5, "test", "moments", range(runs)), "draw", count)
    seen = model.measure(model.sensors["functions"], draws, np.zeros((0, runs)))
    for i, f in enumerate(FUNCTIONS):
        error = seen[i].std() / math.sqrt(runs * count)
        assert abs(seen[i].mean() - TABLE[mu, s][f][0]) < 4 * error, f


# -- rotations -------------------------------------------------------------------------------------

TURN = StateSpace(Rotation("attitude"))
IDENTITY = np.array([[1.0], [0.0], [0.0], [0.0]])


def mean_matrix(points: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """E[R] (3, 3) of quaternions (4, J, 1)."""
    q = tuple(points[:, :, 0])
    columns = [algebra.rotate(q, axis) for axis in np.eye(3)]
    return np.array([[weights @ (c[i] * np.ones(len(weights))) for c in columns] for i in range(3)])


def closed_form(s: float) -> float:
    """E[R] = c I for rotation-vector noise N(0, s^2 I): derived."""
    return (1 + 2 * (1 - s * s) * math.exp(-s * s / 2)) / 3


@pytest.mark.parametrize(
    ("s", "exact", "cubature"),
    [
        (0.1, 0.990041569601, 0.99002498),
        (0.3, 0.913305138979, 0.91200686),
        (0.6, 0.689715290202, 0.67125583),
    ],
)
def test_mean_rotation_matrix(s, exact, cubature):
    assert closed_form(s) == pytest.approx(exact, abs=1e-12)
    # the cubature answer, from its points moved onto the manifold
    rule = Cubature().points(3)
    low = s * np.eye(3)[:, :, None]
    points = TURN.retract(IDENTITY[:, None], rule.deviations(low))
    got = mean_matrix(points, rule.mean_weights)
    np.testing.assert_allclose(got, cubature * np.eye(3), rtol=0, atol=6e-9)
    # the exact one, by 24 Gauss-Hermite points an axis through the retraction
    nodes, weights = np.polynomial.hermite_e.hermegauss(24)
    grid = np.stack(np.meshgrid(nodes, nodes, nodes, indexing="ij")).reshape(3, -1, 1)
    w = np.einsum("i,j,k->ijk", weights, weights, weights).ravel() / weights.sum() ** 3
    points = TURN.retract(IDENTITY[:, None], s * grid)
    np.testing.assert_allclose(mean_matrix(points, w), exact * np.eye(3), rtol=0, atol=1e-9)
    # the linearised answer: the noise leaves the mean where it is
    still = TURN.retract(IDENTITY[:, None], np.zeros((3, 1, 1)))
    np.testing.assert_array_equal(mean_matrix(still, np.ones(1)), np.eye(3))


@pytest.mark.parametrize("s", [0.1, 0.5, 1.0])
def test_mean_cosine_of_half_the_angle(s):
    # E cos(theta/2) = exp(-s^2/8) for theta ~ N(0, s^2) about a fixed axis: derived
    nodes, weights = np.polynomial.hermite_e.hermegauss(40)
    axis = np.array([2.0, -1.0, 2.0]) / 3
    delta = (axis[:, None] * s * nodes)[:, :, None]
    points = TURN.retract(IDENTITY[:, None], delta)
    got = weights @ points[0, :, 0] / weights.sum()
    assert got == pytest.approx(math.exp(-s * s / 8), abs=1e-10)


def test_drawn_rotations_average_to_the_closed_form():
    s, runs, count = 0.3, 20, 5000
    cov = np.repeat((s * s * np.eye(3))[:, :, None], runs, axis=2)
    prior = GaussianPrior(TURN, np.repeat(IDENTITY, runs, axis=1), cov)
    draws = prior.sample(Streams(8, "test", "moments", range(runs)), "draw", count)
    flat = draws.reshape(4, -1, 1)
    size = flat.shape[1]
    got = mean_matrix(flat, np.full(size, 1 / size))
    # the diagonal of R has a standard deviation below s^2, the rest below s
    np.testing.assert_allclose(np.diag(got), closed_form(s), atol=4 * s * s / math.sqrt(size))
    np.testing.assert_allclose(got, closed_form(s) * np.eye(3), atol=4 * s / math.sqrt(size))
