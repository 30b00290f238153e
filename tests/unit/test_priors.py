"""Priors: moments against draws and against components, on flat and curved spaces."""

from __future__ import annotations

import math

import numpy as np
import pytest

from flyoff.models.priors import BoxPrior, GaussianPrior, MixturePrior
from flyoff.numerics.spaces import Angle, Rotation, StateSpace, Vector
from flyoff.numerics.streams import Streams

FLAT = StateSpace(Vector("position", 2, "m"), Vector("speed", 1, "m/s"))
CURVED = StateSpace(Vector("height", 1, "m"), Rotation("attitude"), Angle("heading"))
RUNS, COUNT = 20, 4000


def streams(runs: int = RUNS, seed: int = 3) -> Streams:
    return Streams(seed, "test", "prior", range(runs))


def turned(runs: int, seed: int = 0) -> np.ndarray:
    """Points (6, runs) of CURVED, with headings near the cut."""
    rng = np.random.default_rng(seed)
    x = rng.standard_normal((6, runs))
    x[1:5] /= np.linalg.norm(x[1:5], axis=0)
    x[5] = math.pi - 0.05
    return x


def gaussian(space: StateSpace, spread: float) -> GaussianPrior:
    rng = np.random.default_rng(1)
    d = space.d
    root = rng.standard_normal((d, d, RUNS)) / math.sqrt(d)
    cov = spread**2 * (np.einsum("ikm,jkm->ijm", root, root) + 0.2 * np.eye(d)[:, :, None])
    mean = turned(RUNS) if space is CURVED else 10 * rng.standard_normal((space.n, RUNS))
    return GaussianPrior(space, mean, cov)


def box(space: StateSpace, spread: float) -> BoxPrior:
    rng = np.random.default_rng(2)
    half = spread * rng.uniform(0.5, 1.5, (space.d, RUNS))
    centre = turned(RUNS) if space is CURVED else 10 * rng.standard_normal((space.n, RUNS))
    return BoxPrior(space, centre, half)


def mixture(space: StateSpace, spread: float) -> MixturePrior:
    rng = np.random.default_rng(3)
    parts = 3
    base = turned(RUNS) if space is CURVED else 10 * rng.standard_normal((space.n, RUNS))
    means = space.retract(base[:, None], 2 * spread * rng.standard_normal((space.d, parts, RUNS)))
    root = rng.standard_normal((space.d, space.d, parts, RUNS)) / math.sqrt(space.d)
    covs = spread**2 * (
        np.einsum("ikcm,jkcm->ijcm", root, root) + 0.2 * np.eye(space.d)[:, :, None, None]
    )
    # weights need not be normalised: logarithms up to a constant
    logs = np.log(rng.uniform(0.2, 1.0, (parts, RUNS))) - 700.0
    return MixturePrior(space, logs, means, covs)


MAKERS = {"gaussian": gaussian, "box": box, "mixture": mixture}


def assert_draws_agree(prior, tolerance: float = 0.0) -> None:
    """Draws have the stated mean and covariance, about the stated mean, to five standard errors."""
    space = prior.space
    draws = prior.sample(streams(), "draw", COUNT)
    assert draws.shape == (space.n, COUNT, RUNS)
    mean, cov = prior.moments()
    assert mean.shape == (space.n, RUNS)
    assert cov.shape == (space.d, space.d, RUNS)
    dev = space.local(mean[:, None], draws)
    sigma = np.sqrt(np.einsum("iim->im", cov))
    white = dev / sigma[:, None]
    # averages over all runs, each in its own frame
    assert np.abs(white.mean(axis=(1, 2))).max() < 5 / math.sqrt(COUNT * RUNS) + tolerance
    assert np.abs(white.mean(axis=1)).max() < 5.5 / math.sqrt(COUNT) + tolerance
    correlation = cov / (sigma[:, None] * sigma[None])
    got = np.einsum("inm,jnm->ijm", white, white) / COUNT
    # the fourth moment of a mixture component may exceed the Gaussian three
    assert np.abs(got - correlation).max() < 5.5 * math.sqrt(4 / COUNT) + tolerance
    assert np.abs((got - correlation).mean(axis=-1)).max() < (
        5 * math.sqrt(4 / COUNT / RUNS) + tolerance
    )


@pytest.mark.parametrize("kind", MAKERS)
def test_draws_have_the_stated_moments(kind):
    assert_draws_agree(MAKERS[kind](FLAT, 3.0))


@pytest.mark.parametrize("kind", ["gaussian", "box"])
def test_draws_have_the_stated_moments_on_rotations(kind):
    # tangent draws are recovered exactly while they stay within half a turn
    assert_draws_agree(MAKERS[kind](CURVED, 0.5))


