"""Every estimator against filterpy on whole recordings, and planted bugs that it must find.

Tolerances are those of two implementations of one algorithm in double precision: 1e-12 on linear
models for the Kalman and the linearised filter, 1e-9 elsewhere.
"""

from __future__ import annotations

import math
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from flyoff.checks import filterpy_adapter
from flyoff.checks.crosscheck import crosscheck
from flyoff.estimators import kalman, linearised, sigma_point
from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.models.model import ModelSpec, SensorSpec, trace
from flyoff.numerics.discretise import diagonal
from flyoff.numerics.spaces import Angle, StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.recordings import Recording, draw_start, simulate
from flyoff.study.config import Entry, Experiment, ProblemEntry, load_experiment, select

FILE = """\
format: 1
experiment: cross
seed: 11
runs: 3
problems:
  radar: {kind: coordinated-turn}
  balloon: {kind: linear-tracking}
  late-radar: {kind: coordinated-turn, parameters: {latency: 2 s, steps: 40}}
  attitude: {kind: body-attitude}
conditions:
  nominal: {}
  cautious: {filter: {R_scale: 4}}
estimators:
  ekf: {family: linearised}
  short: {family: linearised, form: short}
  ukf: {family: sigma-point, points: {rule: scaled, alpha: 0.5, beta: 2, kappa: 0}}
  symmetric: {family: sigma-point, points: {rule: symmetric, kappa: gaussian}}
  ckf: {family: sigma-point, points: {rule: cubature}}
  once: {family: sigma-point, redraw: false}
  pf: {family: particle, particles: 50}
  kalman: {family: kalman, only: [balloon]}
"""
REQUIRED = {
    ("radar", "ekf"): 1e-9,
    ("radar", "ukf"): 1e-9,
    ("radar", "symmetric"): 1e-9,
    ("radar", "ckf"): 1e-9,
    ("balloon", "ekf"): 1e-12,
    ("balloon", "kalman"): 1e-12,
}


@pytest.fixture(scope="module")
def experiment(tmp_path_factory) -> Experiment:
    file = tmp_path_factory.mktemp("cross") / "cross.yaml"
    file.write_text(FILE)
    return load_experiment(file)


@pytest.fixture(scope="module")
def found(experiment):
    return {(c.problem, c.estimator): c for c in crosscheck(experiment)}


def one(experiment: Experiment, problem: str, estimator: str, **other):
    (only,) = crosscheck(replace(select(experiment, [problem, estimator]), **other), runs=2)
    return only


# -- what must agree -------------------------------------------------------------------------------


def test_every_cell_appears_once_in_the_order_of_the_file(experiment):
    cells = [
        (p.name, e.name)
        for p in experiment.problems
        for e in experiment.estimators
        if e.applies(p.name)
    ]
    few = replace(experiment, problems=tuple(replace(p, runs=1) for p in experiment.problems[2:]))
    got = [(c.problem, c.estimator) for c in crosscheck(few)]
    assert got == [c for c in cells if c[0] in ("late-radar", "attitude")]


@pytest.mark.parametrize("pair", REQUIRED)
def test_required_tolerance(found, pair):
    got = found[pair]
    assert got.outcome == "agrees"
    assert got.tolerance == REQUIRED[pair]
    assert max(got.deviation_mean, got.deviation_cov) <= REQUIRED[pair]
    assert got.deviation_sigma < 1e-9
    assert got.runs == 3


@pytest.mark.parametrize("problem", ["radar", "balloon"])
def test_everything_the_library_has_agrees(found, problem):
    pairs = [c for (p, _), c in found.items() if p == problem and c.estimator != "pf"]
    assert len(pairs) == (6 if problem == "radar" else 7)
    for c in pairs:
        assert c.outcome == "agrees", c
        # two implementations, not one called twice
        assert c.deviation_cov > 0


def test_the_class_is_named(found):
    assert found["balloon", "kalman"].reference == "KalmanFilter"
    assert found["radar", "ekf"].reference == "ExtendedKalmanFilter"
    assert found["radar", "ckf"].reference == "UnscentedKalmanFilter"
    assert "CubatureKalmanFilter draws no points again" in found["radar", "ckf"].why


def test_the_data_are_those_of_the_experiment_without_a_condition(experiment):
    plain = replace(experiment, conditions=(Entry("nominal", ()),))
    a, b = (one(e, "balloon", "kalman") for e in (experiment, plain))
    assert a == b


# -- what cannot be compared -----------------------------------------------------------------------


