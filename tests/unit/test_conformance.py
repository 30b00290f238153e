"""Every built-in estimator keeps its promises, and each promise catches an estimator that does not.

The second half holds one deliberately wrong estimator for each way a promise is broken: a filter
around a good one, with one mistake that people make.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from typing import Any

import numpy as np
import pytest

from flyoff.checks.conformance import KNOWN_DEVIATIONS, PROMISES, Promise, Verdict, promise, vet
from flyoff.errors import UserError
from flyoff.estimators.contract import Fault, Gaussian
from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.particle import Particle
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.numerics import algebra
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.registry import discover

ESTIMATORS = {
    # not what other tests may have registered
    **{
        name: make()
        for name, make in discover("estimator").items()
        if make.__module__.startswith("flyoff.estimators.")
        and not make.__module__.endswith("._skeleton")
    },
    **{
        f"sigma-point, {name}": SigmaPoint(points=make())
        for name, make in discover("point-rule").items()
        if make.__module__.startswith("flyoff.estimators.")
        and not make.__module__.endswith("._skeleton")
    },
    "linearised, short": Linearised(form="short"),
    "sigma-point, not redrawn": SigmaPoint(redraw=False),
}
# what cannot be asked of whom
NOT_APPLICABLE = {"kalman": {"whole-turns", "rotated-frame"}}
NAMES = [
    "exact-on-linear", "stacked-sensors", "missing-component", "missing-reading", "zero-step",
    "half-steps", "batch-is-singles", "order-of-runs", "isolated-failure", "whole-turns",
    "rotated-frame", "same-seed", "untouched-inputs", "picklable", "own-precision",
    "sound-covariance", "honest-covariance",
]  # fmt: skip


def outcomes(verdicts: list[Verdict], outcome: str) -> set[str]:
    return {v.promise for v in verdicts if v.outcome == outcome}


@pytest.fixture(scope="module")
def verdicts() -> Callable[[str], list[Verdict]]:
    """Verdicts by name, each estimator vetted once."""
    done: dict[str, list[Verdict]] = {}

    def of(name: str) -> list[Verdict]:
        if name not in done:
            done[name] = vet(ESTIMATORS[name])
        return done[name]

    return of


# -- the built-in ones -----------------------------------------------------------------------------


def test_the_promises():
    assert list(PROMISES) == NAMES
    for name, p in PROMISES.items():
        assert isinstance(p, Promise)
        assert p.name == name
        assert p.statement.endswith(".")


@pytest.mark.parametrize("name", ESTIMATORS)
def test_every_estimator_keeps_its_promises(verdicts, name):
    got = verdicts(name)
    assert [v.promise for v in got] == NAMES
    assert {v.promise: v.evidence for v in got if v.outcome == "broken"} == {}
    assert all(v.evidence for v in got)


@pytest.mark.parametrize("name", ESTIMATORS)
def test_a_promise_is_kept_unless_there_is_a_reason(verdicts, name):
    # not vacuous: all but what is listed here and in the one dict of deviations
    got, text = verdicts(name), repr(ESTIMATORS[name])
    excused = {p for (pattern, p) in KNOWN_DEVIATIONS if fnmatchcase(text, pattern)}
    assert outcomes(got, "not applicable") == NOT_APPLICABLE.get(name, set())
    assert outcomes(got, "known deviation") == excused
    assert len(outcomes(got, "kept")) == len(NAMES) - len(excused) - len(
        NOT_APPLICABLE.get(name, ())
    )


def test_every_known_deviation_is_one(verdicts):
    # a deviation that has been mended must leave the dict
    for (pattern, name), reason in KNOWN_DEVIATIONS.items():
        assert name in PROMISES
        concerned = [n for n, e in ESTIMATORS.items() if fnmatchcase(repr(e), pattern)]
        assert concerned, pattern
        for n in concerned:
            (verdict,) = (v for v in verdicts(n) if v.promise == name)
            assert verdict.outcome == "known deviation", (pattern, n, verdict.evidence)
            assert verdict.evidence.startswith(reason)


def test_evidence_says_by_how_much():
    (kept,) = vet(Linearised(), only=["stacked-sensors"])
    assert kept.evidence.startswith("largest gap ")
    assert kept.evidence.endswith(" standard deviations, allowed 1e-06 (drift on a line)")
    (sampled,) = vet(Particle(particles=400), only=["half-steps"])
    assert "allowed 6 with 400 points" in sampled.evidence
    (refused,) = vet(Kalman(), only=["whole-turns"])
    assert refused == Verdict(
        "whole-turns", "not applicable", "the models are refused: the model is not linear"
    )


def test_a_sample_too_small_to_judge_is_not_judged():
    got = vet(Particle(particles=60), only=["exact-on-linear", "honest-covariance"])
    assert outcomes(got, "not applicable") == {"exact-on-linear", "honest-covariance"}
    assert "80 are needed for 4 error states" in got[0].evidence
    # a handful of points is lost or degenerate, which is not a broken covariance
    assert vet(Particle(particles=8), only=["sound-covariance"])[0].outcome == "kept"


def test_only_takes_known_names():
    assert [v.promise for v in vet(Kalman(), only=("half-steps", "zero-step"))] == [
        "zero-step", "half-steps",
    ]  # fmt: skip
    with pytest.raises(UserError) as caught:
        vet(Kalman(), only=["half-step"])
    assert str(caught.value) == "unknown promise `half-step` (did you mean `half-steps`?)"


def test_a_promise_has_one_definition():
    with pytest.raises(ValueError, match="`half-steps` is defined twice"):
        promise("half-steps", "Twice.")(lambda estimator: "")


# -- wrong ones ------------------------------------------------------------------------------------


LINEARISED = Linearised()


@dataclass(frozen=True)
class Wrong:
    """A good estimator whose filter goes through a wrong one."""

    filter: type
    inner: Any = LINEARISED

    def suits(self, model):
        return self.inner.suits(model)

    def batch(self, model):
        return self.inner.batch(model)

    def bind(self, model, streams, dtype=np.float64):
        return self.filter(self, model, streams, dtype)


class Same:
    """Passes everything on."""

    def __init__(self, choice, model, streams, dtype):
        self.model, self.streams = model, streams
        self.good = choice.inner.bind(model, streams, dtype)

    def start(self, prior):
        return self.good.start(prior)

    def predict(self, belief, u, dt):
        return self.good.predict(belief, u, dt)

    def update(self, belief, sensor, z, u):
        return self.good.update(belief, sensor, z, u)

    def posterior(self, belief):
        return self.good.posterior(belief)

    def operations(self, readings):
        return self.good.operations(readings)


class TimidGain(Same):
    """Nine tenths of the correction."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        step = 0.9 * self.model.space.local(belief.mean, after.mean)
        return replace(after, mean=self.model.space.retract(belief.mean, step)), innovation


