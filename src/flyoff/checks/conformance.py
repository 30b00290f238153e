"""What every estimator promises: one function a promise, run on any options object.

``vet(estimator)`` runs them all on small problems of known answer and says of each whether it was
kept, with the number that decided. An exception of the estimator is a broken promise, never an
exception of `vet`. A promise that cannot be put to an estimator - the models are refused, or it
keeps no covariance - is not applicable, with the reason.

Filters that hold a weighted sample are recognised by their posterior. What they compute from their
own sample is held to rounding as everybody else; what depends on how many points they drew is held
to a Monte Carlo error that follows from that number.

To add a promise, write a function of an estimator that returns the evidence, raises `_Broken` or
`_NotApplicable`, and name it with `@promise`.
"""

from __future__ import annotations

import itertools
import math
import pickle
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from functools import cache, partial
from typing import Any, Literal

import numpy as np

from flyoff.errors import UserError, nearest
from flyoff.estimators.contract import Estimator, Fault, Filter, Innovation, Weighted, moments
from flyoff.estimators.one_run import OneRun
from flyoff.filtering import Step, run_filter
from flyoff.models.model import Model, ModelSpec, Sensor, SensorSpec, trace
from flyoff.models.priors import GaussianPrior
from flyoff.numerics import algebra, discretise, linalg
from flyoff.numerics.spaces import Angle, Array, Rotation, StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.problems.coordinated_turn import CoordinatedTurn
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.recordings import Recording, draw_start, simulate
from flyoff.scores.consistency import assessable_sample

__all__ = ["KNOWN_DEVIATIONS", "PROMISES", "Promise", "Verdict", "promise", "vet"]

Outcome = Literal["kept", "broken", "known deviation", "not applicable"]

# In standard deviations of the estimate (relative, for covariances). Scaled point rules of tiny
# spread have weights near 1e8 of opposite sign and lose about eight of sixteen digits; the mean of
# a cloud on rotations, taken about one of its points in a few passes, has about eight.
ROUNDING = 1e-6
# A sample mean of N independent draws is off by 1/sqrt(N) standard deviations. Weighting and
# resampling at every step multiply this on the problem used: by 5.7, 5.9 and 5.8 for a bootstrap
# filter of 500, 1000 and 4000 points. Half as much again is allowed.
MONTE_CARLO = 9.0
# Standard errors by which a mean over many draws may be off: 6 is never (2e-9), and the draws are
# the same every time.
STANDARD_ERRORS = 6.0
# Sample covariances of symmetric products in double: a few units in the last place of each term.
SYMMETRY = 1e-10
# Smallest eigenvalue of a correlation matrix that rounding may push below zero.
SEMIDEFINITE = 1e-9

KNOWN_DEVIATIONS: dict[tuple[str, str], str] = {
    ("SigmaPoint(*redraw=False*", "exact-on-linear"): (
        "points are not drawn again after the process noise is added, so the gain is that of a "
        "smaller prior covariance (E. Wan, R. van der Merwe 2000, table 7.3)"
    ),
    ("SigmaPoint(*redraw=False*", "stacked-sensors"): (
        "the second sensor is met with the points from before the first one"
    ),
}
"""Why an estimator may break a promise: (pattern of its repr, promise) -> reason."""


@dataclass(frozen=True)
class Verdict:
    """How an estimator stands to one promise; `evidence` is a line for people."""

    promise: str
    outcome: Outcome
    evidence: str


@dataclass(frozen=True)
class Promise:
    """A promise: short name, one sentence, and the check that returns its evidence."""

    name: str
    statement: str
    check: Callable[[Estimator], str]


PROMISES: dict[str, Promise] = {}
"""Every promise by name, in the order they are checked."""


class _Broken(Exception):
    """The promise is not kept; the message says by how much."""


class _NotApplicable(Exception):
    """The promise cannot be put to this estimator; the message says why."""


Check = Callable[[Estimator], str]


def promise(name: str, statement: str) -> Callable[[Check], Check]:
    """Decorator: make a check known under a short kebab-case name.

    Raises
    ------
    ValueError
        If the name is taken.
    """

    def add(check: Check) -> Check:
        if name in PROMISES:
            raise ValueError(f"promise `{name}` is defined twice")
        PROMISES[name] = Promise(name, statement, check)
        return check

    return add


def vet(estimator: Estimator, only: Iterable[str] | None = None) -> list[Verdict]:
    """Hold an estimator to its promises.

    Parameters
    ----------
    estimator : an options object as in `flyoff.estimators.contract`
    only : names of promises; all of them if not given

    Returns
    -------
    list of Verdict, one a promise, in the order of `PROMISES`

    Raises
    ------
    UserError
        If `only` names an unknown promise.
    """
    chosen = set(PROMISES if only is None else only)
    for name in sorted(chosen - set(PROMISES)):
        raise UserError(f"unknown promise `{name}`{nearest(name, PROMISES)}")
    return [_judge(estimator, p) for name, p in PROMISES.items() if name in chosen]


