"""Promises that hold for every estimator, and what tells their options apart."""

from __future__ import annotations

import math
from dataclasses import fields, replace

import numpy as np
import pytest

from flyoff.estimators.contract import Fault, Gaussian, Weighted, moments
from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.particle import Particle
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.filtering import run_filter
from flyoff.models.model import Model
from flyoff.numerics.streams import Streams
from flyoff.problems.body_attitude import BodyAttitude
from flyoff.problems.coordinated_turn import CoordinatedTurn
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.recordings import Recording
from flyoff.registry import discover

RUNS = tuple(range(6))
NONLINEAR = {
    "joseph": Linearised(),
    "short": Linearised(form="short"),
    "scaled": SigmaPoint(),
    "scaled, not redrawn": SigmaPoint(redraw=False),
    "symmetric": SigmaPoint(points=Symmetric()),
    "cubature": SigmaPoint(points=Cubature()),
    "particle": Particle(particles=150),
}
GAUSSIAN = {k: v for k, v in NONLINEAR.items() if k != "particle"}
EVERY = {"kalman": Kalman(), **NONLINEAR}
PROBLEMS = {
    "linear": LinearTracking(steps=30),
    "turn": CoordinatedTurn(steps=30),
    "attitude": BodyAttitude(),
}
CASES = [
    (name, problem)
    for problem in PROBLEMS
    for name in EVERY
    if (name != "kalman" or problem == "linear")
    # two sensors at one time: only with points drawn again, see the test of it
    and (name != "scaled, not redrawn" or problem != "attitude")
]
ON_ROTATIONS = [name for name in NONLINEAR if name != "scaled, not redrawn"]


def streams(runs=RUNS, seed: int = 5) -> Streams:
    return Streams(seed, "test", "estimators", runs)


def head(recording: Recording, steps: int) -> Recording:
    """The first steps of a recording without late readings."""
    readings = []
    for r in recording.readings:
        inside = r.steps <= steps
        readings.append(
            replace(r, steps=r.steps[inside], arrivals=r.arrivals[inside], values=r.values[inside])
        )
    return replace(
        recording,
        times=recording.times[: steps + 1],
        truth=recording.truth[: steps + 1],
        inputs=recording.inputs[:steps],
        readings=tuple(readings),
    )


@pytest.fixture(scope="module")
def data() -> dict[str, tuple[Model, Recording]]:
    return {
        name: (problem.filter_model(), head(problem.record(streams(), 1.0), 30))
        for name, problem in PROBLEMS.items()
    }


class Keep:
    def __init__(self) -> None:
        self.means: list[np.ndarray] = []
        self.covs: list[np.ndarray] = []
        self.nis: list[np.ndarray] = []

    def observe(self, step):
        self.means.append(step.mean)
        self.covs.append(step.cov)
        self.nis += [innovation.nis for _, innovation in step.innovations]


def run(estimator, model, recording, runs=None, dtype=np.float64, seed=5) -> Keep:
    runs = recording.runs if runs is None else runs
    keep = Keep()
    outcome = run_filter(
        estimator.bind(model, streams(runs, seed), dtype), model, recording, [keep]
    )
    assert not outcome.fault.any()
    return keep


# -- batches, order, seeds -------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "problem"), CASES)
def test_a_batch_is_its_runs_one_by_one_bit_for_bit(data, name, problem):
    model, recording = data[problem]
    whole = run(EVERY[name], model, recording)
    for m in RUNS:
        alone = recording.select(slice(m, m + 1)).padded()
        single = run(EVERY[name], model, alone, runs=(m, m))
        for got, want in ((single.means, whole.means), (single.covs, whole.covs)):
            np.testing.assert_array_equal(np.array(got)[..., 0], np.array(want)[..., m])
        np.testing.assert_array_equal(np.array(single.nis)[:, 0], np.array(whole.nis)[:, m])


