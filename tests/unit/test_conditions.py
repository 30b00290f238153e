"""Conditions change what they say and nothing else."""

from __future__ import annotations

import numpy as np
import pytest

from flyoff.numerics.streams import Streams
from flyoff.problems.conditions import (
    AssumedMeasurementNoise,
    AssumedProcessNoise,
    Dropout,
    InitialErrorScale,
    apply_to_model,
    apply_to_recording,
    initial_error_scale,
)
from flyoff.problems.coordinated_turn import CoordinatedTurn

PROBLEM = CoordinatedTurn(steps=50)


def streams(label="x"):
    return Streams(4, "test", label, range(100))


def test_conditions_are_paired():
    """Truth and surviving readings are the same numbers under every condition."""
    plain = PROBLEM.record(streams(), 1.0)
    rough = PROBLEM.record(streams(), 4.0)
    lossy = apply_to_recording((Dropout(value=0.3),), plain, streams())
    np.testing.assert_array_equal(plain.truth, rough.truth)
    kept = np.isfinite(lossy.readings[0].values)
    np.testing.assert_array_equal(lossy.readings[0].values[kept], plain.readings[0].values[kept])
    assert np.isfinite(plain.readings[0].values).all(), "the original was modified"


def test_dropout_loses_whole_readings_at_the_stated_rate():
    plain = PROBLEM.record(streams(), 1.0)
    lossy = apply_to_recording((Dropout(value=0.3),), plain, streams())
    gone = np.isnan(lossy.readings[0].values)
    assert (gone.all(axis=1) == gone.any(axis=1)).all()
    assert gone[:, 0].mean() == pytest.approx(0.3, abs=0.02)
    assert 0 < np.corrcoef(gone[:-1, 0].ravel(), gone[1:, 0].ravel())[0, 1] ** 2 < 0.01


def test_initial_errors_scale_and_the_prior_does_not_know():
    plain, rough = (PROBLEM.record(streams(), s) for s in (1.0, 4.0))
    e1 = plain.prior.mean - plain.truth[0]
    e4 = rough.prior.mean - rough.truth[0]
    np.testing.assert_allclose(e4, 4 * e1, rtol=1e-9)
    np.testing.assert_array_equal(plain.prior.cov, rough.prior.cov)
    assert e1[0].std() == pytest.approx(PROBLEM.position_sigma, rel=0.25)


def test_changes_compose():
    model = PROBLEM.filter_model()
    changes = (AssumedMeasurementNoise(value=4.0), AssumedProcessNoise(value=2.0))
    other = apply_to_model(changes, model)
    x, u = np.ones((5, 3)), np.zeros((0, 3))
    r = model.sensors["radar"].covariance(x, u, model.parameters)
    np.testing.assert_allclose(other.sensors["radar"].covariance(x, u, model.parameters), 4 * r)
    np.testing.assert_allclose(other.added_noise(x, u, 1.0), 2 * model.added_noise(x, u, 1.0))
    np.testing.assert_allclose(
        other.noise_factor(1.0, float), 2**0.5 * model.noise_factor(1.0, float)
    )
    assert initial_error_scale((InitialErrorScale(value=3.0), InitialErrorScale(value=2.0))) == 6