def _judge(estimator: Estimator, p: Promise) -> Verdict:
    outcome: Outcome = "kept"
    try:
        # what the time loop does: a lost run computes with NaN
        with np.errstate(all="ignore"):
            evidence = p.check(estimator)
    except _NotApplicable as why:
        return Verdict(p.name, "not applicable", str(why))
    except _Broken as why:
        outcome, evidence = "broken", str(why)
    except Exception as error:  # whatever a user's estimator raises
        text = str(error).strip().splitlines()
        outcome, evidence = "broken", f"{type(error).__name__}: {text[0] if text else ''}"
    if outcome == "broken":
        for (pattern, name), reason in KNOWN_DEVIATIONS.items():
            if name == p.name and fnmatchcase(repr(estimator), pattern):
                return Verdict(p.name, "known deviation", f"{reason}; {evidence}")
    return Verdict(p.name, outcome, evidence)


# -- small worlds ----------------------------------------------------------------------------------

_SEED = 20
_RUNS = tuple(range(6))
_BAD = 2  # the run that is spoilt
_MANY = tuple(range(100))
# process noise large enough that a sample does not starve
_MATCHED = LinearTracking(acceleration_density=1.0, position_sigma=6.0, steps=20)


def _streams(runs: tuple[int, ...] = _RUNS) -> Streams:
    return Streams(_SEED, "test", "conformance", runs)


@dataclass(frozen=True)
class _World:
    """A model with a recording of it."""

    model: Model
    recording: Recording

    @property
    def prior(self) -> GaussianPrior:
        prior = self.recording.prior
        assert isinstance(prior, GaussianPrior)
        return prior

    def starting(self, mean: Array | None = None, cov: Array | None = None) -> _World:
        """The same with another prior mean (n, M) or covariance (d, d, M)."""
        prior = self.prior
        prior = replace(
            prior,
            mean=prior.mean if mean is None else mean,
            cov=prior.cov if cov is None else cov,
        )
        recording = replace(self.recording, prior=prior)
        return replace(self, recording=recording)

    def reading(self, change: Callable[[str, Array], Array]) -> _World:
        """The same with the values (E, m, M) of every sensor changed."""
        readings = tuple(
            replace(r, values=change(r.sensor, r.values.copy())) for r in self.recording.readings
        )
        return replace(self, recording=replace(self.recording, readings=readings))

    def first(self) -> tuple[Sensor, Array, Array]:
        """A sensor, its first reading without gaps (m, M), and the first input (k, M)."""
        r = self.recording.readings[0]
        z = np.where(np.isnan(r.values[0]), 1.0, r.values[0])
        return self.model.sensors[r.sensor], z, self.recording.inputs[0].copy()


@cache
def _world(name: str) -> _World:
    """A world by name; `matched` has many runs, the others six."""
    if name == "linear":
        return _of_problem(LinearTracking(steps=8), _RUNS)
    if name == "matched":
        return _of_problem(_MATCHED, _MANY)
    if name == "turn":
        return _of_problem(CoordinatedTurn(steps=8), _RUNS)
    if name == "drift":
        start, cov = np.array([0.0, 1.0]), np.array([[0.5, 0.1], [0.1, 0.2]])
        return _simulated(_drift(), start, cov, 1.0, 6)
    if name == "heading":
        # the cut of the angle lies within one standard deviation
        return _simulated(_heading(), np.array([3.1, 0.1]), np.diag([0.09, 0.0025]), 0.5, 8)
    start = np.array([*algebra.quat_from_euler(0.2, -0.3, 1.0), 0.0, 0.0, 0.0], dtype=float)
    cov = np.diag([0.01, 0.01, 0.01, 1e-4, 1e-4, 1e-4])
    if name == "attitude":
        return _simulated(_attitude(turned=False), start, cov, 0.1, 8)
    if name == "turned-attitude":
        world = _world("attitude")
        mean = world.prior.mean.copy()
        mean[:4] = _turned(mean[:4])
        return replace(world, model=_attitude(turned=True)).starting(mean=mean)
    raise KeyError(name)


_EVERYWHERE = ("linear", "turn", "heading", "attitude")


def _of_problem(problem: LinearTracking | CoordinatedTurn, runs: tuple[int, ...]) -> _World:
    return _World(problem.filter_model(), problem.record(_streams(runs), 1.0))


def _simulated(model: Model, start: Array, cov: Array, dt: float, steps: int) -> _World:
    streams, times = _streams(), dt * np.arange(steps + 1)
    wide = np.repeat(start[:, None], len(_RUNS), axis=1)
    inputs = 0.4 * streams.normal("rate", (steps, model.inputs.n)) if model.inputs.n else None
    if inputs is None:
        inputs = np.zeros((steps, 0, len(_RUNS)))
    prior = draw_start(model.space, start[:, None], cov, streams)
    truth, readings = simulate(model, times, wide, inputs, streams)
    return _World(model, Recording(times, truth, inputs, readings, prior, streams.runs))