@pytest.mark.parametrize(("name", "problem"), CASES)
def test_permuting_runs_permutes_results(data, name, problem):
    model, recording = data[problem]
    order = np.array([3, 0, 5, 1, 4, 2])
    mixed = replace(
        recording,
        truth=recording.truth[:, :, order],
        inputs=recording.inputs[:, :, order],
        readings=tuple(replace(r, values=r.values[:, :, order]) for r in recording.readings),
        prior=recording.prior.runs(order),
        runs=tuple(recording.runs[i] for i in order),
    )
    whole, permuted = run(EVERY[name], model, recording), run(EVERY[name], model, mixed)
    np.testing.assert_array_equal(np.array(permuted.means), np.array(whole.means)[..., order])
    np.testing.assert_array_equal(np.array(permuted.covs), np.array(whole.covs)[..., order])


@pytest.mark.parametrize(("name", "problem"), CASES)
def test_same_seed_same_bits(data, name, problem):
    model, recording = data[problem]
    first, second = (run(EVERY[name], model, recording) for _ in range(2))
    np.testing.assert_array_equal(first.means, second.means)
    np.testing.assert_array_equal(first.covs, second.covs)
    other = run(EVERY[name], model, recording, seed=6)
    # only the particle filter has random numbers of its own
    assert np.array_equal(first.means, other.means) == (name != "particle")