class NeverCorrects(Same):
    """Predicts and reports innovations; its covariance is honest all the same."""

    def update(self, belief, sensor, z, u):
        return belief, super().update(belief, sensor, z, u)[1]


class MixedUpStates(Same):
    """Returns the covariance with its rows in another order after a reading of two."""

    def update(self, belief, sensor, z, u):
        if sensor.m == 2:
            after, innovation = super().update(belief, sensor, z, u)
            return replace(after, cov=after.cov[::-1, ::-1].copy()), innovation
        return super().update(belief, sensor, z, u)


class TwiceTheNoise(Same):
    """Moves by another process noise than the model's."""

    def __init__(self, choice, model, streams, dtype):
        super().__init__(choice, model.assuming(q_scale=4.0), streams, dtype)


class Overconfident(Same):
    """Believes half the measurement noise."""

    def __init__(self, choice, model, streams, dtype):
        super().__init__(choice, model.assuming(r_scale=0.5), streams, dtype)

    def update(self, belief, sensor, z, u):
        return super().update(belief, self.model.sensors[sensor.name], z, u)


class NanIsZero(Same):
    """Takes what is missing for zero."""

    def update(self, belief, sensor, z, u):
        return super().update(belief, sensor, np.nan_to_num(z, posinf=np.inf), u)


class AllOrNothing(Same):
    """Throws a reading away when one component is missing."""

    def update(self, belief, sensor, z, u):
        gone = np.isnan(z).any(axis=0)
        return super().update(belief, sensor, np.where(gone, np.nan, z), u)