@cache
def _drift() -> Model:
    """Position and velocity on a line, seen by two sensors, apart, stacked and correlated."""
    space = StateSpace(Vector("position", 1, "m"), Vector("velocity", 1, "m/s"))
    one, two = StateSpace(Vector("z", 1)), StateSpace(Vector("z", 2))

    def move(x: Any, u: Any, w: Any, p: Any, dt: Any) -> Any:
        return x.position + dt * x.velocity + w.position, x.velocity + w.velocity

    def noise(p: Any, dt: Any) -> Any:
        return discretise.white_acceleration(0.5, dt)

    def see_first(x: Any, u: Any, p: Any) -> Any:
        return x.position

    def see_second(x: Any, u: Any, p: Any) -> Any:
        return 0.5 * x.position + 2 * x.velocity

    def see_both(x: Any, u: Any, p: Any) -> Any:
        return ((x.position, 0.5 * x.position + 2 * x.velocity),)

    def first_noise(x: Any, u: Any, p: Any) -> Any:
        return ((1.0,),)

    def second_noise(x: Any, u: Any, p: Any) -> Any:
        return ((4.0,),)

    def apart(x: Any, u: Any, p: Any) -> Any:
        return discretise.diagonal(1.0, 4.0)

    def together(x: Any, u: Any, p: Any) -> Any:
        return ((1.0, 1.2), (1.2, 4.0))

    sensors = (
        SensorSpec("first", one, see_first, first_noise, 1.0),
        SensorSpec("second", one, see_second, second_noise, 1.0),
        SensorSpec("stacked", two, see_both, apart, 1.0),
        SensorSpec("correlated", two, see_both, together, 1.0),
    )
    return trace(ModelSpec(space, move, space, noise, sensors, linear=True))


@cache
def _heading() -> Model:
    """A heading and its rate, seen by a compass: angles in the state and in the reading."""
    space = StateSpace(Angle("heading"), Vector("rate", 1, "rad/s", 0.1))
    noise_space = StateSpace(Vector("angle", 1, "rad", 0.1), Vector("rate", 1, "rad/s", 0.1))

    def move(x: Any, u: Any, w: Any, p: Any, dt: Any) -> Any:
        return x.heading + dt * x.rate + w.angle, x.rate + w.rate

    def noise(p: Any, dt: Any) -> Any:
        return discretise.white_acceleration(0.001, dt)

    def see(x: Any, u: Any, p: Any) -> Any:
        return x.heading

    def see_noise(x: Any, u: Any, p: Any) -> Any:
        return ((0.01,),)

    compass = SensorSpec("compass", StateSpace(Angle("bearing")), see, see_noise, 2.0)
    return trace(ModelSpec(space, move, noise_space, noise, (compass,)))


_TURN = algebra.quat_from_euler(0.4, -0.7, 2.0)  # the rotation of the world frame


def _turned(q: Array) -> Array:
    """Attitudes (4, ...) as seen from the turned world frame."""
    return np.array(algebra.quat_mul(tuple(float(c) for c in _TURN), tuple(q)))


@cache
def _attitude(turned: bool) -> Model:
    """Attitude and gyro bias, two reference directions read in turn; or all in a turned world."""
    space = StateSpace(Rotation("attitude"), Vector("gyro_bias", 3, "rad/s", 0.01))
    rate = StateSpace(Vector("rate", 3, "rad/s", 1.0))
    noise_space = StateSpace(Vector("angle", 3, "rad", 1e-2), Vector("bias", 3, "rad/s", 1e-3))
    seen = StateSpace(Vector("direction", 3))
    references = ((0.0, 0.0, -1.0), (0.5, 0.1, 0.86))
    if turned:
        references = tuple(algebra.rotate(_TURN, r) for r in references)  # type: ignore[assignment]

    def turn(x: Any, u: Any, w: Any, p: Any, dt: Any) -> Any:
        parts = zip(u.rate, x.gyro_bias, w.angle, strict=True)
        angle = tuple((r - b) * dt + e for r, b, e in parts)
        bias = tuple(b + e for b, e in zip(x.gyro_bias, w.bias, strict=True))
        return algebra.quat_mul(x.attitude, algebra.quat_exp(angle)), bias

    def noise(p: Any, dt: Any) -> Any:
        a, b = 1e-3 * dt, 1e-6 * dt
        return discretise.diagonal(a, a, a, b, b, b)

    def up(x: Any, u: Any, p: Any) -> Any:
        return algebra.unrotate(x.attitude, (p.ax, p.ay, p.az))

    def north(x: Any, u: Any, p: Any) -> Any:
        return algebra.unrotate(x.attitude, (p.bx, p.by, p.bz))

    def see_noise(x: Any, u: Any, p: Any) -> Any:
        return discretise.diagonal(0.01, 0.01, 0.01)

    # never both at one time: that is another promise
    sensors = (
        SensorSpec("up", seen, up, see_noise, 5.0, phase=0.1),
        SensorSpec("north", seen, north, see_noise, 5.0, phase=0.2),
    )
    keys = ("ax", "ay", "az", "bx", "by", "bz")
    values = [float(c) for r in references for c in r]
    parameters = dict(zip(keys, values, strict=True))
    return trace(ModelSpec(space, turn, noise_space, noise, sensors, rate, parameters))


# -- what the checks share -------------------------------------------------------------------------

Moments = tuple[Array, Array | None]


@dataclass(frozen=True)
class _Track:
    """A run of the time loop: means (T, n, M), covariances (T, d, d, M), every array of it."""

    steps: list[Step]
    fault: Array
    bits: list[Array]

    @property
    def alive(self) -> Array:
        """Runs not lost (T, M)."""
        return np.array([s.alive for s in self.steps])

    def moments(self, k: int) -> Moments:
        """Mean and covariance after step k, counted from zero."""
        return self.steps[k].mean, self.steps[k].cov


class _Keep:
    def __init__(self) -> None:
        self.steps: list[Step] = []

    def observe(self, step: Step) -> None:
        # copies: a filter that writes into an old belief breaks one promise, not all
        cov = None if step.cov is None else step.cov.copy()
        self.steps.append(replace(step, mean=step.mean.copy(), cov=cov))