def test_a_rotation_cannot_be_represented(found):
    for name in ("ekf", "short", "ukf", "symmetric", "ckf", "once"):
        got = found["attitude", name]
        assert got.outcome == "cannot"
        assert (
            got.why == "the state holds the rotation `attitude`; the library's states are vectors"
        )
        assert math.isnan(got.deviation_mean)
        assert math.isnan(got.deviation_cov)
        assert got.runs == 0


def test_a_particle_filter_has_no_counterpart(found):
    for problem in ("radar", "balloon", "attitude", "late-radar"):
        got = found[problem, "pf"]
        assert (got.outcome, got.reference) == ("cannot", "")
        assert got.why == "the library has no particle filter, only functions that resample"


def test_late_readings(experiment, found):
    got = found["late-radar", "ekf"]
    assert got.outcome == "cannot"
    assert got.why == "readings of `radar` arrive late and are replayed; the library cannot"
    for late in ("apply", "drop"):
        for name in ("ekf", "ckf"):
            assert one(experiment, "late-radar", name, late=late).outcome == "agrees"


def test_an_unknown_family_is_said_to_be_unknown(experiment):
    class Mine(SimpleNamespace):
        pass

    odd = replace(experiment, estimators=(Entry("mine", Mine()),))
    got = crosscheck(select(odd, ["balloon"]))[0]
    assert (got.outcome, got.why) == (
        "cannot",
        "no class of the library is known to be the same as `Mine`",
    )


def test_a_cross_check_of_no_run_is_refused(experiment):
    with pytest.raises(ValueError, match="a cross-check needs at least one run, got 0"):
        crosscheck(experiment, runs=0)


# -- planted bugs ----------------------------------------------------------------------------------


CASES = [
    (Linearised, linearised._LinearisedFilter, "radar", "ekf"),
    (Kalman, kalman._KalmanFilter, "balloon", "kalman"),
    (SigmaPoint, sigma_point._SigmaPointFilter, "radar", "ukf"),
    (SigmaPoint, sigma_point._SigmaPointFilter, "balloon", "ckf"),
]


@pytest.mark.parametrize(("family", "_", "problem", "estimator"), CASES)
def test_process_noise_one_percent_too_large_is_found(
    experiment, monkeypatch, family, _, problem, estimator
):
    bind = family.bind
    monkeypatch.setattr(
        family, "bind", lambda self, model, *rest: bind(self, model.assuming(q_scale=1.01), *rest)
    )
    got = one(experiment, problem, estimator)
    assert got.outcome == "differs"
    assert max(got.deviation_mean, got.deviation_cov) > got.tolerance
    assert got.why.endswith("first beyond the tolerance at step 1 of run 0")


@pytest.mark.parametrize(("_", "cls", "problem", "estimator"), CASES)
def test_measurement_noise_a_millionth_too_large_is_found(
    experiment, monkeypatch, _, cls, problem, estimator
):
    update = cls.update
    monkeypatch.setattr(
        cls,
        "update",
        lambda self, belief, sensor, *rest: update(
            self, belief, replace(sensor, r_scale=1 + 1e-6, memo={}), *rest
        ),
    )
    got = one(experiment, problem, estimator)
    assert got.outcome == "differs"
    assert max(got.deviation_mean, got.deviation_cov) < 1e-3


@pytest.mark.parametrize(("module", "estimator"), [(linearised, "ekf"), (sigma_point, "ckf")])
def test_a_gain_of_the_wrong_sign_is_found(experiment, monkeypatch, module, estimator):
    right = module.correct

    def wrong(*args):
        c = right(*args)
        return replace(c, delta=-c.delta)

    monkeypatch.setattr(module, "correct", wrong)
    assert one(experiment, "balloon", estimator).outcome == "differs"


def test_weights_of_the_mean_in_the_covariance_are_found(experiment, monkeypatch):
    scaled = Scaled.points

    def wrong(self, d):
        return replace(scaled(self, d), cov_weights=scaled(self, d).mean_weights)

    monkeypatch.setattr(Scaled, "points", wrong)
    got = one(experiment, "radar", "ukf")
    assert got.outcome == "differs"
    # on a linear model the centre has no deviation, so the same mistake does nothing
    assert one(experiment, "balloon", "ukf").outcome == "agrees"


def test_points_that_are_not_drawn_again_are_found(experiment, monkeypatch):
    got = one(experiment, "radar", "ckf")
    assert got.outcome == "agrees"
    bind = SigmaPoint.bind
    monkeypatch.setattr(
        SigmaPoint,
        "bind",
        lambda self, *rest: bind(SigmaPoint(points=self.points, redraw=False), *rest),
    )
    assert one(experiment, "radar", "ckf").outcome == "differs"


