"""The Nile series: a local level model with published values and a second filter beside it.

J. Durbin, S. J. Koopman, "Time Series Analysis by State Space Methods", 2nd ed., Oxford 2012,
chapter 2: annual flow at Aswan 1871-1970, variances 15099 (observation) and 1469.1 (level), from
memory. Log-likelihoods -632.5456 (exact diffuse) and -641.5856 (P1 = 1e7) are quoted in public
tests of the R package KFAS; the further digits below are those of an independent script. The data
and the second filter are those of statsmodels.
"""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.datasets import nile
from statsmodels.tsa.statespace.kalman_filter import KalmanFilter

from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.filtering import run_filter
from flyoff.models.model import ModelSpec, SensorSpec, trace
from flyoff.models.priors import GaussianPrior
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.recordings import Readings, Recording

OBSERVATION, LEVEL = 15099.0, 1469.1
FLOW = nile.load().data["volume"].to_numpy(dtype=float)
SPACE = StateSpace(Vector("level", 1, "1", 1000.0))
FAMILIES = {
    "kalman": Kalman(),
    "joseph": Linearised(),
    "short": Linearised(form="short"),
    "cubature": SigmaPoint(points=Cubature()),
    "symmetric": SigmaPoint(points=Symmetric()),
}


@pytest.fixture(scope="module")
def model():
    return trace(
        ModelSpec(
            space=SPACE,
            transition=lambda x, u, w, p, dt: x.level + w.level,
            noise=SPACE,
            noise_covariance=lambda p, dt: ((LEVEL * dt,),),
            sensors=(
                SensorSpec(
                    "gauge",
                    StateSpace(Vector("flow", 1)),
                    lambda x, u, p: x.level,
                    lambda x, u, p: ((OBSERVATION,),),
                    rate=1.0,
                ),
            ),
            linear=True,
        )
    )


class Track:
    """Everything of the first run, year by year."""

    def __init__(self) -> None:
        self.rows: list[tuple[float, ...]] = []

    def observe(self, step):
        ((_, innovation),) = step.innovations
        v, f = innovation.residual[0, 0], innovation.factor[0, 0, 0] ** 2
        like = innovation.log_likelihood[0]
        self.rows.append((step.mean[0, 0], step.cov[0, 0, 0], v, f, like))

    @property
    def columns(self) -> dict[str, np.ndarray]:
        names = ("level", "variance", "v", "f", "log_likelihood")
        return dict(zip(names, np.array(self.rows).T, strict=True))


def filtered(model, estimator, flow, mean: float, variance: float) -> dict[str, np.ndarray]:
    """The filter on a series, from N(mean, variance) one year before its first value."""
    years = len(flow)
    steps = np.arange(1, years + 1)
    prior = GaussianPrior(SPACE, np.full((1, 2), mean), np.full((1, 1, 2), variance))
    recording = Recording(
        times=np.arange(years + 1.0),
        truth=np.full((years + 1, 1, 2), np.nan),
        inputs=np.zeros((years, 0, 2)),
        readings=(Readings("gauge", steps, steps, np.repeat(flow[:, None, None], 2, axis=2)),),
        prior=prior,
        runs=(0, 1),
    )
    track = Track()
    outcome = run_filter(
        estimator.bind(model, Streams(1, "test", "nile", range(2))), model, recording, [track]
    )
    assert not outcome.fault.any()
    return track.columns


def second_filter(flow, start) -> object:
    """The state-space filter of statsmodels on the same model."""
    kf = KalmanFilter(k_endog=1, k_states=1, k_posdef=1)
    kf.bind(np.ascontiguousarray(flow[:, None]))
    for name, value in (
        ("design", 1.0), ("obs_cov", OBSERVATION), ("transition", 1.0), ("selection", 1.0),
        ("state_cov", LEVEL),
    ):  # fmt: skip
        kf[name] = np.array([[value]])
    start(kf)
    return kf.filter()


def test_the_series():
    assert len(FLOW) == 100
    assert FLOW[:3].tolist() == [1120, 1160, 963]
    assert FLOW.mean() == pytest.approx(919.35, abs=1e-9)


@pytest.fixture(scope="module", params=FAMILIES)
def known(request, model):
    """a1 = 0, P1 = 1e7 for the level of 1871: the filter starts a year earlier, so less LEVEL."""
    return filtered(model, FAMILIES[request.param], FLOW, 0.0, 1e7 - LEVEL)