def _run(
    estimator: Estimator, world: _World, streams: Streams | None = None, bound: Filter | None = None
) -> _Track:
    keep, recording = _Keep(), world.recording
    streams = _streams(recording.runs) if streams is None else streams
    bound = estimator.bind(world.model, streams) if bound is None else bound
    outcome = run_filter(bound, world.model, recording, [keep])
    bits = [outcome.fault, outcome.step]
    for step in keep.steps:
        parts = [step.mean, step.cov, step.ess]
        for _, i in step.innovations:
            parts += [*_diagnostics(i).values(), i.nis, i.log_likelihood]
        bits += [p for p in parts if p is not None]
    return _Track(keep.steps, outcome.fault, bits)


def _diagnostics(i: Innovation) -> dict[str, Array]:
    named = {
        "residual": i.residual,
        "factor": i.factor,
        "white": i.white,
        "ess": i.ess,
        "likelihood": i.likelihood,
    }
    return {k: v for k, v in named.items() if v is not None}


def _suited(estimator: Estimator, *names: str) -> dict[str, _World]:
    """The worlds among `names` that the estimator accepts."""
    out, reasons = {}, []
    for name in names:
        why = estimator.suits(_world(name).model)
        if why is None:
            out[name] = _world(name)
        else:
            reasons.append(why)
    if not out:
        raise _NotApplicable(f"the models are refused: {reasons[0]}")
    return out


def _say(worlds: Iterable[str]) -> str:
    return ", ".join(worlds)


def _sample_size(estimator: Estimator, world: _World) -> int:
    """How many points a sampling estimator holds; zero for one that does not sample."""
    bound = estimator.bind(world.model, _streams(world.recording.runs[:2]))
    posterior = bound.posterior(bound.start(world.recording.select(slice(0, 2)).prior))
    return posterior.points.shape[1] if isinstance(posterior, Weighted) else 0


def _moments(world: _World, bound: Filter, belief: Any) -> Moments:
    mean, cov, _ = moments(world.model.space, bound.posterior(belief))
    return mean, cov


def _gap(space: StateSpace, got: Moments, want: Moments) -> float:
    """Largest difference in standard deviations; infinite where either is not finite."""
    scale = np.concatenate([np.full(b.tangent, b.scale) for b in space.blocks])
    (a, p), (b, q) = got, want
    if (p is None) != (q is None):
        return math.inf
    sd = scale[:, None] if q is None else np.sqrt(np.einsum("iim->im", q))
    parts = [space.local(b, a) / sd]
    if p is not None and q is not None:
        parts.append((p - q) / (sd[:, None] * sd))
    worst = max(float(np.abs(v).max()) for v in parts)
    return worst if math.isfinite(worst) else math.inf


def _within(gap: float, where: Iterable[str]) -> str:
    """Evidence of a gap that must be small."""
    text = f"largest gap {gap:.1e} standard deviations, allowed {ROUNDING:.0e} ({_say(where)})"
    if not gap <= ROUNDING:
        raise _Broken(text)
    return text


def _worst(space: StateSpace, a: _Track, b: _Track) -> float:
    """Largest gap between two tracks over the runs that live in both."""
    out, lived = 0.0, False
    for k, (s, t) in enumerate(zip(a.steps, b.steps, strict=True)):
        alive = s.alive & t.alive
        if not alive.any():
            continue
        lived = True
        got, want = (_part(track.moments(k), alive) for track in (a, b))
        out = max(out, _gap(space, got, want))
    if not lived or not np.array_equal(a.alive, b.alive):
        raise _Broken(_lost(np.concatenate([a.fault, b.fault])))
    return out


def _part(m: Moments, runs: Array) -> Moments:
    return m[0][..., runs], None if m[1] is None else m[1][..., runs]


def _lost(fault: Array) -> str:
    codes = [int(c) for c in np.unique(fault[fault != 0])]
    return f"{np.count_nonzero(fault)} of {len(fault)} runs lost: {_say(map(_reason, codes))}"


def _reason(code: int) -> str:
    return Fault(code).text if code in list(Fault) else f"unknown fault code {code}"


def _same_bits(got: list[Array], want: list[Array], what: str) -> None:
    if len(got) != len(want):
        raise _Broken(f"{what}: another number of results")
    for a, b in zip(got, want, strict=True):
        if a.shape != b.shape or not np.array_equal(a, b, equal_nan=True):
            worst = np.nanmax(np.abs(np.subtract(a, b, dtype=float))) if a.shape == b.shape else 0
            raise _Broken(f"{what}: bits differ, by up to {worst:.1e}")


def _arrays(thing: Any, path: str = "", depth: int = 0) -> Iterator[tuple[str, Array]]:
    """Every array that a belief, prior or posterior holds, with its name."""
    if isinstance(thing, np.ndarray):
        yield path, thing
    elif depth > 4 or isinstance(thing, Model | Sensor | Streams | StateSpace):
        return
    elif isinstance(thing, dict):
        for key, value in thing.items():
            yield from _arrays(value, f"{path}.{key}" if path else str(key), depth + 1)
    elif isinstance(thing, list | tuple):
        for i, value in enumerate(thing):
            yield from _arrays(value, f"{path}[{i}]", depth + 1)
    elif hasattr(thing, "__dict__"):
        yield from _arrays(vars(thing), path, depth + 1)