def test_a_run_that_only_one_side_loses_is_a_difference(experiment, monkeypatch):
    right = linearised.correct

    def broken(*args):
        c = right(*args)
        return replace(c, delta=np.where(np.arange(c.delta.shape[1]) == 1, np.nan, c.delta))

    monkeypatch.setattr(linearised, "correct", broken)
    got = one(experiment, "balloon", "ekf")
    assert got.outcome == "differs"
    assert got.why == "only the estimator loses run 1, at step 1"


# -- angles, inputs, several sensors at several rates, missing parts of readings -------------------

STATE = StateSpace(
    Vector("place", 2, "m", 50.0), Angle("heading"), Vector("drift", 1, "rad/s", 0.1)
)
WHEEL = StateSpace(Vector("speed", 1, "m/s", 5.0))
NOISE = StateSpace(Vector("slip", 1, "m/s"), Vector("turn", 1, "rad"), Vector("drift", 1, "rad/s"))
INDEFINITE = Symmetric(kappa=-3.9)
STREAMS = Streams(5, "test", "rover", range(3))


def rover():
    """A cart that circles a beacon: noise along its heading, compass, range and bearing."""

    def drive(x, u, w, p, dt):
        s = (u.speed + w.slip) * dt
        (a, b), c = x.place, x.heading
        return (a + s * np.cos(c), b + s * np.sin(c)), c + x.drift * dt + w.turn, x.drift + w.drift

    def beacon(x, u, p):
        (a, b), c = x.place, x.heading
        return np.hypot(a - 5, b), np.arctan2(b, a - 5) - c

    return trace(
        ModelSpec(
            space=STATE,
            transition=drive,
            noise=NOISE,
            noise_covariance=lambda p, dt: diagonal(0.04, 1e-5 * dt, 1e-6 * dt),
            inputs=WHEEL,
            sensors=(
                SensorSpec(
                    "beacon",
                    StateSpace(Vector("range", 1, "m"), Angle("bearing")),
                    beacon,
                    lambda x, u, p: ((0.25 + 1e-4 * x.place[0] ** 2, 1e-4), (1e-4, 4e-4)),
                    rate=1.0,
                ),
                SensorSpec(
                    "compass",
                    StateSpace(Angle("heading")),
                    lambda x, u, p: x.heading,
                    lambda x, u, p: ((1e-3,),),
                    rate=2.0,
                ),
            ),
        )
    )


class Rover:
    """What `crosscheck` needs of a problem."""

    def __init__(self, sensors=("beacon", "compass"), sharp=False) -> None:
        # sharp: the place is known, the heading is not
        self.sensors, self.variance = sensors, ([1e-4] * 2 + [4.0] if sharp else [1, 1, 0.01])

    def filter_model(self):
        return rover()

    def record(self, streams: Streams, error_scale: float) -> Recording:
        model = rover()
        times = np.arange(121) * 0.5
        start = np.array([0.0, -12.0, 0.3, 0.4])[:, None]
        prior = draw_start(STATE, start, np.diag([*self.variance, 1e-4]), streams, error_scale)
        runs = len(streams)
        inputs = 5 + streams.normal("speed", (120, 1))
        start = np.repeat(start, runs, axis=1)
        truth, readings = simulate(model, times, start, inputs, streams)
        for r in readings:
            r.values[streams.uniform(f"lost:{r.sensor}", r.values.shape[:2]) < 0.2] = np.nan
        readings = tuple(r for r in readings if r.sensor in self.sensors)
        return Recording(times, truth, inputs, readings, prior, streams.runs)


def circling(*estimators, **options):
    problem = ProblemEntry("rover", "rover", Rover(**options), 3, (), None)
    entries = tuple(Entry(str(i), what) for i, what in enumerate(estimators))
    return crosscheck(Experiment("x", "", 5, 3, "drop", (problem,), (), entries, b"", ""))