def test_draws_of_a_mixture_have_the_stated_moments_on_rotations():
    # components hold their covariance in their own frame: equal to first order in the spread
    assert_draws_agree(MAKERS["mixture"](CURVED, 0.02), tolerance=0.03)


@pytest.mark.parametrize("kind", MAKERS)
@pytest.mark.parametrize("space", [FLAT, CURVED], ids=["flat", "curved"])
def test_draws_depend_on_their_name_only(kind, space):
    prior = MAKERS[kind](space, 0.3)
    whole = prior.sample(streams(), "draw", 7)
    again = prior.sample(streams(), "draw", 7)
    np.testing.assert_array_equal(again, whole)
    assert not np.isin(prior.sample(streams(), "other", 7)[0], whole[0]).any()
    for cut in (slice(0, 2), slice(5, 11), slice(18, 20)):
        part = prior.runs(cut).sample(streams().select(cut), "draw", 7)
        np.testing.assert_array_equal(part, whole[..., cut])
    # runs picked one by one, the last of them twice, as a padded batch does
    index = np.array([4, 19, 19])
    draws = prior.runs(index).sample(Streams(3, "test", "prior", index.tolist()), "draw", 7)
    np.testing.assert_array_equal(draws, whole[..., index])


@pytest.mark.parametrize("kind", MAKERS)
@pytest.mark.parametrize("space", [FLAT, CURVED], ids=["flat", "curved"])
def test_moments_do_not_depend_on_the_batch(kind, space):
    prior = MAKERS[kind](space, 0.3)
    for index in (slice(2, 9), np.array([4, 5]), np.array([7, 19, 19])):
        part = prior.runs(index)
        for a, b in zip(part.moments(), prior.moments(), strict=True):
            np.testing.assert_array_equal(a, b[..., index])


@pytest.mark.parametrize("kind", MAKERS)
def test_draws_of_rotations_have_unit_length(kind):
    draws = MAKERS[kind](CURVED, 0.5).sample(streams(), "draw", 50)
    np.testing.assert_allclose(np.linalg.norm(draws[1:5], axis=0), 1, rtol=0, atol=1e-14)
    assert np.abs(draws[5]).max() <= math.pi


def test_draws_of_a_box_stay_inside_and_fill_it():
    prior = box(FLAT, 3.0)
    away = (prior.sample(streams(), "draw", COUNT) - prior.centre[:, None]) / prior.half[:, None]
    assert np.abs(away).max() <= 1
    for part in away:
        counts = np.histogram(part, bins=10, range=(-1, 1))[0]
        np.testing.assert_allclose(counts, part.size / 10, atol=5 * math.sqrt(part.size / 10))


def test_moments_of_a_box():
    # half^2/3 on the diagonal: derived
    prior = box(CURVED, 0.4)
    mean, cov = prior.moments()
    np.testing.assert_array_equal(mean, prior.centre)
    for m in range(RUNS):
        np.testing.assert_allclose(cov[..., m], np.diag(prior.half[:, m] ** 2 / 3), rtol=1e-15)


def test_moments_of_a_two_part_mixture():
    # weights 1:3 at -1 and 1 with variances 0.5 and 0.1: by hand
    space = StateSpace(Vector("x", 1))
    logs = np.log(np.array([[1.0, 2.0], [3.0, 6.0]]))
    means = np.array([[[-1.0, -1.0], [1.0, 1.0]]])
    covs = np.array([[[[0.5, 0.5], [0.1, 0.1]]]])
    mean, cov = MixturePrior(space, logs, means, covs).moments()
    np.testing.assert_allclose(mean, 0.5, rtol=1e-14)
    np.testing.assert_allclose(cov, 0.25 * 0.5 + 0.75 * 0.1 + 0.75, rtol=1e-14)


def test_a_mixture_across_the_cut_keeps_its_heading():
    space = StateSpace(Angle("heading"))
    means = np.array([[[3.1, 3.1], [-3.1, -3.1]]])
    prior = MixturePrior(space, np.zeros((2, 2)), means, np.full((1, 1, 2, 2), 1e-4))
    mean, cov = prior.moments()
    assert np.abs(np.abs(mean) - math.pi).max() < 1e-12
    np.testing.assert_allclose(cov, 1e-4 + (math.pi - 3.1) ** 2, rtol=1e-9)


