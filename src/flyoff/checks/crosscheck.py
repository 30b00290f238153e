"""Cross-check: every estimator of an experiment against an independent library, step by step.

The library runs one run at a time and slowly, so only the first runs of each problem are compared,
on the data of the experiment without any condition. Nothing is skipped in silence: an estimator or
a problem that the library cannot represent is reported as such, with the reason.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from flyoff.checks import filterpy_adapter
from flyoff.checks.filterpy_adapter import ReferenceStep
from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.particle import Particle
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.filtering import Step, run_filter
from flyoff.models.model import Model
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.streams import Streams
from flyoff.recordings import Recording
from flyoff.study.config import Entry, Experiment, ProblemEntry
from flyoff.study.plan import make_recording

__all__ = ["Comparison", "crosscheck"]

RUNS = 8
LINEAR_TOLERANCE = 1e-12
TOLERANCE = 1e-9
# rounding of a large component is not small beside its standard deviation
SIGMA_FACTOR = 1e3


@dataclass(frozen=True)
class Comparison:
    """One estimator on one problem, against the library.

    Attributes
    ----------
    reference : name of the library's class, empty where there is none
    deviation_mean : largest absolute deviation of a mean component over all steps and runs,
        relative to the largest absolute component of the reference's mean in that step and run
    deviation_cov : the same of the covariance entries
    deviation_sigma : largest deviation of a mean component in standard deviations of the
        reference, which small components do not escape
    tolerance : what the first two may be at most; the third may be a thousand times that or 1e-6,
        whichever is larger. NaN for `cannot`, like the deviations
    outcome : `agrees`, `differs`, or `cannot` where the library cannot represent the pair
    why : how it was compared, where it first differs, or why it cannot be
    runs : how many runs were compared
    """

    problem: str
    estimator: str
    reference: str
    deviation_mean: float
    deviation_cov: float
    deviation_sigma: float
    tolerance: float
    outcome: Literal["agrees", "differs", "cannot"]
    why: str
    runs: int


def crosscheck(experiment: Experiment, runs: int | None = None) -> list[Comparison]:
    """Compare every estimator with the library on every problem it applies to.

    Parameters
    ----------
    runs : how many runs of each problem, at least two are simulated; by default 8, and never more
        than the problem has

    Returns
    -------
    One `Comparison` a pair of problem and estimator, in the order of the file. On linear models
    `kalman` and `linearised` must agree to 1e-12, everything else to 1e-9, or to 1e-12 times the
    sum of the sizes of the weights where that is more: such weights cancel and lose digits.

    Raises
    ------
    ValueError
        For fewer than one run.
    """
    wanted = RUNS if runs is None else runs
    if wanted < 1:
        raise ValueError(f"a cross-check needs at least one run, got {wanted}")
    out = []
    for problem in experiment.problems:
        count = max(2, min(wanted, problem.runs))
        data = _Data(experiment, problem, count)
        for estimator in experiment.estimators:
            if estimator.applies(problem.name):
                out.append(_compare(experiment, data, estimator))
    return out


class _Data:
    """Model and recording of a problem; the recording is drawn when it is first needed."""

    def __init__(self, experiment: Experiment, problem: ProblemEntry, count: int) -> None:
        self.problem, self.late = problem, experiment.late
        self.streams = Streams(experiment.seed, "test", problem.name, range(count))
        self.model: Model = problem.problem.filter_model()
        self._recording: Recording | None = None

    @property
    def recording(self) -> Recording:
        if self._recording is None:
            plain = Entry("", ())
            self.model, self._recording = make_recording(self.problem, plain, self.streams)
        return self._recording

    def why_not(self) -> str | None:
        """A reason that holds for every estimator."""
        return filterpy_adapter.why_not(self.model) or filterpy_adapter.why_not(
            self.model, self.recording, self.late
        )


@dataclass(frozen=True)
class _Plan:
    """How a pair is compared: class, how far it may deviate, a note; or why it cannot be."""

    reference: str
    tolerance: float
    why: str
    possible: bool = True


def _plan(what: Any, data: _Data) -> _Plan:
    model = data.model
    exact = LINEAR_TOLERANCE if model.linear else TOLERANCE
    if isinstance(what, Kalman):
        plan = _Plan("KalmanFilter", exact, "")
    elif isinstance(what, Linearised):
        note = "the library has the Joseph form only" if what.form != "joseph" else ""
        plan = _Plan("ExtendedKalmanFilter", exact, note)
    elif isinstance(what, SigmaPoint):
        plan = _sigma_point(what, data)
    elif isinstance(what, Particle):
        why = "the library has no particle filter, only functions that resample"
        return _Plan("", np.nan, why, False)
    else:
        why = f"no class of the library is known to be the same as `{type(what).__name__}`"
        return _Plan("", np.nan, why, False)
    why_not = data.why_not() if plan.possible else None
    return plan if why_not is None else _Plan(plan.reference, np.nan, why_not, False)


def _sigma_point(what: SigmaPoint, data: _Data) -> _Plan:
    name = "UnscentedKalmanFilter"
    weights = np.abs(what.points.points(data.model.space.d).mean_weights).sum()
    # a sum of large terms of opposite sign loses as many digits as they are large
    tolerance = max(TOLERANCE, LINEAR_TOLERANCE * float(weights))
    why = ""
    if not isinstance(what.points, Scaled | Symmetric):
        why = "the points are carried over, the library's class does the rest"
    if isinstance(what.points, Cubature):
        why += (
            "; its own CubatureKalmanFilter draws no points again after adding Q and ignores a "
            "residual function in the spread of its points"
        )
    if (
        not what.redraw
        and filterpy_adapter.why_not(data.model) is None
        and filterpy_adapter.most_readings(data.recording, data.late) > 1
    ):
        why = (
            "without redrawing, a second update in a step takes deviations from the predicted "
            "mean here, from the corrected mean in the library"
        )
        return _Plan(name, np.nan, why, False)
    return _Plan(name, tolerance, why)


def _reference(what: Any, data: _Data) -> Iterator[ReferenceStep]:
    if isinstance(what, Kalman):
        return filterpy_adapter.kalman(data.model, data.recording, data.late)
    if isinstance(what, Linearised):
        return filterpy_adapter.extended(data.model, data.recording, data.late)
    return filterpy_adapter.unscented(
        data.model, data.recording, what.points, what.redraw, data.late
    )


def _compare(experiment: Experiment, data: _Data, estimator: Entry) -> Comparison:
    what = estimator.what
    plan = _plan(what, data)
    names = data.problem.name, estimator.name, plan.reference
    nan = float("nan")
    if not plan.possible:
        return Comparison(*names, nan, nan, nan, nan, "cannot", plan.why, 0)
    model, recording = data.model, data.recording
    against = _Against(_reference(what, data), model.space, plan.tolerance, recording.runs)
    run_filter(what.bind(model, data.streams), model, recording, [against], experiment.late)
    notes = [note for note in (plan.why, *against.notes) if note]
    if not against.compared and against.agrees:
        return Comparison(*names, nan, nan, nan, nan, "cannot", "; ".join(notes), 0)
    return Comparison(
        *names,
        against.mean,
        against.cov,
        against.sigma,
        plan.tolerance,
        "agrees" if against.agrees else "differs",
        "; ".join(notes),
        len(recording.runs),
    )


class _Against:
    """Observer that draws the reference along and keeps the largest deviations.

    A run that both sides lose in the same step is compared up to there; a run that only one side
    loses is a difference.
    """

    def __init__(
        self,
        reference: Iterator[ReferenceStep],
        space: StateSpace,
        tolerance: float,
        runs: tuple[int, ...],
    ) -> None:
        self.reference, self.space = reference, space
        self.tolerance, self.runs = tolerance, runs
        self.mean = self.cov = self.sigma = 0.0
        self.live = np.ones(len(runs), bool)
        self.agrees, self.compared = True, False
        self.notes: list[str] = []

    def observe(self, step: Step) -> None:
        """Compare one step."""
        ref = next(self.reference)
        assert step.cov is not None
        assert ref.k == step.k
        mine, theirs = step.alive & self.live, ref.sound & self.live
        for i in np.flatnonzero(mine != theirs):
            loser = "the library" if mine[i] else "the estimator"
            self.agrees = False
            self.notes.append(f"only {loser} loses run {self.runs[i]}, at step {step.k}")
        for i in np.flatnonzero(self.live & ~mine & ~theirs):
            self.notes.append(f"both lose run {self.runs[i]}, at step {step.k}")
        self.live = mine & theirs
        if not self.live.any():
            return
        self.compared = True
        at = np.flatnonzero(self.live)
        wanted, cov = ref.mean[:, at], ref.cov[..., at]
        off = np.abs(self.space.local(wanted, step.mean[:, at]))
        deviation = [
            _relative(off, np.abs(wanted).max(axis=0)),
            _relative(np.abs(step.cov[..., at] - cov), np.abs(cov).max(axis=(0, 1))),
            _relative(off, np.sqrt(np.einsum("iim->im", cov))),
        ]
        sigma = SIGMA_FACTOR * max(self.tolerance, TOLERANCE)
        limits = np.array([self.tolerance, self.tolerance, sigma])[:, None]
        beyond = ~(np.array(deviation) <= limits).all(axis=0)
        if self.agrees and beyond.any():
            self.agrees = False
            run = self.runs[at[int(beyond.argmax())]]
            self.notes.append(f"first beyond the tolerance at step {step.k} of run {run}")
        self.mean = max(self.mean, float(deviation[0].max()))
        self.cov = max(self.cov, float(deviation[1].max()))
        self.sigma = max(self.sigma, float(deviation[2].max()))


def _relative(off: Array, size: Array) -> Array:
    """Largest entry of each run (M,) over its size, which may be zero where nothing is off."""
    ratio = off / np.maximum(size, np.finfo(float).tiny)
    out: Array = ratio.reshape(-1, ratio.shape[-1]).max(axis=0)
    return out