# -- angles ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", NONLINEAR)
@pytest.mark.parametrize("turns", [1, -2])
def test_whole_turns_of_a_measured_bearing_change_nothing(data, name, turns):
    model, recording = data["turn"]
    (radar,) = recording.readings
    moved = radar.values.copy()
    moved[:, 1] += 2 * math.pi * turns
    turned = replace(recording, readings=(replace(radar, values=moved),))
    a, b = run(NONLINEAR[name], model, recording), run(NONLINEAR[name], model, turned)
    np.testing.assert_allclose(a.means, b.means, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(a.nis, b.nis, rtol=1e-6, atol=1e-9)


@pytest.mark.parametrize("name", GAUSSIAN)
def test_half_a_turn_of_the_whole_scene_changes_nothing(data, name):
    # a target straight ahead, and one behind the radar, where sigma points straddle the cut
    model, recording = data["turn"]
    sensor, u = model.sensors["radar"], recording.inputs[0]
    prior, flip = recording.prior, np.array([-1.0, -1.0, -1.0, -1.0, 1.0])[:, None]
    mean = prior.mean.copy()
    mean[:2] = [[1500.0], [0.0]]
    mean[2:4] = [[0.0], [0.0]]
    # wide enough for a mean by sines or about zero to go wrong
    ahead = replace(prior, mean=mean, cov=prior.cov * 100)
    behind = replace(ahead, mean=mean * flip)
    z = np.array([[1490.0], [0.01]]) + np.zeros(len(RUNS))
    turned = np.array([[1490.0], [0.01 - math.pi]]) + np.zeros(len(RUNS))
    out = []
    for start, reading in ((ahead, z), (behind, turned)):
        bound = GAUSSIAN[name].bind(model, streams())
        moved = bound.predict(bound.start(start), u, 1.0)
        out.append((moved, *bound.update(moved, sensor, reading, u)))
    (p, a, i), (q, b, j) = out
    signs = flip[:, :, None] * flip[None, :, 0, None]
    for one, other in ((p, q), (a, b)):
        np.testing.assert_allclose(other.mean * flip, one.mean, rtol=1e-9, atol=1e-6)
        np.testing.assert_allclose(other.cov * signs, one.cov, rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(j.residual, i.residual, rtol=1e-6, atol=1e-9)
    np.testing.assert_allclose(j.nis, i.nis, rtol=1e-6)
    # the bearing is 0.01 rad off, not half a turn
    assert np.abs(i.residual[1]).max() < 0.1


@pytest.mark.parametrize("name", ON_ROTATIONS)
def test_the_sign_of_a_quaternion_changes_nothing(data, name):
    model, recording = data["attitude"]
    mean = recording.prior.mean.copy()
    mean[:4] *= -1
    flipped = replace(recording, prior=replace(recording.prior, mean=mean))
    a, b = run(NONLINEAR[name], model, recording), run(NONLINEAR[name], model, flipped)
    gap = model.space.local(np.moveaxis(a.means, 0, 1), np.moveaxis(b.means, 0, 1))
    assert np.abs(gap).max() < 1e-9
    np.testing.assert_allclose(a.covs, b.covs, rtol=1e-6, atol=1e-12)


@pytest.mark.parametrize("name", ON_ROTATIONS)
def test_quaternions_of_the_estimate_have_unit_length(data, name):
    means = np.array(run(NONLINEAR[name], *data["attitude"]).means)
    np.testing.assert_allclose(np.linalg.norm(means[:, :4], axis=1), 1, rtol=0, atol=1e-9)


# -- forms and options -----------------------------------------------------------------------------


@pytest.mark.parametrize("problem", PROBLEMS)
def test_joseph_equals_short_in_double(data, problem):
    a, b = run(Linearised(), *data[problem]), run(Linearised(form="short"), *data[problem])
    scale = np.sqrt(np.einsum("tiim->tim", np.array(a.covs)))
    gap = np.abs(np.array(a.covs) - np.array(b.covs)) / (scale[:, :, None] * scale[:, None])
    assert gap.max() < 1e-9
    d = data[problem][0].space.d
    error = np.array(
        [data[problem][0].space.local(x, y) for x, y in zip(a.means, b.means, strict=True)]
    )
    assert error.shape[1] == d
    assert (np.abs(error) / scale).max() < 1e-9


def test_joseph_holds_in_single_precision_where_the_short_form_does_not():
    # one update with sigma prior/sigma measurement = 10 000: the short form may lose the whole
    # posterior variance (derived in single precision); Joseph keeps it
    model = LinearTracking(
        fix_sigma=1.0, fix_correlation=0.0, position_sigma=1e4, missing=0.0, steps=2
    ).filter_model()
    problem = LinearTracking(
        fix_sigma=1.0, fix_correlation=0.0, position_sigma=1e4, missing=0.0, steps=2
    )
    recording = problem.record(streams(), 1.0)
    sensor, u = model.sensors["fix"], np.zeros((0, len(RUNS)), np.float32)
    z = recording.readings[0].values[0].astype(np.float32)
    error = {}
    for form in ("joseph", "short"):
        single = Linearised(form=form).bind(model, streams(), np.float32)
        after, _ = single.update(single.start(recording.prior), sensor, z, u)
        double = Linearised().bind(model, streams())
        exact, _ = double.update(double.start(recording.prior), sensor, z.astype(float), u)
        error[form] = np.abs(after.cov[0, 0] / exact.cov[0, 0] - 1).max()
    assert error["joseph"] < 1e-3
    assert error["short"] > 10 * error["joseph"]


@pytest.mark.parametrize("rule", [Scaled(), Symmetric(), Cubature()], ids=lambda r: r.rule)
def test_a_linear_problem_is_the_kalman_filter_only_when_points_are_redrawn(data, rule):
    model, recording = data["linear"]
    exact = run(Kalman(), model, recording)
    redrawn = run(SigmaPoint(points=rule), model, recording)
    np.testing.assert_allclose(redrawn.means, exact.means, rtol=0, atol=1e-9)
    np.testing.assert_allclose(redrawn.covs, exact.covs, rtol=0, atol=1e-9)
    reused = run(SigmaPoint(points=rule, redraw=False), model, recording)
    assert np.abs(np.array(reused.means) - np.array(exact.means)).max() > 1e-3
    assert np.abs(np.array(reused.covs) - np.array(exact.covs)).max() > 1e-3


def test_redrawing_matters_on_a_nonlinear_problem(data):
    a = run(SigmaPoint(), *data["turn"])
    b = run(SigmaPoint(redraw=False), *data["turn"])
    assert np.abs(np.array(a.means) - np.array(b.means))[:, :2].max() > 1e-2


def test_two_sensors_at_one_time_need_redrawn_points(data):
    # the second update would use the spread from before the first one
    model, recording = data["attitude"]
    for redraw, code in ((True, Fault.NONE), (False, Fault.NOT_POSITIVE_DEFINITE)):
        bound = SigmaPoint(redraw=redraw).bind(model, streams())
        outcome = run_filter(bound, model, recording)
        assert (outcome.fault == code).all()


def test_first_update_without_redrawing_uses_the_propagated_points():
    # by hand on one linear state: points +-s of the prior move to f s, noise is added afterwards,
    # so the predicted measurement has the spread of the moved points only
    problem = LinearTracking(steps=1, missing=0.0)
    model, recording = problem.filter_model(), problem.record(streams(), 1.0)
    bound = SigmaPoint(points=Cubature(), redraw=False).bind(model, streams())
    u, z = np.zeros((0, len(RUNS))), recording.readings[0].values[0]
    start = bound.start(recording.prior)
    moved = bound.predict(start, u, 1.0)
    _, innovation = bound.update(moved, model.sensors["fix"], z, u)
    s = np.einsum("ikm,jkm->ijm", innovation.factor, innovation.factor)
    f = model.linearise(start.mean, u, 1.0)[1]
    propagated = np.einsum("ikm,klm,jlm->ijm", f, start.cov, f)
    r = np.array([[1.0, problem.fix_correlation], [problem.fix_correlation, 1.0]])
    want = propagated[:2, :2] + problem.fix_sigma**2 * r[:, :, None]
    np.testing.assert_allclose(s, want, rtol=1e-10)
    added = model.added_noise(start.mean, u, 1.0)
    np.testing.assert_allclose(moved.cov, propagated + added, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("name", GAUSSIAN)
def test_filters_agree_where_the_problem_is_nearly_linear(data, name):
    # a small prior on rotations: one prediction, and one update with each sensor
    model, recording = data["attitude"]
    small = replace(recording.prior, cov=recording.prior.cov * 1e-6)
    u = recording.inputs[0]
    exact, bound = (e.bind(model, streams()) for e in (Linearised(), GAUSSIAN[name]))
    a, b = (f.predict(f.start(small), u, 0.02) for f in (exact, bound))
    for reading in recording.readings:
        sensor, z = model.sensors[reading.sensor], reading.values[0]
        a, _ = exact.update(a, sensor, z, u)
        b, _ = bound.update(b, sensor, z, u)
        if name == "scaled, not redrawn":
            break
    scale = np.sqrt(np.einsum("iim->im", a.cov))
    assert (np.abs(model.space.local(a.mean, b.mean)) / scale).max() < 1e-2
    gap = np.abs(a.cov - b.cov) / (scale[:, None] * scale)
    assert gap.max() < 1e-2


def corrected_by_hand(model, sensor, rule, belief, z, u):
    """Mean and covariance after one reading in the frame of the estimate before, plain matrices."""
    space, m = model.space, z.shape[0]
    delta = np.empty((space.d, len(RUNS)))
    cov = np.empty_like(belief.cov)
    for k in range(len(RUNS)):
        p, one = belief.cov[..., k], slice(k, k + 1)
        r = sensor.covariance(belief.mean, u, model.parameters)
        r = r[..., min(k, r.shape[-1] - 1)]
        if rule is None:
            seen, h = (v[..., k] for v in sensor.linearise(belief.mean, u, model.parameters))
            cross, s = p @ h.T, h @ p @ h.T + r
        else:
            dev = np.linalg.cholesky(p) @ rule.points
            points = space.retract(belief.mean[:, None, one], dev[:, :, None])
            images = model.measure(sensor, points, u[:, one])[..., 0]
            seen = images @ rule.mean_weights
            away = images - seen[:, None]
            cross = (dev * rule.cov_weights) @ away.T
            s = (away * rule.cov_weights) @ away.T + r
        gain = cross @ np.linalg.inv(s)
        delta[:, k] = gain @ (z[:, k] - seen[:m])
        cov[..., k] = p - gain @ s @ gain.T
    return delta, cov


@pytest.mark.parametrize("name", [n for n in ON_ROTATIONS if n != "particle"])
def test_an_update_on_rotations_by_hand(data, name):
    # the covariance is carried into the frame of the corrected attitude: with a correction of many
    # degrees that is not a detail (F. L. Markley, JGCD 26(2):311-317, 2003)
    model, recording = data["attitude"]
    estimator = NONLINEAR[name]
    rule = None if isinstance(estimator, Linearised) else estimator.points.points(6)
    sensor, u = model.sensors["magnetometer"], recording.inputs[0]
    (reading,) = (r for r in recording.readings if r.sensor == "magnetometer")
    bound = estimator.bind(model, streams())
    root = 0.3 * np.random.default_rng(1).standard_normal((6, 6))
    wide = recording.prior.cov * 0 + (root @ root.T)[:, :, None] + 0.01 * np.eye(6)[:, :, None]
    before = bound.start(replace(recording.prior, cov=wide))
    z = reading.values[0]
    after, _ = bound.update(before, sensor, z, u)
    delta, cov = corrected_by_hand(model, sensor, rule, before, z, u)
    assert np.linalg.norm(delta[:3], axis=0).max() > 0.2
    want = model.space.retract(before.mean, delta)
    assert np.abs(model.space.local(want, after.mean)).max() < 1e-9
    np.testing.assert_allclose(after.cov, model.space.reset(cov, delta), rtol=0, atol=1e-9)
    assert np.abs(after.cov - cov).max() > 1e-3


@pytest.mark.parametrize("name", GAUSSIAN)
def test_innovations_of_a_gaussian_filter(data, name):
    # nis = residual' S^-1 residual and the Gaussian log likelihood, from the factor of S
    model, recording = data["turn"]
    bound = GAUSSIAN[name].bind(model, streams())
    u = recording.inputs[0]
    moved = bound.predict(bound.start(recording.prior), u, 1.0)
    _, i = bound.update(moved, model.sensors["radar"], recording.readings[0].values[0], u)
    for m in range(len(RUNS)):
        s = i.factor[..., m] @ i.factor[..., m].T
        nis = i.residual[:, m] @ np.linalg.solve(s, i.residual[:, m])
        assert i.nis[m] == pytest.approx(nis, rel=1e-10)
        want = -0.5 * (nis + math.log(np.linalg.det(2 * math.pi * s)))
        assert i.log_likelihood[m] == pytest.approx(want, rel=1e-10)
        assert i.count[m] == 2


# -- types, purity ---------------------------------------------------------------------------------


def arrays_of(thing) -> dict[str, np.ndarray]:
    return {
        f.name: getattr(thing, f.name)
        for f in fields(thing)
        if isinstance(getattr(thing, f.name), np.ndarray)
    }


def floats_of(thing) -> dict[str, np.ndarray]:
    return {k: v for k, v in arrays_of(thing).items() if v.dtype.kind == "f"}


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize(("name", "problem"), CASES)
def test_single_precision_stays_single(data, name, problem, dtype):
    model, recording = data[problem]
    bound = EVERY[name].bind(model, streams(), dtype)
    u = recording.inputs[0].astype(dtype)
    belief = bound.start(recording.prior)
    stages = [belief]
    belief = bound.predict(belief, u, recording.dt)
    stages.append(belief)
    for reading in recording.readings:
        z = reading.values[0].astype(dtype)
        belief, _ = bound.update(belief, model.sensors[reading.sensor], z, u)
        stages.append(belief)
    stages += [bound.predict(belief, u, recording.dt), bound.posterior(belief)]
    for stage in stages:
        for part, value in floats_of(stage).items():
            assert value.dtype == dtype, (type(stage).__name__, part)


@pytest.mark.parametrize(("name", "problem"), CASES)
def test_single_precision_of_a_whole_recording(data, name, problem):
    # a recording is double: the filter's own arithmetic stays single
    model, recording = data[problem]
    keep = run(EVERY[name], model, recording, dtype=np.float32)
    assert keep.means[-1].dtype == np.float32
    assert keep.covs[-1].dtype == np.float32
    wide = run(EVERY[name], model, recording)
    sigma = np.sqrt(np.einsum("tiim->tim", np.array(wide.covs)))
    gap = np.array(
        [model.space.local(x, y.astype(float)) for x, y in zip(wide.means, keep.means, strict=True)]
    )
    if name == "particle":
        # rounding may pick other parents, and then another cloud of as good an answer follows
        assert np.median(np.abs(gap) / sigma) < 0.5
    else:
        assert (np.abs(gap) / sigma).max() < 0.1


@pytest.mark.parametrize(("name", "problem"), CASES)
def test_predict_and_update_leave_their_arguments_alone(data, name, problem):
    model, recording = data[problem]
    bound = EVERY[name].bind(model, streams())
    u, z = recording.inputs[0].copy(), recording.readings[0].values[0].copy()
    sensor = model.sensors[recording.readings[0].sensor]
    start = bound.start(recording.prior)
    moved = bound.predict(start, u, recording.dt)
    for belief in (start, moved):
        arrays = arrays_of(belief)
        kept = {k: v.copy() for k, v in arrays.items()}
        for a in (*arrays.values(), u, z):
            a.flags.writeable = False
        one = bound.predict(belief, u, recording.dt)
        two, _ = bound.update(belief, sensor, z, u)
        bound.posterior(belief)
        for k, a in arrays.items():
            np.testing.assert_array_equal(a, kept[k])
        again = bound.predict(belief, u, recording.dt)
        for k, v in arrays_of(one).items():
            np.testing.assert_array_equal(v, arrays_of(again)[k])
        assert one.step == belief.step + 1
        assert two.step == belief.step


# -- particles -------------------------------------------------------------------------------------


def test_particle_posterior_keeps_its_weights_until_the_next_prediction(data):
    model, recording = data["turn"]
    bound = Particle(particles=150, threshold=1.0).bind(model, streams())
    u = recording.inputs[0]
    cloud = bound.predict(bound.start(recording.prior), u, 1.0)
    np.testing.assert_array_equal(cloud.log_weights, 0)
    after, innovation = bound.update(
        cloud, model.sensors["radar"], recording.readings[0].values[0], u
    )
    np.testing.assert_array_equal(after.log_weights.max(axis=0), 0)
    np.testing.assert_array_equal(after.points, cloud.points)
    posterior = bound.posterior(after)
    assert isinstance(posterior, Weighted)
    w = np.exp(posterior.log_weights)
    w /= w.sum(axis=0)
    ess = 1 / (w**2).sum(axis=0)
    np.testing.assert_allclose(innovation.ess, ess, rtol=1e-12)
    np.testing.assert_allclose(moments(model.space, posterior)[2], ess, rtol=1e-12)
    # weights are the likelihoods of the reading
    seen = model.measure(model.sensors["radar"], cloud.points, u)
    residual = recording.readings[0].values[0][:, None] - seen
    residual[1] = (residual[1] + math.pi) % (2 * math.pi) - math.pi
    quad = residual[0] ** 2 / 100 + residual[1] ** 2 / 1e-5
    log_w = -quad / 2 - (-quad / 2).max(axis=0)
    np.testing.assert_allclose(after.log_weights, log_w, rtol=1e-6, atol=1e-9)
    # and the next prediction resamples
    resampled = bound.predict(after, u, 1.0)
    np.testing.assert_array_equal(resampled.log_weights, 0)
    assert (resampled.parents < 150).all()


def test_a_low_threshold_does_not_resample(data):
    model, recording = data["turn"]
    bound = Particle(particles=150, threshold=1e-9).bind(model, streams())
    u = recording.inputs[0]
    cloud = bound.predict(bound.start(recording.prior), u, 1.0)
    after, _ = bound.update(cloud, model.sensors["radar"], recording.readings[0].values[0], u)
    moved = bound.predict(after, u, 1.0)
    np.testing.assert_array_equal(moved.log_weights, after.log_weights)
    assert (moved.parents == 150).all()


def test_particle_likelihood_is_the_average_of_the_particles(data):
    model, recording = data["linear"]
    bound = Particle(particles=4000).bind(model, streams())
    exact = Kalman().bind(model, streams())
    u = recording.inputs[0]
    a, b = (f.predict(f.start(recording.prior), u, 1.0) for f in (bound, exact))
    z = np.where(np.isnan(recording.readings[0].values[0]), 1.0, recording.readings[0].values[0])
    _, mine = bound.update(a, model.sensors["fix"], z, u)
    _, theirs = exact.update(b, model.sensors["fix"], z, u)
    np.testing.assert_allclose(mine.log_likelihood, theirs.log_likelihood, atol=0.3)
    np.testing.assert_allclose(mine.nis, theirs.nis, rtol=0.2, atol=0.05)


# -- what an estimator says of itself --------------------------------------------------------------


def test_suits():
    linear, turn = (PROBLEMS[p].filter_model() for p in ("linear", "turn"))
    for estimator in EVERY.values():
        assert estimator.suits(linear) is None
    assert Kalman().suits(turn) == "the model is not linear"
    for estimator in NONLINEAR.values():
        assert estimator.suits(turn) is None
    assert set(discover("estimator")) >= {"kalman", "linearised", "sigma-point", "particle"}


@pytest.mark.parametrize(("name", "problem"), CASES)
def test_operations_are_finite_and_grow_with_the_readings(data, name, problem):
    model, recording = data[problem]
    bound = EVERY[name].bind(model, streams())
    rates = recording.readings_per_step()
    some = bound.operations(rates).total
    assert bound.operations({}).total > 0
    assert bound.operations({}).total < some < bound.operations(dict.fromkeys(rates, 2)).total
    assert math.isfinite(some)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Linearised(form="long"), "form"),
        (lambda: Linearised(shape="joseph"), "shape"),
        (lambda: SigmaPoint(points="cubature"), "points"),
        (lambda: SigmaPoint(points={"rule": "cubatur"}), "cubature"),
        (lambda: Particle(particles=1), "particles"),
        (lambda: Particle(threshold=0.0), "threshold"),
        (lambda: Particle(threshold=1.5), "threshold"),
        (lambda: Particle(resampling="roulette"), "resampling"),
    ],
)
def test_wrong_options_are_refused_by_name(make, words):
    with pytest.raises(ValueError, match=words):
        make()