def test_the_rover_turns_past_the_cut_and_misses_parts_of_readings():
    """The data hold what the comparison below is meant to cover."""
    recording = Rover().record(STREAMS, 1.0)
    beacon, compass = recording.readings
    assert (np.abs(np.diff(compass.values[:, 0], axis=0)) > 6).any()
    # what the model says of the bearing before it is wrapped
    (a, b), c = (
        np.moveaxis(recording.truth[beacon.steps, :2], 1, 0),
        recording.truth[beacon.steps, 2],
    )
    assert (np.abs(np.arctan2(b, a - 5) - np.angle(np.exp(1j * c))) > np.pi).any()
    assert len(compass.steps) == 2 * len(beacon.steps)
    some = np.isnan(beacon.values).sum(axis=1)
    assert {0, 1, 2} <= set(some.ravel())
    assert filterpy_adapter.most_readings(recording) == 2


def test_angles_inputs_and_several_sensors_agree():
    rules = Scaled(), Symmetric(), Cubature()
    got = circling(Linearised(), Linearised(form="short"), *(SigmaPoint(points=r) for r in rules))
    for c in got:
        assert c.outcome == "agrees", c
        assert c.tolerance == 1e-9


def test_without_redrawing_one_reading_a_step_agrees_and_two_cannot():
    (alone,) = circling(SigmaPoint(redraw=False), sensors=("compass",))
    assert alone.outcome == "agrees", alone
    (both,) = circling(SigmaPoint(redraw=False))
    assert both.outcome == "cannot"
    assert both.why.startswith("without redrawing, a second update in a step takes deviations")


def test_points_with_huge_weights_are_given_the_digits_they_lose():
    (got,) = circling(SigmaPoint(points=Scaled(alpha=1e-2)))
    assert got.outcome == "agrees", got
    assert 1e-9 < got.tolerance < 1e-4


# -- the adapter -----------------------------------------------------------------------------------


def test_cubature_points_are_symmetric_points_without_a_centre_weight():
    """The library's own symmetric points with kappa 0 stand for the points carried over."""
    model, recording = rover(), Rover().record(STREAMS, 1.0)
    carried = filterpy_adapter.unscented(model, recording, Cubature())
    own = filterpy_adapter.unscented(model, recording, Symmetric(kappa=0.0))
    for a, b in zip(carried, own, strict=True):
        np.testing.assert_allclose(a.mean, b.mean, rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(a.cov, b.cov, rtol=1e-9, atol=1e-9)


def test_why_the_cubature_class_of_the_library_is_not_the_reference():
    """On a linear model it is not the Kalman filter: its points are not drawn again after Q."""
    from filterpy.kalman import CubatureKalmanFilter, KalmanFilter

    f, h = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[1.0, 0.0]])
    exact = KalmanFilter(2, 1)
    exact.F, exact.H = f, h
    other = CubatureKalmanFilter(2, 1, 1.0, hx=lambda x: h @ x, fx=lambda x, dt: f @ x)
    for kf in (exact, other):
        kf.x, kf.P = np.zeros((2, 1)), 10 * np.eye(2)
        kf.Q = 0.1 * np.array([[1 / 3, 1 / 2], [1 / 2, 1]])
        for k in range(60):
            kf.predict()
            kf.update(np.array([[float(k)]]))
    assert exact.P[0, 0] == pytest.approx(0.54852763, abs=1e-8)
    assert abs(other.P[0, 0] / exact.P[0, 0] - 1) > 0.05


def test_the_reference_says_where_it_broke_down():
    """Points with a negative centre weight on a curve: the library raises, the step says so."""
    recording = Rover(sharp=True).record(STREAMS, 1.0)
    steps = list(filterpy_adapter.unscented(rover(), recording, INDEFINITE))
    assert len(steps) == recording.steps
    assert not any(s.sound.any() for s in steps)
    assert np.isnan(steps[-1].mean).all()


def test_runs_that_both_sides_lose_at_once_leave_nothing_to_compare():
    (got,) = circling(SigmaPoint(points=INDEFINITE), sharp=True)
    assert got.outcome == "cannot"
    assert got.why == "; ".join(f"both lose run {i}, at step 1" for i in range(3))
    assert got.runs == 0


def test_refusals():
    problem = LinearTracking(steps=5)
    recording = problem.record(STREAMS, 1.0)
    with pytest.raises(ValueError, match="KalmanFilter needs a linear model"):
        filterpy_adapter.kalman(rover(), recording)
    with pytest.raises(ValueError, match="several readings at one step"):
        filterpy_adapter.unscented(rover(), Rover().record(STREAMS, 1.0), Cubature(), redraw=False)
    (fix,) = recording.readings
    late = replace(recording, readings=(replace(fix, arrivals=fix.steps + 1),))
    with pytest.raises(ValueError, match="readings of `fix` arrive late and are replayed"):
        filterpy_adapter.kalman(problem.filter_model(), late)