class ForgetsALittle(Same):
    """Inflates the covariance at every update, with or without a reading."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        return replace(after, cov=after.cov * 1.001), innovation


class CountsTheMissing(Same):
    """Leaves the state alone, and reports an innovation."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        return after, replace(innovation, missing=None)


class FloorOfTime(Same):
    """Guards against dt = 0, and adds noise where no time has passed."""

    def predict(self, belief, u, dt):
        return super().predict(belief, u, max(dt, 1e-3))


class NoiseByDtSquared(Same):
    """Scales the process noise of a step by dt once more: right at one second only."""

    def predict(self, belief, u, dt):
        after = super().predict(belief, u, dt)
        extra = (dt - 1) * self.model.added_noise(belief.mean, u, dt)
        return replace(after, cov=after.cov + extra)


class SamplesByDtSquared(Same):
    """The same for a filter that draws its noise: 4 Q at two seconds, Q at one."""

    def predict(self, belief, u, dt):
        scaled = self.model.assuming(q_scale=dt**2)
        return Particle(particles=1000).bind(scaled, self.streams).predict(belief, u, dt)


class CentredOnTheBatch(Same):
    """Lets the mean of the batch into every run."""

    def predict(self, belief, u, dt):
        after = super().predict(belief, u, dt)
        shift = 1e-9 * after.mean.mean(axis=1, keepdims=True)
        return replace(after, mean=after.mean + shift)


class NoiseByPlace(Same):
    """Draws for a place in the batch instead of a run."""

    def predict(self, belief, u, dt):
        after = super().predict(belief, u, dt)
        rng = np.random.default_rng(after.step)
        return replace(after, mean=after.mean + 1e-9 * rng.standard_normal(after.mean.shape))


class RaisesForAll(Same):
    """One bad covariance stops the batch."""

    def predict(self, belief, u, dt):
        after = super().predict(belief, u, dt)
        np.linalg.cholesky(np.moveaxis(after.cov, -1, 0))
        return after


class CondemnsAll(Same):
    """One lost run marks every run."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        if not np.isfinite(after.mean).all():
            after = replace(after, fault=np.full_like(after.fault, Fault.NON_FINITE))
        return after, innovation


class Mends(Same):
    """Silently puts a good covariance in the place of a bad one."""

    def start(self, prior):
        belief = super().start(prior)
        bad = np.einsum("iim->im", belief.cov).min(axis=0) <= 0
        healthy = np.eye(len(belief.cov))[:, :, None]
        return replace(belief, cov=np.where(bad, healthy, belief.cov))


class NoWrap(Same):
    """Subtracts bearings as if they were lengths."""

    def update(self, belief, sensor, z, u):
        flat = StateSpace(*(Vector(b.name, b.ambient) for b in sensor.space.blocks))
        return super().update(belief, replace(sensor, space=flat), z, u)


class PlainStateDifference(Same):
    """Pulls the state towards zero angle, which is another pull after a whole turn."""

    def start(self, prior):
        belief = super().start(prior)
        return replace(belief, mean=belief.mean * (1 - 1e-4))


class CorrectsInTheWrongFrame(Same):
    """Applies the rotation correction on the world's side."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        if not self.model.space.has_rotation:
            return after, innovation
        delta = self.model.space.local(belief.mean, after.mean)
        mean = after.mean.copy()
        turned = algebra.quat_mul(algebra.quat_exp(tuple(delta[:3])), tuple(belief.mean[:4]))
        mean[:4] = np.array(turned)
        return replace(after, mean=mean), innovation


SHARED = np.random.default_rng(1)


class SharedGenerator(Same):
    """Draws from a generator that remembers."""

    def predict(self, belief, u, dt):
        after = super().predict(belief, u, dt)
        return replace(after, mean=after.mean + 1e-9 * SHARED.standard_normal(after.mean.shape))


class Remembers(Same):
    """Keeps a state of its own between calls."""

    calls = 0

    def predict(self, belief, u, dt):
        self.calls += 1
        after = super().predict(belief, u, dt)
        return replace(after, mean=after.mean * (1 + 1e-12 * self.calls))


