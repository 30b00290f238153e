"""The time loop: late readings, missing components, lost runs, and what it leaves alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from flyoff.estimators.contract import Fault
from flyoff.estimators.kalman import Kalman
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.particle import Particle
from flyoff.estimators.point_rules.cubature import Cubature
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.filtering import run_filter
from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.models.priors import GaussianPrior
from flyoff.numerics.discretise import diagonal, white_acceleration
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.problems.body_attitude import BodyAttitude
from flyoff.problems.coordinated_turn import CoordinatedTurn
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.recordings import Readings, Recording

RUNS = 5
STREAMS = Streams(1, "test", "loop", range(RUNS))
FILTERS = {
    "linearised": Linearised(),
    "scaled": SigmaPoint(),
    "cubature": SigmaPoint(points=Cubature()),
    "particle": Particle(particles=200),
}
LINEAR = {"kalman": Kalman(), **FILTERS}


class Keep:
    """Observer that keeps every step."""

    def __init__(self) -> None:
        self.steps: list = []

    def observe(self, step):
        self.steps.append(step)

    @property
    def means(self) -> np.ndarray:
        return np.array([s.mean for s in self.steps])

    @property
    def covs(self) -> np.ndarray:
        return np.array([s.cov for s in self.steps])


def run(estimator, model: Model, recording: Recording, late="replay", streams=STREAMS):
    keep = Keep()
    outcome = run_filter(estimator.bind(model, streams), model, recording, [keep], late)
    return keep, outcome


def assert_same_bits(a: Keep, b: Keep, at=slice(None), runs=slice(None)) -> None:
    np.testing.assert_array_equal(a.means[at][..., runs], b.means[at][..., runs])
    np.testing.assert_array_equal(a.covs[at][..., runs], b.covs[at][..., runs])


def with_readings(recording: Recording, change) -> Recording:
    """The recording with every `Readings` changed by a function."""
    return replace(recording, readings=tuple(change(r) for r in recording.readings))


def on_time(recording: Recording) -> Recording:
    return with_readings(recording, lambda r: replace(r, arrivals=r.steps))


def head(recording: Recording, steps: int) -> Recording:
    """The first steps of a recording."""

    def cut(r: Readings) -> Readings:
        inside = r.arrivals <= steps
        return replace(
            r, steps=r.steps[inside], arrivals=r.arrivals[inside], values=r.values[inside]
        )

    short = with_readings(recording, cut)
    return replace(
        short,
        times=recording.times[: steps + 1],
        truth=recording.truth[: steps + 1],
        inputs=recording.inputs[:steps],
    )


@pytest.fixture(scope="module")
def late_radar():
    """A radar whose readings come three steps late."""
    problem = CoordinatedTurn(steps=25, latency=3.0)
    return problem.filter_model(), problem.record(STREAMS, 1.0)


@pytest.fixture(scope="module")
def late_magnetometer():
    """Two sensors at two rates, one of them five steps late."""
    problem = BodyAttitude(magnetometer_latency=0.1)
    return problem.filter_model(), head(problem.record(STREAMS, 1.0), 40)


@pytest.fixture(scope="module")
def tracking():
    problem = LinearTracking(steps=20)
    return problem.filter_model(), problem.record(STREAMS, 1.0)


# -- late readings ---------------------------------------------------------------------------------


def test_the_fixtures_are_late(late_radar, late_magnetometer):
    (radar,) = late_radar[1].readings
    assert (radar.arrivals - radar.steps == 3).all()
    assert radar.steps[-1] == 22
    on, late = late_magnetometer[1].readings
    assert (on.arrivals == on.steps).all()
    assert (late.arrivals - late.steps == 5).all()


@pytest.mark.parametrize("name", FILTERS)
@pytest.mark.parametrize("which", ["late_radar", "late_magnetometer"])
def test_replay_equals_no_latency_once_all_has_arrived(request, which, name):
    model, recording = request.getfixturevalue(which)
    replayed, outcome = run(FILTERS[name], model, recording)
    punctual, _ = run(FILTERS[name], model, on_time(recording))
    assert not outcome.fault.any()
    assert_same_bits(replayed, punctual, at=slice(-1, None))
    # but not before: it did matter
    assert np.abs(replayed.means[5] - punctual.means[5]).max() > 0


@pytest.mark.parametrize("name", FILTERS)
def test_replay_of_readings_that_overtake_each_other(tracking, name):
    model, recording = tracking
    delays = np.array([4, 0, 2, 5, 1, 0, 3, 3, 0, 6, 2, 1, 0, 4, 2, 2, 1, 0, 0, 0])
    mixed = with_readings(
        recording, lambda r: replace(r, arrivals=np.minimum(r.steps + delays, 20))
    )
    assert (np.diff(mixed.readings[0].arrivals) < 0).any()
    replayed, _ = run(FILTERS[name], model, mixed)
    punctual, _ = run(FILTERS[name], model, recording)
    assert_same_bits(replayed, punctual, at=slice(-1, None))
    # at any step: as if only what had arrived by then existed, and had been on time
    for k in (1, 6, 9, 13):

        def arrived(r: Readings, k: int = k) -> Readings:
            there = r.arrivals <= k
            steps = r.steps[there]
            return replace(r, steps=steps, arrivals=steps, values=r.values[there])

        partial, _ = run(FILTERS[name], model, with_readings(mixed, arrived))
        assert_same_bits(replayed, partial, at=slice(k - 1, k))


@pytest.mark.parametrize("name", FILTERS)
def test_replay_reports_every_innovation_once(late_radar, name):
    model, recording = late_radar
    replayed, _ = run(FILTERS[name], model, recording)
    punctual, _ = run(FILTERS[name], model, on_time(recording))
    late = [i for s in replayed.steps for i in s.innovations]
    early = [i for s in punctual.steps for i in s.innovations]
    assert len(late) == len(early) == 22
    assert [len(s.innovations) for s in replayed.steps] == [0] * 3 + [1] * 22
    for (sensor, a), (other, b) in zip(late, early, strict=True):
        assert sensor == other == "radar"
        np.testing.assert_array_equal(a.residual, b.residual)
        np.testing.assert_array_equal(a.nis, b.nis)
        np.testing.assert_array_equal(a.log_likelihood, b.log_likelihood)


@pytest.mark.parametrize("name", FILTERS)
@pytest.mark.parametrize("which", ["late_radar", "late_magnetometer", "tracking"])
def test_repeated_steps_report_no_innovation_twice(request, which, name):
    model, recording = request.getfixturevalue(which)
    if which == "tracking":
        delays = np.array([4, 0, 2, 5, 1, 0, 3, 3, 0, 6, 2, 1, 0, 4, 2, 2, 1, 0, 0, 0])
        recording = with_readings(
            recording, lambda r: replace(r, arrivals=np.minimum(r.steps + delays, 20))
        )
    replayed, _ = run(FILTERS[name], model, recording)
    for r in recording.readings:
        at = [s.k for s in replayed.steps for sensor, _ in s.innovations if sensor == r.sensor]
        assert at == sorted(r.arrivals.tolist())


@pytest.mark.parametrize("name", FILTERS)
def test_drop_leaves_late_readings_out(late_magnetometer, name):
    model, recording = late_magnetometer
    dropped, _ = run(FILTERS[name], model, recording, late="drop")
    (punctual,) = (r for r in recording.readings if r.sensor == "accelerometer")
    without, _ = run(FILTERS[name], model, replace(recording, readings=(punctual,)))
    assert_same_bits(dropped, without)


@pytest.mark.parametrize("name", FILTERS)
def test_apply_uses_readings_on_arrival_as_if_they_were_current(late_radar, name):
    model, recording = late_radar
    applied, _ = run(FILTERS[name], model, recording, late="apply")
    shifted, _ = run(
        FILTERS[name], model, with_readings(recording, lambda r: replace(r, steps=r.arrivals))
    )
    assert_same_bits(applied, shifted)


@pytest.mark.parametrize("name", FILTERS)
def test_the_three_ways_differ(late_magnetometer, name):
    model, recording = late_magnetometer
    last = [
        run(FILTERS[name], model, recording, late=late)[0].means[-1]
        for late in ("replay", "apply", "drop")
    ]
    for a in range(3):
        for b in range(a):
            assert np.abs(last[a] - last[b]).max() > 1e-9


def test_without_latency_the_three_ways_are_one(tracking):
    model, recording = tracking
    first, _ = run(SigmaPoint(), model, recording)
    for late in ("apply", "drop"):
        assert_same_bits(run(SigmaPoint(), model, recording, late=late)[0], first)


# -- several sensors, missing components -----------------------------------------------------------

SPACE = StateSpace(Vector("position", 2, "m", 10.0), Vector("velocity", 2, "m/s"))
ONE = StateSpace(Vector("seen", 1, "m"))
TWO = StateSpace(Vector("seen", 2, "m"))


def drifting(sensors: tuple[SensorSpec, ...]) -> Model:
    def move(x, u, w, p, dt):
        return (
            tuple(
                a + dt * v + e for a, v, e in zip(x.position, x.velocity, w.position, strict=True)
            ),
            tuple(v + e for v, e in zip(x.velocity, w.velocity, strict=True)),
        )

    def noise(p, dt):
        (a, b), (_, c) = white_acceleration(0.5, dt)
        return ((a, 0, b, 0), (0, a, 0, b), (b, 0, c, 0), (0, b, 0, c))

    return trace(
        ModelSpec(
            space=SPACE,
            transition=move,
            noise=SPACE,
            noise_covariance=noise,
            sensors=sensors,
            linear=True,
        )
    )


def see_first(x, u, p):
    return x.position[0] + 0.5 * x.position[1]


def see_second(x, u, p):
    return x.position[1] - x.velocity[0]


def see_both(x, u, p):
    return see_first(x, u, p), see_second(x, u, p)


def first_noise(x, u, p):
    return ((4.0,),)


def second_noise(x, u, p):
    return ((9.0,),)


def both_noise(x, u, p):
    return diagonal(4.0, 9.0)


def correlated_noise(x, u, p):
    return ((4.0, 3.0), (3.0, 9.0))


def drift_recording(readings: tuple[Readings, ...], steps: int = 8) -> Recording:
    rng = np.random.default_rng(2)
    root = rng.standard_normal((4, 4))
    cov = root @ root.T + np.eye(4)
    return Recording(
        np.arange(steps + 1.0),
        np.zeros((steps + 1, 4, RUNS)),
        np.zeros((steps, 0, RUNS)),
        readings,
        GaussianPrior(SPACE, rng.standard_normal((4, RUNS)), np.repeat(cov[..., None], RUNS, -1)),
        tuple(range(RUNS)),
    )


def values(components: int, steps: int = 8) -> np.ndarray:
    return 3 * np.random.default_rng(3).standard_normal((steps, components, RUNS))


STAMPS = np.arange(1, 9)


@pytest.mark.parametrize("name", LINEAR)
def test_two_sensor_updates_equal_one_stacked(name):
    z = values(2)
    pair = drifting(
        (
            SensorSpec("first", ONE, see_first, first_noise, 1.0),
            SensorSpec("second", ONE, see_second, second_noise, 1.0),
        )
    )
    stacked = drifting((SensorSpec("both", TWO, see_both, both_noise, 1.0),))
    split = drift_recording(
        (
            Readings("first", STAMPS, STAMPS, z[:, :1]),
            Readings("second", STAMPS, STAMPS, z[:, 1:]),
        )
    )
    a, _ = run(LINEAR[name], pair, split)
    b, _ = run(LINEAR[name], stacked, drift_recording((Readings("both", STAMPS, STAMPS, z),)))
    np.testing.assert_allclose(a.means, b.means, rtol=0, atol=1e-10)
    np.testing.assert_allclose(a.covs, b.covs, rtol=0, atol=1e-10)
    likelihoods = [
        sum(i.log_likelihood for s in keep.steps for _, i in s.innovations) for keep in (a, b)
    ]
    np.testing.assert_allclose(*likelihoods, rtol=0, atol=1e-9)


def test_sensors_are_used_in_declared_order():
    z = values(2)
    model = drifting(
        (
            SensorSpec("second", ONE, see_second, second_noise, 1.0),
            SensorSpec("first", ONE, see_first, first_noise, 1.0),
        )
    )
    readings = (
        Readings("first", STAMPS, STAMPS, z[:, :1]),
        Readings("second", STAMPS, STAMPS, z[:, 1:]),
    )
    a, _ = run(Linearised(), model, drift_recording(readings))
    assert [name for name, _ in a.steps[0].innovations] == ["second", "first"]
    b, _ = run(Linearised(), model, drift_recording(readings[::-1]))
    assert_same_bits(a, b)


@pytest.mark.parametrize("name", LINEAR)
def test_replay_keeps_the_declared_order_of_sensors(name):
    # the first sensor's reading of a step arrives after the second's
    z = values(2)
    model = drifting(
        (
            SensorSpec("first", ONE, see_first, first_noise, 1.0),
            SensorSpec("second", ONE, see_second, second_noise, 1.0),
        )
    )
    second = Readings("second", STAMPS, STAMPS, z[:, 1:])
    late = Readings("first", STAMPS, np.minimum(STAMPS + 2, 8), z[:, :1])
    replayed, _ = run(LINEAR[name], model, drift_recording((late, second)))
    punctual = drift_recording((replace(late, arrivals=STAMPS), second))
    assert_same_bits(replayed, run(LINEAR[name], model, punctual)[0], at=slice(-1, None))


@pytest.mark.parametrize("name", LINEAR)
def test_a_reading_of_nothing_changes_nothing(tracking, name):
    model, recording = tracking
    nothing = with_readings(recording, lambda r: replace(r, values=np.full_like(r.values, np.nan)))
    a, _ = run(LINEAR[name], model, nothing)
    b, _ = run(LINEAR[name], model, replace(recording, readings=()))
    if name == "particle":
        # the reference its mean is taken about may be another particle: equal to rounding
        np.testing.assert_allclose(a.means, b.means, rtol=1e-12, atol=1e-11)
        np.testing.assert_allclose(a.covs, b.covs, rtol=1e-11, atol=1e-11)
    else:
        assert_same_bits(a, b)
    for _, innovation in (i for s in a.steps for i in s.innovations):
        np.testing.assert_array_equal(innovation.count, 0)
        np.testing.assert_array_equal(innovation.residual, 0)
        np.testing.assert_array_equal(innovation.nis, 0)
        np.testing.assert_allclose(innovation.log_likelihood, 0, atol=1e-12)


@pytest.mark.parametrize("name", FILTERS)
def test_a_reading_of_nothing_changes_nothing_on_rotations(late_magnetometer, name):
    model, recording = late_magnetometer
    recording = on_time(recording)
    nothing = with_readings(recording, lambda r: replace(r, values=np.full_like(r.values, np.nan)))
    a, _ = run(FILTERS[name], model, nothing)
    b, _ = run(FILTERS[name], model, replace(recording, readings=()))
    # a cloud is averaged about one of its points, in a fixed number of passes
    mean, cov = (1e-6, 1e-6) if name == "particle" else (1e-12, 1e-14)
    np.testing.assert_allclose(a.means, b.means, rtol=0, atol=mean)
    np.testing.assert_allclose(a.covs, b.covs, rtol=1e-9, atol=cov)


@pytest.mark.parametrize("name", LINEAR)
def test_a_run_without_a_reading_is_not_touched_by_the_others(tracking, name):
    model, recording = tracking

    def lose_in_run_two(r: Readings) -> Readings:
        z = r.values.copy()
        z[:, :, 2] = np.nan
        return replace(r, values=z)

    a, _ = run(LINEAR[name], model, with_readings(recording, lose_in_run_two))
    b, _ = run(LINEAR[name], model, replace(recording, readings=()))
    full, _ = run(LINEAR[name], model, recording)
    if name == "particle":
        np.testing.assert_allclose(a.means[..., 2], b.means[..., 2], rtol=1e-12, atol=1e-11)
    else:
        assert_same_bits(a, b, runs=2)
    others = [0, 1, 3, 4]
    assert_same_bits(a, full, runs=others)


@pytest.mark.parametrize("name", LINEAR)
@pytest.mark.parametrize("kept", [0, 1])
def test_a_partly_missing_reading_is_an_update_with_the_rest(name, kept):
    z = values(2)
    z[:, 1 - kept] = np.nan
    whole = drifting((SensorSpec("both", TWO, see_both, correlated_noise, 1.0),))
    see, noise = ((see_first, first_noise), (see_second, second_noise))[kept]
    part = drifting((SensorSpec("part", ONE, see, noise, 1.0),))
    a, _ = run(LINEAR[name], whole, drift_recording((Readings("both", STAMPS, STAMPS, z),)))
    rest = Readings("part", STAMPS, STAMPS, z[:, kept : kept + 1].copy())
    b, _ = run(LINEAR[name], part, drift_recording((rest,)))
    np.testing.assert_allclose(a.means, b.means, rtol=0, atol=1e-11)
    np.testing.assert_allclose(a.covs, b.covs, rtol=0, atol=1e-11)
    for one, other in zip(a.steps, b.steps, strict=True):
        (_, x), (_, y) = *one.innovations, *other.innovations
        np.testing.assert_array_equal(x.count, 1)
        np.testing.assert_allclose(x.nis, y.nis, rtol=1e-9)
        np.testing.assert_allclose(x.log_likelihood, y.log_likelihood, rtol=1e-9, atol=1e-10)


# -- lost runs -------------------------------------------------------------------------------------

BAD = 2
OTHERS = [0, 1, 3, 4]


def bad_mean(recording: Recording) -> Recording:
    mean = recording.prior.mean.copy()
    mean[0, BAD] = np.nan
    return replace(recording, prior=replace(recording.prior, mean=mean))


def indefinite(recording: Recording) -> Recording:
    cov = recording.prior.cov.copy()
    cov[1, 1, BAD] = -1e6
    return replace(recording, prior=replace(recording.prior, cov=cov))


def bad_covariance(recording: Recording) -> Recording:
    cov = recording.prior.cov.copy()
    cov[:, :, BAD] = np.nan
    return replace(recording, prior=replace(recording.prior, cov=cov))


def infinite_reading(recording: Recording) -> Recording:
    def spoil(r: Readings) -> Readings:
        z = r.values.copy()
        z[6, 0, BAD] = np.inf
        return replace(r, values=z)

    return with_readings(recording, spoil)


def infinite_input(recording: Recording) -> Recording:
    inputs = recording.inputs.copy()
    inputs[6, 0, BAD] = np.inf
    return replace(recording, inputs=inputs)


# how it is spoiled: (function, first step at which it shows, reason in a Gaussian filter or None)
SPOILED = {
    "mean": (bad_mean, 1, None),
    "indefinite": (indefinite, 1, Fault.NOT_POSITIVE_DEFINITE),
    "covariance": (bad_covariance, 1, None),
    "reading": (infinite_reading, 7, Fault.NON_FINITE),
}


def check_spoiled(estimator, model, recording, spoil, step, reason) -> None:
    clean, before = run(estimator, model, recording)
    spoiled, outcome = run(estimator, model, spoil(recording))
    assert not before.fault.any()
    assert_same_bits(spoiled, clean, runs=OTHERS)
    for one, other in zip(spoiled.steps, clean.steps, strict=True):
        assert one.k == other.k
        for (_, a), (_, b) in zip(one.innovations, other.innovations, strict=True):
            np.testing.assert_array_equal(a.nis[OTHERS], b.nis[OTHERS])
        np.testing.assert_array_equal(one.alive[OTHERS], True)
        assert one.alive[BAD] == (one.k < step)
    assert (outcome.fault[OTHERS] == Fault.NONE).all()
    assert (outcome.step[OTHERS] == 0).all()
    assert outcome.step[BAD] == step
    assert Fault(outcome.fault[BAD]).text
    if reason is not None:
        assert outcome.fault[BAD] == reason
    else:
        assert outcome.fault[BAD] in (Fault.NON_FINITE, Fault.NOT_POSITIVE_DEFINITE)


@pytest.mark.parametrize("how", SPOILED)
@pytest.mark.parametrize("name", ["kalman", "linearised", "scaled", "cubature"])
def test_a_lost_run_leaves_the_others_alone(tracking, name, how):
    check_spoiled(LINEAR[name], *tracking, *SPOILED[how])


@pytest.mark.parametrize("how", SPOILED)
def test_a_lost_run_of_a_particle_filter_leaves_the_others_alone(tracking, how):
    model, recording = tracking
    spoil, step, _ = SPOILED[how]
    reason = Fault.WEIGHTS_COLLAPSED
    if how != "reading" and np.isnan(recording.readings[0].values[0, :, BAD]).all():
        reason = Fault.NON_FINITE  # nothing was weighed at the first step
    check_spoiled(Particle(particles=200), model, recording, spoil, step, reason)


@pytest.mark.parametrize("name", ["linearised", "scaled", "cubature"])
@pytest.mark.parametrize(("spoil", "step"), [(infinite_input, 7), (bad_covariance, 1)])
def test_a_lost_run_on_rotations(late_magnetometer, name, spoil, step):
    model, recording = late_magnetometer
    check_spoiled(FILTERS[name], model, on_time(recording), spoil, step, None)


def test_a_lost_run_during_replay(late_radar):
    model, recording = late_radar
    # the seventh reading is stamped 7 and arrives at 10
    check_spoiled(Linearised(), model, recording, infinite_reading, 10, Fault.NON_FINITE)


def test_the_first_reason_is_kept(tracking):
    model, recording = tracking
    both = infinite_reading(indefinite(recording))
    _, outcome = run(SigmaPoint(), model, both)
    assert (outcome.fault[BAD], outcome.step[BAD]) == (Fault.NOT_POSITIVE_DEFINITE, 1)


# -- the rest --------------------------------------------------------------------------------------


def test_a_batch_of_one_is_refused(tracking):
    model, recording = tracking
    one = recording.select(slice(0, 1))
    bound = Linearised().bind(model, STREAMS.select(slice(0, 1)))
    with pytest.raises(ValueError, match="padded to two"):
        run_filter(bound, model, one)
    padded = one.padded()
    assert padded.runs == (0, 0)
    outcome = run_filter(
        Linearised().bind(model, Streams(1, "test", "loop", (0, 0))), model, padded
    )
    assert not outcome.fault.any()


def test_observers_see_every_step(tracking):
    model, recording = tracking
    one, two = Keep(), Keep()
    run_filter(Linearised().bind(model, STREAMS), model, recording, [one, two])
    assert [s.k for s in one.steps] == list(range(1, 21))
    for step, other in zip(one.steps, two.steps, strict=True):
        assert step is other
        np.testing.assert_array_equal(step.truth, recording.truth[step.k])
        low = np.moveaxis(step.factor, -1, 0)
        np.testing.assert_allclose(
            np.moveaxis(low @ np.swapaxes(low, 1, 2), 0, -1), step.cov, rtol=1e-12, atol=1e-12
        )
        assert step.ess is None
        assert step.alive.all()


def test_a_particle_filter_reports_its_effective_sample(tracking):
    model, recording = tracking
    keep, _ = run(Particle(particles=200), model, recording)
    ess = np.array([s.ess for s in keep.steps])
    assert (ess >= 1).all()
    assert (ess <= 200).all()
    assert (ess < 150).any()


def arrays_of(recording: Recording) -> list[np.ndarray]:
    out = [recording.times, recording.truth, recording.inputs]
    for r in recording.readings:
        out += [r.steps, r.arrivals, r.values]
    return [*out, recording.prior.mean, recording.prior.cov]


@pytest.mark.parametrize("name", FILTERS)
@pytest.mark.parametrize("which", ["late_radar", "late_magnetometer"])
def test_inputs_are_not_modified(request, which, name):
    model, recording = request.getfixturevalue(which)
    arrays = arrays_of(recording)
    kept = [a.copy() for a in arrays]
    writeable = [a.flags.writeable for a in arrays]
    for a in arrays:
        a.flags.writeable = False
    try:
        run(FILTERS[name], model, recording)
    finally:
        for a, flag in zip(arrays, writeable, strict=True):
            a.flags.writeable = flag
    for a, b in zip(arrays, kept, strict=True):
        np.testing.assert_array_equal(a, b)


@pytest.mark.parametrize("name", FILTERS)
def test_a_bound_filter_has_no_memory(late_radar, name):
    # the same filter run twice gives the same bits
    model, recording = late_radar
    bound = FILTERS[name].bind(model, STREAMS)
    first, second = Keep(), Keep()
    run_filter(bound, model, recording, [first])
    run_filter(bound, model, recording, [second])
    assert_same_bits(first, second)