# -- exact answers ---------------------------------------------------------------------------------


@cache
def _exact() -> tuple[Array, Array]:
    """Posterior means (T, 4, M) and covariances (T, 4, 4, M) of the matched world.

    The recursion of R. E. Kalman, J. Basic Eng. 82:35-45, 1960, run by run with plain matrices and
    missing components left out by row; it shares nothing with the traced model.
    """
    problem, recording = _MATCHED, _world("matched").recording
    dt, one = problem.step, np.eye(2)
    f = np.block([[one, dt * one], [0 * one, one]])
    rho, rho_fix = problem.acceleration_correlation, problem.fix_correlation
    along: Array = np.array(discretise.white_acceleration(problem.acceleration_density, dt))
    q = np.kron(along, [[1, rho], [rho, 1]])
    r = problem.fix_sigma**2 * np.array([[1, rho_fix], [rho_fix, 1]])
    values = recording.readings[0].values
    first, cov0 = recording.prior.moments()
    means, covs = (np.empty((problem.steps, *a.shape)) for a in (first, cov0))
    for m in range(first.shape[1]):
        x, p = first[:, m], cov0[..., m]
        for k in range(problem.steps):
            x, p = f @ x, f @ p @ f.T + q
            seen = np.flatnonzero(~np.isnan(values[k, :, m]))
            h = np.eye(4)[seen]
            gain = p @ h.T @ np.linalg.inv(h @ p @ h.T + r[np.ix_(seen, seen)])
            x = x + gain @ (values[k, seen, m] - h @ x)
            p = p - gain @ h @ p
            means[k, :, m], covs[k, :, :, m] = x, p
    return means, covs


def _batches(estimator: Estimator, world: _World) -> _Track:
    """A long recording in batches of the size the estimator asks for."""
    size = max(2, estimator.batch(world.model))
    runs = len(world.recording.runs)
    tracks = []
    # a last batch of one run would have to be padded: it joins the one before
    edges = [*range(0, runs - 1, size), runs]
    for lo, hi in itertools.pairwise(edges):
        part = slice(lo, hi)
        few = replace(world, recording=world.recording.select(part))
        tracks.append(_run(estimator, few))
    steps = [_joined(parts) for parts in zip(*(t.steps for t in tracks), strict=True)]
    return _Track(steps, np.concatenate([t.fault for t in tracks]), [])


def _joined(parts: tuple[Step, ...]) -> Step:
    def join(name: str) -> Any:
        arrays = [getattr(p, name) for p in parts]
        return None if arrays[0] is None else np.concatenate(arrays, axis=-1)

    names = ("truth", "mean", "cov", "factor", "ess", "alive")
    return Step(k=parts[0].k, innovations=(), **{name: join(name) for name in names})


def _enough(track: _Track, size: int, d: int) -> None:
    """Refuse to judge a sample too small for the number of error states."""
    typical = float(np.median([np.median(s.ess) for s in track.steps if s.ess is not None]))
    if not typical >= assessable_sample(d):
        raise _NotApplicable(
            f"{size} points leave an effective sample of {typical:.0f}, "
            f"{assessable_sample(d):.0f} are needed for {d} error states"
        )


@promise("exact-on-linear", "On a linear problem with Gaussian noise it is the Kalman filter.")
def _exact_on_linear(estimator: Estimator) -> str:
    world = _suited(estimator, "matched")["matched"]
    means, covs = _exact()
    track = _batches(estimator, world)
    if track.steps[0].cov is None:
        raise _NotApplicable("it keeps no covariance")
    size = _sample_size(estimator, world)
    if size:
        _enough(track, size, world.model.space.d)
    if track.fault.any():
        raise _Broken(_lost(track.fault))
    if not size:
        pairs = zip(track.steps, means, covs, strict=True)
        gap = max(_gap(world.model.space, (s.mean, s.cov), (m, c)) for s, m, c in pairs)
        return _within(gap, ["linear tracking"])
    variance = np.einsum("tiim->tim", covs)
    got = np.array([np.einsum("iim->im", s.cov) for s in track.steps if s.cov is not None])
    off = np.sqrt(np.mean((np.array([s.mean for s in track.steps]) - means) ** 2 / variance))
    ratio = np.mean(got / variance)
    allowed = MONTE_CARLO / math.sqrt(size)
    text = (
        f"mean off by {off:.3f} standard deviations rms, allowed {allowed:.3f} with {size} points; "
        f"variance {ratio:.3f} of the exact one"
    )
    if not (off <= allowed and abs(ratio - 1) <= allowed):
        raise _Broken(text)
    return text


@promise("stacked-sensors", "Two sensors one after the other are one stacked sensor.")
def _stacked_sensors(estimator: Estimator) -> str:
    world = _suited(estimator, "drift")["drift"]
    z, sensors = _stacked_values(world), world.model.sensors

    def apart(bound: Filter, belief: Any, k: int, u: Array) -> Any:
        belief, _ = bound.update(belief, sensors["first"], z[k, :1], u)
        return bound.update(belief, sensors["second"], z[k, 1:], u)[0]

    def together(bound: Filter, belief: Any, k: int, u: Array) -> Any:
        return bound.update(belief, sensors["stacked"], z[k], u)[0]

    return _within(_two_ways(estimator, world, apart, together), ["drift on a line"])