def test_options_are_frozen_and_comparable():
    assert SigmaPoint(points={"rule": "scaled", "alpha": 0.1}) == SigmaPoint(
        points=Scaled(alpha=0.1)
    )
    assert SigmaPoint(points=Cubature()) != SigmaPoint()
    with pytest.raises(AttributeError, match="form"):
        Linearised().form = "short"


def test_posterior_of_a_gaussian_filter_is_its_belief(data):
    model, recording = data["linear"]
    bound = Linearised().bind(model, streams())
    belief = bound.start(recording.prior)
    posterior = bound.posterior(belief)
    assert isinstance(posterior, Gaussian)
    np.testing.assert_array_equal(posterior.mean, recording.prior.mean)
    np.testing.assert_array_equal(posterior.cov, recording.prior.cov)


# -- do they work? ---------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["joseph", "scaled", "cubature"])
def test_attitude_converges(name):
    # from 10 deg of tilt and 20 deg of heading error; the filters' own tuning is not the point
    problem = BodyAttitude()
    recording = head(problem.record(streams(), 1.0), 400)
    model = problem.filter_model()
    keep = run(NONLINEAR[name], model, recording)
    error = np.array(
        [
            np.linalg.norm(model.space.local(m, t)[:3], axis=0)
            for m, t in zip(keep.means, recording.truth[1:], strict=True)
        ]
    )
    assert np.median(error[0]) > math.radians(8)
    assert np.median(error[-50:]) < math.radians(6)