def test_share_of_mixture_components():
    space = StateSpace(Vector("x", 1))
    logs = np.log(np.array([0.2, 0.0 + 1e-300, 0.8]))[:, None] + np.zeros(RUNS)
    means = np.array([0.0, 10.0, 20.0])[None, :, None] + np.zeros((1, 3, RUNS))
    prior = MixturePrior(space, logs, means, np.full((1, 1, 3, RUNS), 0.01))
    draws = prior.sample(streams(), "draw", COUNT)[0]
    share = (draws > 15).mean()
    assert share == pytest.approx(0.8, abs=5 * math.sqrt(0.16 / draws.size))
    assert not ((draws > 5) & (draws < 15)).any()


# -- components ------------------------------------------------------------------------------------


def moments_of(space, logs, means, covs):
    return MixturePrior(space, logs, means, covs).moments()


@pytest.mark.parametrize("k", [1, 2, 3, 8])
def test_components_of_a_box_reproduce_its_moments(k):
    prior = box(FLAT, 3.0)
    logs, means, covs = prior.components(k)
    assert logs.shape == (k, RUNS)
    assert means.shape == (3, k, RUNS)
    assert covs.shape == (3, 3, k, RUNS)
    np.testing.assert_allclose(np.exp(logs).sum(axis=0), 1, rtol=1e-14)
    mean, cov = moments_of(FLAT, logs, means, covs)
    np.testing.assert_allclose(mean, prior.moments()[0], rtol=0, atol=1e-12)
    np.testing.assert_allclose(cov, prior.moments()[1], rtol=1e-12, atol=1e-12)
    # along one axis, the widest
    moved = np.ptp(means, axis=1).max(axis=1) > 0
    assert moved.sum() == (k > 1)
    if k > 1:
        assert np.argmax(moved) == np.argmax(prior.half.max(axis=1))


@pytest.mark.parametrize("k", [2, 5])
def test_components_of_a_wide_heading_box_reproduce_its_moments(k):
    # rotations about one axis commute: exact there; the other axes are narrow
    half = np.array([[0.1], [1e-3], [1e-3], [1.5], [0.2]]) * np.ones(RUNS)
    prior = BoxPrior(CURVED, turned(RUNS), half)
    logs, means, covs = prior.components(k)
    np.testing.assert_allclose(np.linalg.norm(means[1:5], axis=0), 1, atol=1e-14)
    dev = CURVED.local(prior.centre[:, None], means)
    places = 1.5 * (2 * np.arange(k) + 1 - k) / k
    np.testing.assert_allclose(dev[3], np.repeat(places[:, None], RUNS, axis=1), atol=1e-12)
    w = np.exp(logs)
    spread = np.einsum("km,ikm,jkm->ijm", w, dev, dev) + np.einsum("km,ijkm->ijm", w, covs)
    np.testing.assert_allclose(spread, prior.moments()[1], rtol=1e-12, atol=1e-14)


def test_components_of_the_others_are_themselves():
    prior = gaussian(CURVED, 0.3)
    logs, means, covs = prior.components(5)
    np.testing.assert_array_equal(logs, np.zeros((1, RUNS)))
    np.testing.assert_array_equal(means[:, 0], prior.mean)
    np.testing.assert_array_equal(covs[:, :, 0], prior.cov)
    parts = mixture(FLAT, 1.0)
    for a, b in zip(parts.components(5), (parts.log_weights, parts.means, parts.covs), strict=True):
        np.testing.assert_array_equal(a, b)


# -- type and safety -------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", MAKERS)
@pytest.mark.parametrize("space", [FLAT, CURVED], ids=["flat", "curved"])
def test_cast(kind, space):
    prior = MAKERS[kind](space, 0.3)
    single = prior.cast(np.dtype(np.float32))
    arrays = [*single.moments(), single.sample(streams(), "draw", 5), *single.components(3)]
    for a in arrays:
        assert a.dtype == np.float32
    wide = [*prior.moments(), prior.sample(streams(), "draw", 5), *prior.components(3)]
    for a, b in zip(arrays, wide, strict=True):
        np.testing.assert_allclose(a, b, rtol=2e-4, atol=2e-4)


@pytest.mark.parametrize("kind", MAKERS)
def test_nothing_is_modified(kind):
    prior = MAKERS[kind](CURVED, 0.3)
    fields = [v for v in vars(prior).values() if isinstance(v, np.ndarray)]
    kept = [a.copy() for a in fields]
    for a in fields:
        a.flags.writeable = False
    prior.moments()
    prior.sample(streams(), "draw", 5)
    prior.components(4)
    prior.runs(slice(0, 3)).moments()
    for a, b in zip(fields, kept, strict=True):
        np.testing.assert_array_equal(a, b)