@promise("missing-component", "A partly missing reading is an update with the rest.")
def _missing_component(estimator: Estimator) -> str:
    world = _suited(estimator, "drift")["drift"]
    z, sensors = _stacked_values(world), world.model.sensors
    gaps = []
    for kept, name in enumerate(("first", "second")):
        holed = z.copy()
        holed[:, 1 - kept] = np.nan

        def whole(bound: Filter, belief: Any, k: int, u: Array, z: Array = holed) -> Any:
            return bound.update(belief, sensors["correlated"], z[k], u)[0]

        def rest(
            bound: Filter, belief: Any, k: int, u: Array, name: str = name, kept: int = kept
        ) -> Any:
            return bound.update(belief, sensors[name], z[k, kept : kept + 1], u)[0]

        gaps.append(_two_ways(estimator, world, whole, rest))
    return _within(max(gaps), ["drift on a line"])


def _stacked_values(world: _World) -> Array:
    """Readings (E, 2, M) of both sensors together."""
    (values,) = (r.values for r in world.recording.readings if r.sensor == "stacked")
    return values


Way = Callable[[Filter, Any, int, Array], Any]


def _two_ways(estimator: Estimator, world: _World, one: Way, other: Way) -> float:
    """Largest gap over three steps whose updates are done in two ways."""
    u, gap = world.recording.inputs[0], 0.0
    bound = estimator.bind(world.model, _streams())
    a, b = bound.start(world.prior), bound.start(world.prior)
    for k in range(3):
        a, b = (bound.predict(belief, u, world.recording.dt) for belief in (a, b))
        a, b = one(bound, a, k, u), other(bound, b, k, u)
        got, want = (_moments(world, bound, belief) for belief in (a, b))
        gap = max(gap, _gap(world.model.space, got, want))
    return gap


