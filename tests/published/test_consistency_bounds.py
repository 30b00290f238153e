"""Consistency statistics of exact filters against the published acceptance regions.

Y. Bar-Shalom, X. R. Li, T. Kirubarajan, Wiley 2001, section 5.4 (regions, from memory);
NIST/SEMATECH e-Handbook of Statistical Methods, 1.3.6.7.4 (chi-square quantiles, from memory).
The Kalman filter is exact on these problems, so its NEES and NIS must fall into the regions as
often as the level says; the tolerance is four standard errors of that share.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from flyoff.estimators.contract import Weighted, moments
from flyoff.estimators.linearised import Linearised
from flyoff.evidence.intervals import nees_band
from flyoff.filtering import run_filter
from flyoff.models.priors import GaussianPrior
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.recordings import Recording, draw_start, simulate
from flyoff.scores.consistency import ConsistencyTrack
from flyoff.scores.contract import Context, Divergence
from tests.published.constant_velocity import SPACE, constant_velocity

RUNS, STEPS = 8000, 100
P0 = np.array([[10.0, 4.0], [4.0, 10.0]])


class Innovations:
    """Whitened innovations (T, M) of a one-component sensor."""

    def __init__(self) -> None:
        self.white: list[np.ndarray] = []

    def observe(self, step):
        ((_, innovation),) = step.innovations
        self.white.append(innovation.residual[0] / innovation.factor[0, 0])


def track_of(recording: Recording, model, filter_model, watch=()) -> ConsistencyTrack:
    track = ConsistencyTrack(Context(filter_model, (), (), Divergence(), recording))
    bound = Linearised().bind(filter_model, Streams(1, "test", "band", recording.runs))
    outcome = run_filter(bound, filter_model, recording, [track, *watch])
    assert not outcome.fault.any()
    return track


@pytest.fixture(scope="module")
def model():
    return constant_velocity()


@pytest.fixture(scope="module")
def recording(model):
    streams = Streams(20, "test", "band", range(RUNS))
    times = np.arange(STEPS + 1.0)
    start = np.zeros((2, RUNS))
    prior = draw_start(SPACE, start, P0, streams)
    inputs = np.zeros((STEPS, 0, RUNS))
    truth, readings = simulate(model, times, start, inputs, streams)
    return Recording(times, truth, inputs, readings, prior, streams.runs)


@pytest.fixture(scope="module")
def innovations():
    return Innovations()


@pytest.fixture(scope="module")
def exact(model, recording, innovations):
    return track_of(recording, model, model, [innovations])


@pytest.fixture(scope="module")
def overconfident(model, recording):
    """The same means with half the covariance: every assumed variance is halved."""
    half = GaussianPrior(SPACE, recording.prior.mean, recording.prior.cov / 2)
    return track_of(replace(recording, prior=half), model, model.assuming(0.5, 0.5))


def assert_share(inside: np.ndarray, level: float) -> None:
    """The share of independent outcomes is the level within four standard errors."""
    error = math.sqrt(level * (1 - level) / inside.size)
    assert abs(inside.mean() - level) < 4 * error


def nees(track: ConsistencyTrack, d: int, rows: slice) -> np.ndarray:
    """NEES of the joint state, total of the d components."""
    return d * track.nees[""][rows]


@pytest.mark.parametrize(
    ("d", "runs", "low", "high"),
    [
        (2, 50, 1.4844, 2.5912),  # [1.5, 2.6] in the book
        (4, 100, 3.4648, 4.5731),
        (5, 250, 4.6156, 5.3995),
        (2, 1, 0.0506, 7.3778),
        (1, 100, 0.7422, 1.2956),  # time average of a hundred one-component readings
    ],
)
def test_acceptance_regions(d, runs, low, high):
    got = d * np.array(nees_band(d, runs))
    np.testing.assert_allclose(got, [low, high], rtol=0, atol=5.1e-5)


# far apart in time: the errors of the filter forget in about four steps
APART = slice(19, None, 20)


@pytest.mark.parametrize(
    ("low", "high", "level"),
    [(0.0, 5.991, 0.95), (0.0, 9.210, 0.99), (0.0506, 7.3778, 0.95)],
)
def test_nees_of_single_runs_with_two_states(exact, low, high, level):
    value = nees(exact, 2, APART)
    assert_share((value >= low) & (value <= high), level)


def test_average_nees_of_fifty_runs_with_two_states(exact):
    # [1.4844, 2.5912]; [1.5, 2.6] in the book
    groups = nees(exact, 2, APART).reshape(-1, RUNS // 50, 50).mean(axis=-1)
    assert_share((groups >= 1.4844) & (groups <= 2.5912), 0.95)


def test_a_filter_reporting_half_its_variance_falls_out(exact, overconfident):
    np.testing.assert_allclose(overconfident.nees[""], 2 * exact.nees[""], rtol=1e-9)
    groups = nees(overconfident, 2, APART).reshape(-1, RUNS // 50, 50).mean(axis=-1)
    inside = ((groups >= 1.4844) & (groups <= 2.5912)).mean()
    # 0.25 % of 2000 trials of an independent script; 800 trials here
    assert inside < 0.0025 + 4 * math.sqrt(0.0025 / groups.size)


@pytest.mark.parametrize(("bound", "level"), [(3.841, 0.95), (6.635, 0.99), (10.8276, 0.999)])
def test_nis_of_single_readings(exact, bound, level):
    # innovations of an exact filter are independent in time: all of them count
    assert_share(exact.nis["fix"] <= bound, level)


def test_nis_averaged_over_a_hundred_readings(exact):
    # [0.7422, 1.2956]; [0.74, 1.30] in the book
    average = exact.nis["fix"].mean(axis=0)
    assert exact.nis["fix"].shape == (100, RUNS)
    assert_share((average >= 0.7422) & (average <= 1.2956), 0.95)


@pytest.mark.parametrize("lag", [1, 2, 5])
def test_innovations_are_white(exact, innovations, lag):
    # time-average autocorrelation of fifty pairs within 1.96/sqrt(50) = 0.277 in 95 % of runs;
    # the normal approximation of its distribution costs up to one per cent
    assert exact.assessed
    white = np.array(innovations.white)
    a, b = white[:50], white[lag : 50 + lag]
    rho = (a * b).sum(axis=0) / np.sqrt((a * a).sum(axis=0) * (b * b).sum(axis=0))
    assert (np.abs(rho) <= 0.277).mean() == pytest.approx(0.95, abs=0.01 + 0.01)
    assert rho.mean() == pytest.approx(0, abs=4 / math.sqrt(50 * RUNS))


def test_average_nees_of_a_hundred_runs_with_four_states():
    # [3.4648, 4.5731] for four states and 100 runs; single runs below 9.488 in 95 %; readings with
    # missing components, correlated noise
    problem = LinearTracking(steps=40)
    model = problem.filter_model()
    rec = problem.record(Streams(4, "test", "tracking", range(RUNS)), 1.0)
    value = nees(track_of(rec, model, model), 4, slice(19, None, 20))
    assert_share(value <= 9.488, 0.95)
    groups = value.reshape(-1, RUNS // 100, 100).mean(axis=-1)
    assert_share((groups >= 3.4648) & (groups <= 4.5731), 0.95)


def test_nees_of_a_small_weighted_sample():
    # n (1 + 1/m)(m - 1)/(m - n - 2) = 22.718 at n = 15, m = 50 (derived; simulated 22.71 +- 0.16)
    d, count, runs = 15, 50, 4000
    assert d * (1 + 1 / count) * (count - 1) / (count - d - 2) == pytest.approx(22.718, abs=5e-4)
    rng = np.random.default_rng(6)
    points = rng.standard_normal((d, count, runs))
    posterior = Weighted(points, np.zeros((count, runs)), points[:, 0], np.full(runs, count))
    mean, cov, ess = moments(StateSpace(Vector("x", d)), posterior)
    assert cov is not None
    np.testing.assert_allclose(ess, count)
    # the truth is another draw of the same distribution
    e = (mean - rng.standard_normal((d, runs))).T
    got = np.einsum("ri,ri->r", e, np.linalg.solve(cov.transpose(2, 0, 1), e[..., None])[..., 0])
    assert got.mean() == pytest.approx(22.718, abs=4 * got.std() / math.sqrt(runs))
