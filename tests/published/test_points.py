"""Point rules against their published moments and weights.

Sources: S. Julier, J. Uhlmann, H. Durrant-Whyte, IEEE Trans. Automat. Contr. 45(3):477-482, 2000
(symmetric set); S. Julier, "The scaled unscented transformation", Proc. ACC 2002 (scaled set);
I. Arasaratnam, S. Haykin, "Cubature Kalman filters", IEEE TAC 54(6):1254-1269, 2009 (cubature).
Moments of N(0, I): products of double factorials, derived.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

from flyoff.estimators.linearised import Linearised
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.points import PointSet
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.models.model import Model, ModelSpec, trace
from flyoff.models.priors import GaussianPrior
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.registry import discover

SIZES = (1, 2, 3, 4, 6)
RULES = discover("point-rule")


def powers(d: int, degree: int) -> list[tuple[int, ...]]:
    """Exponents of all monomials of `d` variables of total degree `degree`."""
    out = []
    for picked in itertools.combinations_with_replacement(range(d), degree):
        out.append(tuple(picked.count(i) for i in range(d)))
    return out


def moment(rule: PointSet, exponents: tuple[int, ...]) -> float:
    terms = np.prod(rule.points ** np.array(exponents)[:, None], axis=0)
    return float((rule.mean_weights * terms).sum())


def gaussian_moment(exponents: tuple[int, ...]) -> float:
    """E of a monomial under N(0, I): zero for an odd power, else products of (k - 1)!!."""
    if any(k % 2 for k in exponents):
        return 0.0
    return float(math.prod(math.prod(range(k - 1, 0, -2)) for k in exponents))


def exact_degree(rule: PointSet, up_to: int) -> int:
    """Largest total degree up to which all moments are those of N(0, I), to 1e-9."""
    d = rule.points.shape[0]
    for degree in range(up_to + 1):
        for exponents in powers(d, degree):
            if not abs(moment(rule, exponents) - gaussian_moment(exponents)) < 1e-9:
                return degree - 1
    return up_to


# -- weights and places of the points --------------------------------------------------------------


@pytest.mark.parametrize("d", SIZES)
def test_cubature_has_2n_points_of_equal_weight_at_root_n(d):
    # Arasaratnam & Haykin 2009, third-degree rule
    rule = Cubature().points(d)
    assert rule.points.shape == (d, 2 * d)
    np.testing.assert_allclose(rule.mean_weights, 1 / (2 * d), rtol=1e-15)
    np.testing.assert_array_equal(rule.cov_weights, rule.mean_weights)
    lengths = np.linalg.norm(rule.points, axis=0)
    np.testing.assert_allclose(lengths, math.sqrt(d), rtol=1e-15)
    assert len({tuple(p) for p in rule.points.T}) == 2 * d


@pytest.mark.parametrize("d", SIZES)
@pytest.mark.parametrize("kappa", [0.5, 1.0, 2.0, "gaussian"])
def test_symmetric_weights(d, kappa):
    # Julier et al. 2000: centre kappa/(n + kappa), others 1/(2 (n + kappa)), at sqrt(n + kappa)
    k = 3.0 - d if kappa == "gaussian" else kappa
    rule = Symmetric(kappa=kappa).points(d)
    assert rule.points.shape == (d, 2 * d + 1)
    assert rule.centre is not None
    others = np.arange(2 * d + 1) != rule.centre
    np.testing.assert_array_equal(rule.points[:, rule.centre], 0)
    assert rule.mean_weights[rule.centre] == pytest.approx(k / (d + k), rel=1e-14, abs=1e-15)
    np.testing.assert_allclose(rule.mean_weights[others], 0.5 / (d + k), rtol=1e-14)
    lengths = np.linalg.norm(rule.points[:, others], axis=0)
    np.testing.assert_allclose(lengths, math.sqrt(d + k), rtol=1e-14)
    np.testing.assert_array_equal(rule.cov_weights, rule.mean_weights)


def test_scaled_numbers_for_three_states():
    # Julier 2002 at n = 3, alpha = 1e-3, beta = 2, kappa = 0: lambda = -2.999997, derived
    rule = Scaled(alpha=1e-3, beta=2.0, kappa=0.0).points(3)
    assert rule.centre is not None
    others = np.arange(7) != rule.centre
    radius = np.linalg.norm(rule.points[:, others], axis=0)
    np.testing.assert_allclose(radius**2 - 3, -2.999997, rtol=0, atol=1e-9)
    assert rule.mean_weights[rule.centre] == pytest.approx(-999999.0, rel=1e-12)
    assert rule.cov_weights[rule.centre] == pytest.approx(-999996.000001, rel=0, abs=1e-7)
    np.testing.assert_allclose(rule.mean_weights[others], 1e6 / 6, rtol=1e-12)
    np.testing.assert_allclose(rule.cov_weights[others], 166666.6667, rtol=1e-9)


@pytest.mark.parametrize("d", SIZES)
@pytest.mark.parametrize(("alpha", "beta", "kappa"), [(0.5, 2.0, 0.0), (1.0, 0.0, 1.0)])
def test_scaled_weights(d, alpha, beta, kappa):
    # Julier 2002: lambda = alpha^2 (n + kappa) - n, covariance centre + 1 - alpha^2 + beta
    lam = alpha**2 * (d + kappa) - d
    rule = Scaled(alpha=alpha, beta=beta, kappa=kappa).points(d)
    centre = rule.mean_weights[rule.centre]
    assert centre == pytest.approx(lam / (d + lam), rel=1e-14)
    assert rule.cov_weights[rule.centre] == pytest.approx(centre + 1 - alpha**2 + beta, rel=1e-14)
    np.testing.assert_allclose(np.abs(rule.points).max(axis=1), math.sqrt(d + lam), rtol=1e-14)


# -- moment orders ---------------------------------------------------------------------------------


@pytest.mark.parametrize("d", SIZES)
@pytest.mark.parametrize(
    ("options", "spread"),
    [
        (Symmetric(), lambda d: 3.0),
        (Symmetric(kappa=0.5), lambda d: d + 0.5),
        (Scaled(alpha=0.5, beta=2.0, kappa=0.0), lambda d: 0.25 * d),
        (Cubature(), lambda d: float(d)),
    ],
    ids=["symmetric", "symmetric-half", "scaled", "cubature"],
)
def test_fourth_moments(options, spread, d):
    # n + kappa for a fourth power and nothing for mixed ones: the points lie on the axes
    rule = options.points(d)
    for exponents in powers(d, 4):
        want = spread(d) if max(exponents) == 4 else 0.0
        assert moment(rule, exponents) == pytest.approx(want, abs=1e-9)


@pytest.mark.parametrize(
    ("options", "degrees"),
    [
        # the fourth power 3 is right with kappa = 3 - n, x1^2 x2^2 is not: degree 5 at n = 1 only
        (Symmetric(), {1: 5, 2: 3, 3: 3, 4: 3, 6: 3}),
        (Symmetric(kappa=0.5), {1: 3, 2: 3, 3: 3, 4: 3, 6: 3}),
        (Scaled(alpha=0.5, beta=2.0, kappa=0.0), {1: 3, 2: 3, 3: 3, 4: 3, 6: 3}),
        # at n = 3 its fourth power happens to be right, the mixed one is not
        (Cubature(), {1: 3, 2: 3, 3: 3, 4: 3, 6: 3}),
    ],
    ids=["symmetric", "symmetric-half", "scaled", "cubature"],
)
def test_degree_over_all_monomials(options, degrees):
    found = {d: exact_degree(options.points(d), 6) for d in degrees}
    assert found == degrees


def test_sixth_power_of_the_symmetric_set_in_one_dimension():
    # three Gauss-Hermite points: 9 where a Gaussian has 15
    assert moment(Symmetric().points(1), (6,)) == pytest.approx(9.0, abs=1e-9)


@pytest.mark.parametrize("d", SIZES)
@pytest.mark.parametrize("name", RULES)
def test_every_rule_is_as_exact_as_it_declares(name, d):
    rule = RULES[name]().points(d)
    assert rule.degree >= 2
    assert exact_degree(rule, rule.degree) == rule.degree


# -- facts of the trade (common practice, no source) -----------------------------------------------


@pytest.mark.parametrize("d", SIZES)
@pytest.mark.parametrize("name", RULES)
def test_mean_weights_of_every_rule_sum_to_one(name, d):
    assert RULES[name]().points(d).mean_weights.sum() == pytest.approx(1, abs=1e-12)


def identity_model(d: int) -> Model:
    space = StateSpace(Vector("x", d))

    def stay(x, u, w, p, dt):
        return x.x

    def no_noise(p, dt):
        return ()

    return trace(
        ModelSpec(
            space=space,
            transition=stay,
            noise=StateSpace(),
            noise_covariance=no_noise,
            sensors=(),
        )
    )


@pytest.mark.parametrize("d", SIZES)
def test_identity_transform_returns_mean_and_covariance_for_every_rule(d):
    rng = np.random.default_rng(d)
    root = rng.standard_normal((d, d, 2))
    cov = np.einsum("ikm,jkm->ijm", root, root) + 0.1 * np.eye(d)[:, :, None]
    mean = 10 * rng.standard_normal((d, 2))
    prior = GaussianPrior(StateSpace(Vector("x", d)), mean, cov)
    model = identity_model(d)
    u = np.zeros((0, 2))
    for name, options in RULES.items():
        bound = SigmaPoint(points=options()).bind(model, Streams(0, "test", "p", (0, 1)))
        moved = bound.predict(bound.start(prior), u, 1.0)
        scale = np.abs(options().points(d).mean_weights).sum()
        np.testing.assert_allclose(moved.mean, mean, atol=1e-13 * scale, rtol=0, err_msg=name)
        np.testing.assert_allclose(moved.cov, cov, atol=1e-12 * scale, rtol=0, err_msg=name)


def curved_model() -> Model:
    space = StateSpace(Vector("x", 2))

    def bend(x, u, w, p, dt):
        a, b = x.x
        return (np.sin(a) + b * b, np.exp(b) * np.cos(a))

    def no_noise(p, dt):
        return ()

    return trace(
        ModelSpec(
            space=space,
            transition=bend,
            noise=StateSpace(),
            noise_covariance=no_noise,
            sensors=(),
        )
    )


@pytest.mark.parametrize("name", RULES)
def test_means_differ_a_hundredfold_less_for_a_tenfold_smaller_spread(name):
    # the difference is tr(Hessian P)/2 to leading order
    model = curved_model()
    streams = Streams(0, "test", "p", (0, 1))
    mean = np.array([[0.7, -0.4], [0.3, 1.1]])
    u = np.zeros((0, 2))
    sets = SigmaPoint(points=RULES[name]()).bind(model, streams)
    lines = Linearised().bind(model, streams)
    shape = np.array([[1.0, 0.3], [0.3, 0.5]])
    gaps = []
    for spread in (1e-1, 1e-2, 1e-3):
        cov = np.repeat((spread**2 * shape)[:, :, None], 2, axis=2)
        prior = GaussianPrior(model.space, mean, cov)
        a = sets.predict(sets.start(prior), u, 1.0).mean
        b = lines.predict(lines.start(prior), u, 1.0).mean
        gaps.append(a - b)
    np.testing.assert_allclose(gaps[0] / gaps[1], 100, rtol=0.02)
    np.testing.assert_allclose(gaps[1] / gaps[2], 100, rtol=1e-3)


def test_larger_alpha_and_kappa_spread_the_points():
    def radius(rule: PointSet) -> float:
        return float(np.linalg.norm(rule.points, axis=0).max())

    alphas = [radius(Scaled(alpha=a).points(4)) for a in (1e-3, 0.1, 0.5, 1.0)]
    kappas = [radius(Symmetric(kappa=k).points(4)) for k in (-1.0, 0.0, 1.0, 3.0)]
    assert alphas == sorted(set(alphas))
    assert kappas == sorted(set(kappas))