@promise("missing-reading", "A reading of which every component is missing changes nothing.")
def _missing_reading(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    gap = 0.0
    for world in worlds.values():
        silent = world.reading(lambda _, z: np.full_like(z, np.nan))
        none = replace(world, recording=replace(world.recording, readings=()))
        a, b = _run(estimator, silent), _run(estimator, none)
        gap = max(gap, _worst(world.model.space, a, b))
        for step in a.steps:
            for _, i in step.innovations:
                if i.count.any() or np.nan_to_num(i.nis, nan=1.0).any():
                    raise _Broken("the innovation counts components that are missing")
    return _within(gap, worlds)


@promise("zero-step", "A prediction over no time changes nothing.")
def _zero_step(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    gap = 0.0
    for world in worlds.values():
        sampled = _sample_size(estimator, world) > 0
        bound = estimator.bind(world.model, _streams())
        sensor, z, u = world.first()
        beliefs = [bound.start(world.prior)]
        if not sampled:  # an uneven sample may be drawn again before it moves
            beliefs.append(bound.update(beliefs[0], sensor, z, u)[0])
        for belief in beliefs:
            moved = bound.predict(belief, u, 0.0)
            got, want = (_moments(world, bound, b) for b in (moved, belief))
            gap = max(gap, _gap(world.model.space, got, want))
    return _within(gap, worlds)


@promise("half-steps", "Two half steps are one step, where the model's noise is exact.")
def _half_steps(estimator: Estimator) -> str:
    world = _suited(estimator, "drift")["drift"]
    u, h, size = world.recording.inputs[0], 2.0, _sample_size(estimator, world)
    bound = estimator.bind(world.model, _streams())
    whole = _moments(world, bound, bound.predict(bound.start(world.prior), u, h))
    half = bound.predict(bound.start(world.prior), u, h / 2)
    halves = _moments(world, bound, bound.predict(half, u, h / 2))
    if not size:
        return _within(_gap(world.model.space, halves, whole), ["drift on a line"])
    # both ways start from the same points: means differ by two draws of the process noise
    q: Array = np.array(discretise.white_acceleration(0.5, h))
    off = np.abs(halves[0] - whole[0]) / np.sqrt(2 * np.diag(q) / size)[:, None]
    assert halves[1] is not None
    assert whole[1] is not None
    ratio = np.einsum("iim->im", halves[1]) / np.einsum("iim->im", whole[1])
    # the variance of N draws is off by sqrt(2/N) of itself, two of them by twice the square
    spread = np.abs(ratio.mean(axis=1) - 1) / (2 / math.sqrt(size * len(_RUNS)))
    text = (
        f"means {off.max():.1f} and variances {spread.max():.1f} standard errors apart, "
        f"allowed {STANDARD_ERRORS:g} with {size} points"
    )
    if not (off.max() <= STANDARD_ERRORS and spread.max() <= STANDARD_ERRORS):
        raise _Broken(text)
    return text


# -- runs know nothing of each other ---------------------------------------------------------------


@promise("batch-is-singles", "A batch of runs is its runs one by one, bit for bit.")
def _batch_is_singles(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    for name, world in worlds.items():
        whole = _run(estimator, world)
        for m in range(len(_RUNS)):
            alone = world.recording.select(slice(m, m + 1)).padded()
            single = _run(estimator, replace(world, recording=alone))
            _same_bits(
                [a[..., 0] for a in single.bits],
                [a[..., m] for a in whole.bits],
                f"{name}, run {m}",
            )
    return f"{len(_RUNS)} runs, the same bits ({_say(worlds)})"


@promise("order-of-runs", "Permuting the runs permutes the results, bit for bit.")
def _order_of_runs(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    for name, world in worlds.items():
        back = replace(world, recording=world.recording.select(slice(None, None, -1)))
        whole, reverse = _run(estimator, world), _run(estimator, back)
        _same_bits([a[..., ::-1] for a in reverse.bits], whole.bits, name)
    return f"{len(_RUNS)} runs in reverse order, the same bits ({_say(worlds)})"


@promise("isolated-failure", "A run that fails is reported and leaves the others' bits alone.")
def _isolated_failure(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    reasons: set[str] = set()
    for name, world in worlds.items():
        whole = _run(estimator, world)
        for how, spoilt in _spoilt(world).items():
            if how == "indefinite covariance" and whole.steps[0].cov is None:
                continue
            track = _run(estimator, spoilt)
            others = [m for m in range(len(_RUNS)) if m != _BAD]
            _same_bits(
                [a[..., others] for a in track.bits],
                [a[..., others] for a in whole.bits],
                f"{name}, {how} in another run",
            )
            code = int(track.fault[_BAD])
            if code == 0 and how == "infinite reading":
                # refusing the reading is a way to live with it
                continue
            if code == 0 or code not in list(Fault):
                raise _Broken(f"{name}, {how}: the run has {_reason(code) or 'no fault'}")
            reasons.add(_reason(code))
    return f"reported as: {_say(sorted(reasons))} ({_say(worlds)})"


def _spoilt(world: _World) -> dict[str, _World]:
    """The world with one run that cannot go well."""

    def infinite(_: str, z: Array) -> Array:
        z[1, 0, _BAD] = np.inf
        return z

    cov = world.prior.cov.copy()
    cov[1, 1, _BAD] *= -100
    return {
        "infinite reading": world.reading(infinite),
        "indefinite covariance": world.starting(cov=cov),
    }


# -- symmetries ------------------------------------------------------------------------------------


@promise("whole-turns", "2 pi added to any angle, read or estimated, changes nothing.")
def _whole_turns(estimator: Estimator) -> str:
    worlds = _suited(estimator, "turn", "heading", "attitude")
    gap = 0.0
    for name, world in worlds.items():
        plain = _run(estimator, world)
        if name == "attitude":
            # q and -q are one attitude, a whole turn apart
            mean = world.prior.mean.copy()
            mean[:4] *= -1
            moved = [world.starting(mean=mean)]
        else:
            moved = [world.reading(partial(_add_turns, turns)) for turns in (1, -2)]
        if name == "heading":
            mean = world.prior.mean.copy()
            mean[0] += 2 * math.pi
            moved.append(world.starting(mean=mean))
        for other in moved:
            gap = max(gap, _worst(world.model.space, _run(estimator, other), plain))
    return _within(gap, worlds)


def _add_turns(turns: int, sensor: str, z: Array) -> Array:
    # the angle is the last component of the radar and the only one of the compass
    z[:, -1] += 2 * math.pi * turns
    return z


@promise("rotated-frame", "Rotating the world and its reference directions rotates the results.")
def _rotated_frame(estimator: Estimator) -> str:
    world = _suited(estimator, "attitude")["attitude"]
    a, b = _run(estimator, world), _run(estimator, _world("turned-attitude"))
    rotated = []
    for step in a.steps:
        mean = step.mean.copy()
        mean[:4] = _turned(mean[:4])
        rotated.append(replace(step, mean=mean))
    gap = _worst(world.model.space, b, replace(a, steps=rotated))
    return _within(gap, ["attitude"])


# -- repeatable and pure ---------------------------------------------------------------------------


@promise("same-seed", "The same seed gives the same bits, from a new filter and from a used one.")
def _same_seed(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    for name, world in worlds.items():
        bound = estimator.bind(world.model, _streams())
        first, again = (_run(estimator, world, bound=bound) for _ in range(2))
        _same_bits(again.bits, first.bits, f"{name}, the filter used again")
        _same_bits(_run(estimator, world).bits, first.bits, f"{name}, another filter")
    return f"the same bits three times ({_say(worlds)})"


@promise("untouched-inputs", "Prior, belief, reading and input are never modified.")
def _untouched_inputs(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    for name, world in worlds.items():
        sensor, z, u = world.first()
        z[-1, 0] = np.nan
        bound = estimator.bind(world.model, _streams())
        dt, prior = world.recording.dt, world.prior.runs(np.arange(len(_RUNS)))
        start = _pure(name, "start", bound.start, prior=prior)
        for belief in (start, bound.predict(start, u, dt)):
            _pure(name, "predict", bound.predict, belief=belief, u=u, dt=dt)
            _pure(name, "update", bound.update, belief=belief, sensor=sensor, z=z, u=u)
            _pure(name, "posterior", bound.posterior, belief=belief)
    return f"start, predict, update and posterior ({_say(worlds)})"


def _pure(world: str, name: str, call: Callable[..., Any], **given: Any) -> Any:
    """What the call returns; broken if an array it was given is another afterwards."""
    before = {path: a.copy() for path, a in _arrays(given)}
    result = call(*given.values())
    for path, a in _arrays(given):
        if path not in before or not np.array_equal(a, before[path], equal_nan=a.dtype.kind == "f"):
            raise _Broken(f"{world}: `{name}` modified `{path}`")
    return result


@promise("picklable", "Options and model go to another process and give the same bits there.")
def _picklable(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    name, world = next(iter(worlds.items()))
    again = pickle.loads(pickle.dumps(estimator))
    model = pickle.loads(pickle.dumps(world.model))
    _same_bits(
        _run(again, replace(world, model=model)).bits,
        _run(estimator, world).bits,
        f"{name}, unpickled",
    )
    try:
        pickle.dumps(estimator.bind(world.model, _streams()))
    except Exception:  # not needed: filters are bound where they run
        return f"options, not the bound filter ({name})"
    return f"options and bound filter ({name})"


@promise("own-precision", "A filter bound to single precision holds nothing in double.")
def _own_precision(estimator: Estimator) -> str:
    if isinstance(estimator, OneRun):
        raise _NotApplicable("filters written for one run work in double")
    worlds = _suited(estimator, *_EVERYWHERE)
    single = np.dtype(np.float32)
    for name, world in worlds.items():
        bound = estimator.bind(world.model, _streams(), single)
        sensor, z, u = world.first()  # recordings are double
        holed = z.copy()
        holed[-1] = np.nan
        belief = bound.start(world.prior)
        stages: list[tuple[str, Any]] = [("start", belief)]
        for reading in (z, holed):
            belief = bound.predict(belief, u, world.recording.dt)
            stages.append(("predict", belief))
            belief, innovation = bound.update(belief, sensor, reading, u)
            stages += [("update", belief), ("innovation", _diagnostics(innovation))]
            stages.append(("posterior", bound.posterior(belief)))
        for stage, thing in stages:
            for path, a in _arrays(thing):
                if a.dtype.kind == "f" and a.dtype != single:
                    raise _Broken(f"{name}: `{path}` of {stage} is {a.dtype}")
    return f"every array is {single} ({_say(worlds)})"


# -- covariances -----------------------------------------------------------------------------------


@promise(
    "sound-covariance",
    "The covariance is symmetric and positive semidefinite, or the run has a fault with a reason.",
)
def _sound_covariance(estimator: Estimator) -> str:
    worlds = _suited(estimator, *_EVERYWHERE)
    skew = low = 0.0
    lost = 0
    for name, world in worlds.items():
        track = _run(estimator, world)
        lost += int(np.count_nonzero(track.fault))
        for code in np.unique(track.fault):
            if int(code) not in list(Fault):
                raise _Broken(f"{name}: {_reason(int(code))}")
        for step in track.steps:
            if step.cov is None:
                raise _NotApplicable("it keeps no covariance")
            judged = step.alive
            if step.ess is not None:  # the covariance of so few points is singular or undefined
                judged = judged & (step.ess > world.model.space.d + 1)
            cov = np.moveaxis(step.cov[..., judged], -1, 0)
            sd = np.sqrt(np.einsum("mii->mi", cov))
            corr = cov / (sd[:, :, None] * sd[:, None])
            if not np.isfinite(corr).all():
                raise _Broken(f"{name}: a variance is not positive, and the run has no fault")
            skew = max(skew, float(np.abs(corr - corr.swapaxes(1, 2)).max(initial=0)))
            values = np.linalg.eigvalsh((corr + corr.swapaxes(1, 2)) / 2)
            low = min(low, float(values.min(initial=0)))
    text = f"asymmetry {skew:.0e}, smallest eigenvalue {low:.0e} of a correlation, {lost} runs lost"
    if not (skew <= SYMMETRY and low >= -SEMIDEFINITE):
        raise _Broken(text)
    return f"{text} ({_say(worlds)})"


@promise("honest-covariance", "On a matched linear problem NEES is what a consistent filter has.")
def _honest_covariance(estimator: Estimator) -> str:
    world = _suited(estimator, "matched")["matched"]
    space, size = world.model.space, _sample_size(estimator, world)
    track = _batches(estimator, world)
    if track.steps[0].cov is None:
        raise _NotApplicable("it keeps no covariance")
    if size:
        _enough(track, size, space.d)
    rows = []
    for step in track.steps:
        assert step.cov is not None
        low, _ = linalg.cholesky(step.cov)
        nees = linalg.lower_quadratic(low, space.local(step.mean, step.truth)) / space.d
        good = step.alive
        if step.ess is not None:
            good = good & (step.ess >= assessable_sample(space.d))
        rows.append(np.where(good, nees, np.nan))
    table = np.array(rows)
    lived = table[:, np.isfinite(table).any(axis=0)]
    if lived.shape[1] < 0.9 * table.shape[1]:
        raise _Broken(_lost(track.fault))
    # runs are independent, steps of a run are not
    per_run = np.nanmean(lived, axis=0)
    error = float(per_run.std(ddof=1)) / math.sqrt(len(per_run))
    mean = float(per_run.mean())
    # a sample's own error adds to the truth's, and its covariance is a sample covariance
    extra = MONTE_CARLO**2 / size + 2 / assessable_sample(space.d) if size else 0.0
    lower, upper = 1 - 4 * error, 1 + 4 * error + extra
    text = f"NEES/d {mean:.3f} over {len(per_run)} runs, band {lower:.3f} to {upper:.3f}"
    if not lower <= mean <= upper:
        raise _Broken(text)
    return text