class FillsTheReading(Same):
    """Writes zeros into the caller's reading."""

    def update(self, belief, sensor, z, u):
        result = super().update(belief, sensor, z, u)
        z[np.isnan(z)] = 0
        return result


class MovesInPlace(Same):
    """Writes the new mean into the old belief."""

    def predict(self, belief, u, dt):
        after = super().predict(belief, u, dt)
        belief.mean[...] = after.mean
        return after


class KeepsThePrior(Same):
    """Works on the prior's own arrays."""

    def start(self, prior):
        belief = super().start(prior)
        prior.cov[...] *= 1.0 + 1e-12
        return belief


class Lopsided(Same):
    """Reports a covariance of which one triangle has been scaled."""

    def posterior(self, belief):
        got = super().posterior(belief)
        low = np.tri(len(got.cov), k=-1, dtype=bool)[:, :, None]
        return replace(got, cov=np.where(low, 0.9 * got.cov, got.cov))


class UnknownFault(Same):
    """Invents a fault code."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        return replace(after, fault=np.full_like(after.fault, 77)), innovation


class DoubleMean(Same):
    """A constant in double turns the mean into double."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        return replace(after, mean=after.mean * np.float64(1)), innovation


class DoubleDiagnostics(Same):
    """Single inside, double in what it reports."""

    def update(self, belief, sensor, z, u):
        after, innovation = super().update(belief, sensor, z, u)
        return after, replace(innovation, white=innovation.white.astype(float))


class NoCovariance(Same):
    """Not wrong: a filter that keeps no covariance."""

    def posterior(self, belief):
        return Gaussian(belief.mean, None)


@dataclass(frozen=True)
class Unpicklable(Wrong):
    """Holds a function without a name."""

    filter: type = Same
    factor: Any = lambda: 1.0


PARTICLE = Particle(particles=1000)
REUSED = SigmaPoint(redraw=False)
MUTANTS = [
    ("exact-on-linear", Wrong(TimidGain), "largest gap"),
    ("exact-on-linear", Wrong(Same, REUSED), "largest gap"),
    ("exact-on-linear", Wrong(TwiceTheNoise, PARTICLE), "with 1000 points; variance"),
    ("exact-on-linear", Wrong(NeverCorrects), "largest gap"),
    ("exact-on-linear", Wrong(MixedUpStates), "largest gap"),
    ("stacked-sensors", Wrong(Same, REUSED), "largest gap"),
    ("stacked-sensors", Wrong(MixedUpStates), "largest gap"),
    ("missing-component", Wrong(AllOrNothing), "largest gap"),
    ("missing-component", Wrong(NanIsZero, PARTICLE), "largest gap"),
    ("missing-reading", Wrong(NanIsZero), "counts components that are missing"),
    ("missing-reading", Wrong(ForgetsALittle), "largest gap"),
    ("missing-reading", Wrong(CountsTheMissing), "counts components that are missing"),
    ("zero-step", Wrong(FloorOfTime), "largest gap"),
    ("zero-step", Wrong(FloorOfTime, PARTICLE), "largest gap"),
    ("half-steps", Wrong(NoiseByDtSquared), "largest gap"),
    ("half-steps", Wrong(SamplesByDtSquared, PARTICLE), "standard errors apart"),
    ("batch-is-singles", Wrong(CentredOnTheBatch), "linear, run 0: bits differ"),
    ("batch-is-singles", Wrong(NoiseByPlace), "bits differ"),
    ("order-of-runs", Wrong(NoiseByPlace), "linear: bits differ"),
    ("isolated-failure", Wrong(RaisesForAll), "LinAlgError: "),
    ("isolated-failure", Wrong(CondemnsAll), "linear, infinite reading in another run"),
    ("isolated-failure", Wrong(CentredOnTheBatch), "in another run: bits differ"),
    ("isolated-failure", Wrong(Mends), "linear, indefinite covariance: the run has no fault"),
    ("whole-turns", Wrong(NoWrap), "largest gap"),
    ("whole-turns", Wrong(NoWrap, PARTICLE), "largest gap"),
    ("whole-turns", Wrong(PlainStateDifference), "largest gap"),
    ("rotated-frame", Wrong(CorrectsInTheWrongFrame), "largest gap"),
    ("same-seed", Wrong(SharedGenerator), "the filter used again: bits differ"),
    ("same-seed", Wrong(Remembers), "the filter used again: bits differ"),
    ("untouched-inputs", Wrong(FillsTheReading), "`update` modified `z`"),
    ("untouched-inputs", Wrong(MovesInPlace), "`predict` modified `belief.mean`"),
    ("untouched-inputs", Wrong(KeepsThePrior), "`start` modified `prior.cov`"),
    ("picklable", Unpicklable(), "pickle"),
    ("own-precision", Wrong(DoubleMean, Kalman()), "linear: `mean` of update is float64"),
    ("own-precision", Wrong(DoubleDiagnostics, PARTICLE), "`white` of innovation is float64"),
    ("sound-covariance", Wrong(Lopsided), "asymmetry"),
    ("sound-covariance", Wrong(UnknownFault), "unknown fault code 77"),
    ("honest-covariance", Wrong(Overconfident), "NEES/d"),
    ("honest-covariance", Wrong(UnknownFault), "100 of 100 runs lost: unknown fault code 77"),
]


