"""Scores on hand-made runs, where the right count is known."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from flyoff.filtering import Outcome, Step, run_filter
from flyoff.numerics import linalg
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.problems.contract import Quantity, block_error
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.scores.accuracy import EDGES, Accuracy
from flyoff.scores.consistency import Consistency
from flyoff.scores.contract import Context, Divergence, Window, held
from flyoff.scores.divergence import LostRuns

SPACE = StateSpace(Vector("position", 1, "m"))
STEPS = 40


def context(divergence=None, runs=3, truth=None):
    recording = SimpleNamespace(
        steps=STEPS, runs=tuple(range(runs)), dt=0.5,
        truth=np.zeros((STEPS + 1, 1, runs)) if truth is None else truth,
    )  # fmt: skip
    return Context(
        SimpleNamespace(space=SPACE, sensors={}),
        (Quantity("position", "m", block_error(SPACE, "position")),),
        (Window("all-time", 1, STEPS), Window("late", 21, STEPS)),
        divergence or Divergence(),
        recording,
    )


def play(context, errors, variance, alive=None):
    """Feed errors (T, M) with variance (T, M) into every track."""
    for k in range(1, STEPS + 1):
        mean = -errors[k - 1][None]
        cov = variance[k - 1][None, None]
        low, _ = linalg.cholesky(cov)
        ok = np.ones(errors.shape[1], bool) if alive is None else alive[k - 1]
        for track in context.tracks.values():
            track.observe(Step(k, context.recording.truth[k], mean, cov, low, None, ok, ()))


def no_fault(runs=3):
    return Outcome(np.zeros(runs, np.uint8), np.zeros(runs, int))


def test_accuracy_of_known_errors():
    c = context()
    score = Accuracy(c)
    errors = np.linspace(1, 2, STEPS)[:, None] * np.array([1.0, -2.0, 3.0])
    play(c, errors, np.ones_like(errors))
    out = score.per_run(no_fault())
    for window, rows in (("all-time", slice(0, 40)), ("late", slice(20, 40))):
        part = np.abs(errors[rows])
        np.testing.assert_allclose(out[f"{window}/position/rms"], np.sqrt(np.mean(part**2, axis=0)))
        np.testing.assert_allclose(out[f"{window}/position/max"], part.max(axis=0))
        np.testing.assert_allclose(out[f"{window}/position/p95"], np.quantile(part, 0.95, axis=0))
        counts = out[f"{window}/position/histogram"]
        assert (counts.sum(axis=1) == len(part)).all()
        for run in range(3):
            np.testing.assert_array_equal(counts[run], np.histogram(part[:, run], EDGES)[0])


def test_a_failed_run_has_no_accuracy_but_the_others_have():
    c = context()
    score = Accuracy(c)
    errors = np.ones((STEPS, 3))
    alive = np.ones((STEPS, 3), bool)
    alive[30:, 1] = False
    play(c, errors, errors, alive)
    out = score.per_run(Outcome(np.array([0, 1, 0], np.uint8), np.array([0, 31, 0])))
    assert np.isnan(out["late/position/rms"][1])
    np.testing.assert_array_equal(out["late/position/rms"][[0, 2]], 1)


def test_nees_and_containment():
    c = context()
    score = Consistency(c)
    rng = np.random.default_rng(0)
    errors = rng.standard_normal((STEPS, 3)) * np.array([1.0, 2.0, 0.5])
    play(c, errors, np.ones_like(errors))
    out = score.per_run(no_fault())
    np.testing.assert_allclose(out["all-time/nees/mean"], np.mean(errors**2, axis=0))
    for k in (1, 2, 3):
        share = np.mean(np.abs(errors) <= k, axis=0)
        np.testing.assert_allclose(out[f"all-time/nees/inside-{k}s"], share, atol=1e-6)
    np.testing.assert_allclose(score.profiles()["nees"], errors**2)


def test_components_without_truth_are_not_assessed():
    c = context(truth=np.full((STEPS + 1, 1, 3), np.nan))
    score = Consistency(c)
    play(c, np.ones((STEPS, 3)), np.ones((STEPS, 3)))
    assert np.isnan(score.per_run(no_fault())["all-time/nees/mean"]).all()


def lost(errors, variance=None, fault=None):
    c = context(Divergence({"position": 5.0}, hold=2.0, converge_by=5.0), errors.shape[1])
    score = LostRuns(c)
    play(c, errors, np.full_like(errors, 1e4) if variance is None else variance)
    runs = errors.shape[1]
    fault = np.zeros(runs, np.uint8) if fault is None else np.array(fault, np.uint8)
    out = score.per_run(Outcome(fault, np.zeros(runs, int)))
    return {
        k: out[f"all/runs/{k}"] for k in ("failed", "diverged", "never-converged", "overconfident")
    }


def test_lost_runs_are_told_apart():
    """Bound 5 m, hold 2 s = 4 steps, converge by 5 s = step 10."""
    errors = np.ones((STEPS, 7))
    errors[:, 1] = 9  # never within the bound
    errors[20:, 2] = 9  # away for good
    errors[20:23, 3] = 9  # away for three steps only
    errors[:9, 4] = 9  # converges at step 10, in time
    errors[:10, 5] = 9  # converges a step too late
    errors[20:24, 6] = 9  # away for four steps: latched, though it comes back
    out = lost(errors)
    np.testing.assert_array_equal(out["never-converged"], [0, 1, 0, 0, 0, 1, 0])
    np.testing.assert_array_equal(out["diverged"], [0, 0, 1, 0, 0, 0, 1])
    np.testing.assert_array_equal(out["failed"], 0)
    np.testing.assert_array_equal(out["overconfident"], 0)


def test_a_failed_run_is_only_failed():
    errors = np.full((STEPS, 2), 9.0)
    out = lost(errors, fault=[2, 0])
    np.testing.assert_array_equal(out["failed"], [1, 0])
    np.testing.assert_array_equal(out["never-converged"], [0, 1])
    np.testing.assert_array_equal(out["diverged"], [0, 0])


def test_overconfident_needs_nees_beyond_its_extreme_quantile_for_the_hold():
    """chi2(1) exceeds 23.93 with probability 1e-6 (NIST/SEMATECH formula, computed)."""
    errors = np.ones((STEPS, 4))
    variance = np.full((STEPS, 4), 1.0)
    variance[20:24, 1] = 1 / 24.0  # NEES 24 for four steps
    variance[20:24, 2] = 1 / 23.8  # just below
    variance[20:23, 3] = 1 / 24.0  # for three steps only
    np.testing.assert_array_equal(lost(errors, variance)["overconfident"], [0, 1, 0, 0])


def test_held():
    mask = np.array([[1, 1, 0, 1, 1, 1, 0]], bool).T
    np.testing.assert_array_equal(held(mask, 2)[:, 0], [0, 1, 0, 0, 1, 1, 0])


def test_nees_of_a_small_effective_sample_is_not_assessed():
    from flyoff.estimators.particle import Particle

    problem = LinearTracking(steps=5)
    streams = Streams(1, "test", "x", range(4))
    recording = problem.record(streams, 1.0)
    model = problem.filter_model()
    for particles, assessed in ((60, False), (4000, True)):
        c = Context(model, problem.quantities, (Window("all", 1, 5),), Divergence(), recording)
        score = Consistency(c)
        bound = Particle(particles=particles).bind(model, streams)
        run_filter(bound, model, recording, c.tracks.values())
        seen = np.isfinite(score.track.nees[""]).any()
        assert seen == assessed
        assert ("all/nees/assessed") in score.per_run(no_fault(4))


def test_statistics_name_keys_that_exist():
    problem = LinearTracking(steps=5)
    streams = Streams(1, "test", "x", range(2))
    recording = problem.record(streams, 1.0)
    model = problem.filter_model()
    limits = Divergence({"position": 50.0}, 1.0, 2.0)
    c = Context(model, problem.quantities, (Window("all", 1, 5),), limits, recording)
    from flyoff.estimators.linearised import Linearised
    from flyoff.registry import discover

    scores = [cls(c) for cls in discover("score").values()]
    outcome = run_filter(Linearised().bind(model, streams), model, recording, c.tracks.values())
    keys, profiles = set(), set()
    for score in scores:
        keys |= set(score.per_run(outcome))
        profiles |= set(score.profiles())
        for s in score.statistics(problem.quantities, model, limits):
            if s.reduction == "in-band":
                assert s.quantity in profiles
            else:
                assert f"all/{s.key}" in keys, s
    assert len(keys) > 20


@pytest.mark.parametrize("scale", [1.0, 4.0])
def test_assumed_noise_scales_the_nis(scale):
    """NIS falls by the factor by which R and P are inflated; here both enter S."""
    from flyoff.estimators.linearised import Linearised

    problem = LinearTracking(steps=60)
    streams = Streams(3, "test", "x", range(150))
    recording = problem.record(streams, 1.0)
    model = problem.filter_model().assuming(q_scale=scale, r_scale=scale)
    c = Context(model, problem.quantities, (Window("w", 31, 60),), Divergence(), recording)
    score = Consistency(c)
    outcome = run_filter(Linearised().bind(model, streams), model, recording, c.tracks.values())
    nis = score.per_run(outcome)["w/nis.fix/mean"]
    assert np.mean(nis) == pytest.approx(1 / scale, rel=0.06)