@pytest.fixture(scope="module", params=FAMILIES)
def diffuse(request, model):
    """Exactly diffuse: the first flow is all that is known of the first level.

    The filter then starts from N(1120, 15099) in 1871 and sees the other 99 flows.
    """
    return filtered(model, FAMILIES[request.param], FLOW[1:], FLOW[0], OBSERVATION)


def test_log_likelihood_of_100_terms(known):
    assert known["log_likelihood"].sum() == pytest.approx(-641.585578, abs=1e-5)


def test_log_likelihood_of_99_terms(diffuse):
    assert diffuse["log_likelihood"].sum() == pytest.approx(-632.545625, abs=1e-5)


def test_second_and_third_year(diffuse):
    """a2 = 1120, P2 = 16568.1, v2 = 40, F2 = 31667.1, a3 = 1140.9278, P3 = 9368.8364."""
    assert diffuse["v"][0] == pytest.approx(40, abs=1e-9)
    assert FLOW[1] - diffuse["v"][0] == pytest.approx(1120, abs=1e-9)
    assert diffuse["f"][0] == pytest.approx(31667.1, abs=1e-6)
    assert diffuse["f"][0] - OBSERVATION == pytest.approx(16568.1, abs=1e-6)
    # the level is a random walk, so a3 is the filtered level of the second year
    assert diffuse["level"][0] == pytest.approx(1140.9278, abs=5e-5)
    assert diffuse["variance"][0] + LEVEL == pytest.approx(9368.8364, abs=5e-5)
    assert FLOW[2] - diffuse["v"][1] == pytest.approx(1140.9278, abs=5e-5)


def test_steady_state_and_the_last_level_from_a_known_start(known):
    assert_settled(known)


def test_steady_state_and_the_last_level_from_a_diffuse_start(diffuse):
    assert_settled(diffuse)


def assert_settled(got) -> None:
    """After a hundred years the start is forgotten to rounding."""
    predicted = got["f"][-1] - OBSERVATION
    assert predicted == pytest.approx(5501.257942, abs=1e-6)
    assert predicted / got["f"][-1] == pytest.approx(0.267048, abs=1e-6)
    assert got["variance"][-1] == pytest.approx(4032.157942, abs=1e-6)
    assert got["level"][-1] == pytest.approx(798.370293, abs=1e-6)
    # P = (q + sqrt(q^2 + 4 q r)) / 2 solves the scalar Riccati equation
    closed = (LEVEL + np.sqrt(LEVEL**2 + 4 * LEVEL * OBSERVATION)) / 2
    assert predicted == pytest.approx(closed, rel=1e-12)


def assert_same(got, result, first: int) -> None:
    """All years from `first` on, each number to 1e-9 of itself (residuals, of their deviation)."""
    at = slice(first, None)
    np.testing.assert_allclose(got["level"], result.filtered_state[0, at], rtol=1e-9)
    np.testing.assert_allclose(got["variance"], result.filtered_state_cov[0, 0, at], rtol=1e-9)
    np.testing.assert_allclose(got["f"], result.forecasts_error_cov[0, 0, at], rtol=1e-9)
    scale = np.sqrt(got["f"])
    residual = result.forecasts_error[0, at]
    np.testing.assert_allclose(got["v"] / scale, residual / scale, rtol=0, atol=1e-9)
    np.testing.assert_allclose(got["log_likelihood"], result.llf_obs[at], rtol=1e-9)


def test_statsmodels_from_a_known_start(known):
    result = second_filter(FLOW, lambda kf: kf.initialize_known(np.zeros(1), np.array([[1e7]])))
    assert_same(known, result, 0)
    assert result.llf_obs.sum() == pytest.approx(-641.585578, abs=1e-5)


def test_statsmodels_from_a_diffuse_start(diffuse):
    """Its exact diffuse filter, whose total counts log(2 pi) / 2 for the first flow too."""
    result = second_filter(FLOW, lambda kf: kf.initialize_diffuse())
    assert_same(diffuse, result, 1)
    total = diffuse["log_likelihood"].sum()
    assert result.llf_obs.sum() == pytest.approx(total - 0.5 * np.log(2 * np.pi), abs=1e-6)