def test_every_promise_has_a_mutant():
    assert {name for name, _, _ in MUTANTS} == set(PROMISES)


@pytest.mark.parametrize(
    ("name", "wrong", "words"),
    MUTANTS,
    ids=[f"{n}-{getattr(w, 'filter', type(w)).__name__}" for n, w, _ in MUTANTS],
)
def test_a_wrong_estimator_is_found(name, wrong, words):
    (verdict,) = vet(wrong, only=[name])
    assert verdict.outcome == "broken", verdict
    assert words in verdict.evidence


@pytest.mark.parametrize("inner", [Linearised(), Kalman()], ids=["linearised", "kalman"])
def test_the_wrapping_itself_breaks_nothing(inner):
    # so what is found in the mutants is their one mistake; known deviations go by class name
    mine, own = vet(Wrong(Same, inner)), vet(inner)
    excused = outcomes(own, "known deviation")
    assert outcomes(mine, "kept") == outcomes(own, "kept")
    assert outcomes(mine, "broken") == excused


@pytest.mark.parametrize(
    ("filter_", "broken"),
    [
        # correcting half-heartedly twice is not doing it once
        (TimidGain, {"exact-on-linear", "stacked-sensors"}),
        (FloorOfTime, {"zero-step"}),
        (NoiseByDtSquared, {"half-steps"}),
        (AllOrNothing, {"exact-on-linear", "missing-component"}),
        (NoWrap, {"whole-turns"}),
        (CorrectsInTheWrongFrame, {"rotated-frame"}),
        (CountsTheMissing, {"missing-reading"}),
        (MovesInPlace, {"untouched-inputs"}),
        (DoubleMean, set()),
    ],
)
def test_one_mistake_breaks_the_promises_it_is_about_and_no_other(filter_, broken):
    asked = [name for name in NAMES if name != "own-precision"]
    assert outcomes(vet(Wrong(filter_), only=asked), "broken") == broken


def test_a_filter_without_covariance_is_not_asked_about_it():
    got = vet(Wrong(NoCovariance))
    covariance = {"exact-on-linear", "sound-covariance", "honest-covariance"}
    assert outcomes(got, "not applicable") == covariance
    assert all(v.evidence == "it keeps no covariance" for v in got if v.promise in covariance)
    assert outcomes(got, "broken") <= {"own-precision"}


class Refuses(Wrong):
    def suits(self, model):
        return "no model suits"


class Stumbles(Wrong):
    def bind(self, model, streams, dtype=np.float64):
        raise RuntimeError("three\nlines\nhere")


def test_an_estimator_that_refuses_everything_breaks_nothing():
    got = vet(Refuses(Same))
    assert outcomes(got, "not applicable") == set(PROMISES)
    assert {v.evidence for v in got} == {"the models are refused: no model suits"}


def test_an_exception_is_a_broken_promise():
    got = vet(Stumbles(Same))
    assert outcomes(got, "broken") == set(PROMISES)
    assert {v.evidence for v in got} == {"RuntimeError: three"}
