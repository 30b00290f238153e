"""Tracing: what is refused and how it is said, and what a traced model gives."""

from __future__ import annotations

import math
import pickle
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from flyoff.models.model import Model, ModelSpec, SensorSpec, mask_missing, trace
from flyoff.numerics import algebra
from flyoff.numerics.discretise import diagonal, white_acceleration
from flyoff.numerics.spaces import Angle, Rotation, StateSpace, Vector
from flyoff.problems.body_attitude import BodyAttitude
from flyoff.problems.coordinated_turn import CoordinatedTurn
from flyoff.problems.linear_tracking import LinearTracking

SPACE = StateSpace(Vector("position", 2, "m"), Vector("rate", 1, "rad/s"))
NOISE = StateSpace(Vector("kick", 1))
EYE = StateSpace(Vector("seen", 1))


def good_move(x, u, w, p, dt):
    return (x.position[0] + dt * x.rate, x.position[1]), x.rate + w.kick


def good_noise(p, dt):
    return ((dt,),)


def good_see(x, u, p):
    return x.position[0]


def good_variance(x, u, p):
    return ((1.0,),)


def spec(
    move=good_move, noise=good_noise, see=good_see, variance=good_variance, **options
) -> ModelSpec:
    return ModelSpec(
        space=SPACE,
        transition=move,
        noise=NOISE,
        noise_covariance=noise,
        sensors=(SensorSpec("eye", EYE, see, variance, 1.0),),
        **options,
    )


# -- what tracing refuses --------------------------------------------------------------------------


def math_alone(x, u, w, p, dt):
    return (math.sin(x.rate), x.position[1]), x.rate


def math_in_a_sum(x, u, w, p, dt):
    return (x.position[0] + math.sin(x.rate), x.position[1]), x.rate


def math_of_the_step(x, u, w, p, dt):
    return (x.position[0] * math.sqrt(dt), x.position[1]), x.rate


def float_alone(x, u, w, p, dt):
    return (float(x.rate), x.position[1]), x.rate


def float_in_a_sum(x, u, w, p, dt):
    return (x.position[0] + float(x.rate), x.position[1]), x.rate


def an_if(x, u, w, p, dt):
    if x.rate > 0:
        return x.position, x.rate
    return x.position, -x.rate


def a_conditional_expression(x, u, w, p, dt):
    return x.position, x.rate if x.rate > 0 else 0.0


def a_while(x, u, w, p, dt):
    rate = x.rate
    while rate > 1:
        rate = rate / 2
    return x.position, rate


def a_max(x, u, w, p, dt):
    return (max(x.position[0], 0.0), x.position[1]), x.rate


def assignment_into_zeros(x, u, w, p, dt):
    new = np.zeros(2)
    new[0] = x.position[0] + dt * x.rate
    new[1] = x.position[1]
    return (new[0], new[1]), x.rate


def missing_parameter(x, u, w, p, dt):
    return x.position, x.rate * p.drag


def root_of_a_negative_number(x, u, w, p, dt):
    return (np.sqrt(x.position[0]), x.position[1]), x.rate


def division_by_a_zero_rate(x, u, w, p, dt):
    return (np.sin(x.rate) / x.rate, x.position[1]), x.rate


def root_at_zero_norm(x, u, w, p, dt):
    a, b = x.position
    return (np.sqrt(a * a + b * b), b), x.rate


@pytest.mark.parametrize(
    "move",
    [
        math_alone,
        math_in_a_sum,
        math_of_the_step,
        float_alone,
        float_in_a_sum,
        an_if,
        a_conditional_expression,
        a_while,
        a_max,
        assignment_into_zeros,
        missing_parameter,
        root_of_a_negative_number,
        division_by_a_zero_rate,
        root_at_zero_norm,
    ],
    ids=lambda f: f.__name__,
)
def test_refusals_name_the_function_and_the_rule(move):
    with pytest.raises(ValueError, match=rf"(?s)`{move.__name__}`.*np\.where.*not math") as caught:
        trace(spec(move))
    assert "\n" not in str(caught.value)


def test_refusals_say_what_happened():
    for move, words in (
        (math_alone, "turned a component into NaN while traced"),
        (assignment_into_zeros, "turned a component into NaN while traced"),
        (an_if, "cannot be traced"),
        (missing_parameter, "drag"),
        (root_of_a_negative_number, "gives NaN at a probing point"),
        (root_at_zero_norm, "the Jacobian of `root_at_zero_norm` is not finite"),
    ):
        with pytest.raises(ValueError, match=words):
            trace(spec(move))


def test_a_hidden_state_is_found():
    calls = []

    def counting(x, u, w, p, dt):
        calls.append(0)
        return (x.position[0] * len(calls), x.position[1]), x.rate

    with pytest.raises(ValueError, match=r"`counting` differs by .* between NumPy and its traced"):
        trace(spec(counting))


def test_what_numpy_takes_for_a_vector_is_found():
    def whole(x, u, w, p, dt):
        return (np.linalg.norm(x.position), x.position[1]), x.rate

    with pytest.raises(ValueError, match="`whole`"):
        trace(spec(whole))


@pytest.mark.parametrize(
    ("result", "words"),
    [
        (lambda x: (x.position[0], x.position[1], x.rate), "returned 3 blocks"),
        (lambda x: (x.position,), "returned 1 blocks"),
        (lambda x: [x.position, x.rate], "must return a tuple"),
        (lambda x: None, "must return a tuple"),
        (lambda x: ((x.position[0],), x.rate), "block `position` has 2 components, got 1"),
        (lambda x: (x.position, x.position), "block `rate` has 1 components, got 2"),
    ],
)
def test_wrong_blocks(result, words):
    def wrong(x, u, w, p, dt):
        return result(x)

    with pytest.raises(ValueError, match=rf"`wrong`.*{words}"):
        trace(spec(wrong))


def sensor_math(x, u, p):
    return math.sin(x.position[0])


def sensor_math_in_a_sum(x, u, p):
    return x.position[0] + math.sin(x.position[1])


def sensor_if(x, u, p):
    return x.position[0] if x.position[0] > 0 else 0.0


def sensor_two_components(x, u, p):
    return x.position


def sensor_root(x, u, p):
    return np.sqrt(x.position[0])


@pytest.mark.parametrize(
    "see",
    [sensor_math, sensor_math_in_a_sum, sensor_if, sensor_two_components, sensor_root],
    ids=lambda f: f.__name__,
)
def test_sensors_are_refused_by_name(see):
    with pytest.raises(ValueError, match=f"`{see.__name__}`"):
        trace(spec(see=see))


def variance_of_two(x, u, p):
    return ((1.0, 0.0), (0.0, 1.0))


def variance_row_too_long(x, u, p):
    return ((1.0, 0.0),)


def variance_scalar(x, u, p):
    return 1.0


def variance_none(x, u, p):
    return None


def variance_math(x, u, p):
    return ((math.exp(x.rate),),)


def variance_math_in_a_sum(x, u, p):
    # a NaN that hides behind a symbol
    return ((1.0 + math.sin(x.rate) + x.rate**2,),)


@pytest.mark.parametrize(
    "variance",
    [
        variance_of_two,
        variance_row_too_long,
        variance_scalar,
        variance_none,
        variance_math,
        variance_math_in_a_sum,
    ],
    ids=lambda f: f.__name__,
)
def test_sensor_covariances_are_refused_by_name(variance):
    with pytest.raises(ValueError, match=f"`{variance.__name__}`"):
        trace(spec(variance=variance))


def noise_of_two(p, dt):
    return ((dt, 0.0), (0.0, dt))


def noise_none(p, dt):
    return None


def noise_math(p, dt):
    return ((math.sqrt(dt),),)


def noise_math_in_a_sum(p, dt):
    return ((dt + math.sqrt(dt),),)


@pytest.mark.parametrize(
    "noise", [noise_of_two, noise_none, noise_math, noise_math_in_a_sum], ids=lambda f: f.__name__
)
def test_noise_covariances_are_refused_by_name(noise):
    with pytest.raises(ValueError, match=f"`{noise.__name__}`"):
        trace(spec(noise=noise))


def test_declared_linear_but_not():
    def bent(x, u, w, p, dt):
        return (x.position[0] * x.position[1], x.position[1]), x.rate

    def bent_sensor(x, u, p):
        return x.position[0] ** 2

    with pytest.raises(ValueError, match="declared linear, but the Jacobian of `bent` depends"):
        trace(spec(bent, linear=True))
    with pytest.raises(ValueError, match="declared linear, but the Jacobian of sensor `eye`"):
        trace(spec(see=bent_sensor, linear=True))
    assert trace(spec(linear=True)).linear
    assert not trace(spec()).linear


def test_declared_linear_on_a_curved_space():
    space = StateSpace(Angle("heading"))

    def turn(x, u, w, p, dt):
        return x.heading + w.heading

    def noise(p, dt):
        return ((dt,),)

    with pytest.raises(ValueError, match="declared linear"):
        trace(
            ModelSpec(
                space=space,
                transition=turn,
                noise=space,
                noise_covariance=noise,
                sensors=(),
                linear=True,
            )
        )


def test_what_is_allowed():
    def branch(x, u, w, p, dt):
        a, b = x.position
        return (np.where(x.rate > 0, a, -a), algebra.norm((a, b))), abs(x.rate) * 0.5 + w.kick

    def distance(x, u, p):
        # no value at zero distance: there, and only there, a sensor may fail
        return np.sqrt(x.position[0] ** 2 + x.position[1] ** 2)

    model = trace(spec(branch, see=distance))
    x = np.array([[3.0, 3.0], [4.0, -4.0], [1.0, -1.0]])
    moved = model.step(x, np.zeros((0, 2)), 0.1)
    np.testing.assert_allclose(moved, [[3.0, -3.0], [5.0, 5.0], [0.5, 0.5]], rtol=1e-15)
    seen = model.measure(model.sensors["eye"], x, np.zeros((0, 2)))
    np.testing.assert_allclose(seen, [[5.0, 5.0]], rtol=1e-15)


# -- what a traced model gives ---------------------------------------------------------------------

CRAFT = StateSpace(
    Vector("position", 2, "m", 10.0), Rotation("attitude"), Vector("bias", 3, "rad/s", 0.1)
)
INPUT = StateSpace(Vector("rate", 3, "rad/s"), Vector("thrust", 1, "m/s"))
PUSH = StateSpace(Vector("push", 2), Vector("turn", 3))
BEAM = StateSpace(Vector("distance", 1, "m"), Angle("bearing"))


def fly(x, u, w, p, dt):
    ahead = algebra.rotate(x.attitude, (u.thrust * p.gain, 0.0, 0.0))
    angle = tuple(
        (rate - bias) * dt + e for rate, bias, e in zip(u.rate, x.bias, w.turn, strict=True)
    )
    return (
        (
            x.position[0] + ahead[0] * dt + w.push[0],
            x.position[1] + ahead[1] * dt + w.push[1] * np.cos(x.position[0] / 10),
        ),
        algebra.quat_mul(x.attitude, algebra.quat_exp(angle)),
        tuple(b * (1 - dt / p.tau) for b in x.bias),
    )


def fly_noise(p, dt):
    a = p.gain**2 * dt
    return (
        (a, 0.3 * a, 0, 0, 0),
        (0.3 * a, a, 0, 0, 0),
        (0, 0, 0.01 * dt, 0, 0),
        (0, 0, 0, 0.01 * dt, 0),
        (0, 0, 0, 0, 0),
    )


def beam(x, u, p):
    a, b = x.position
    nose = algebra.rotate(x.attitude, (1.0, 0.0, 0.0))
    return np.hypot(a, b) + u.thrust, np.arctan2(b, a) + 0.1 * nose[1]


def beam_noise(x, u, p):
    return ((0.1 + 0.01 * x.position[0] ** 2, 0.01), (0.01, p.gain * 0.02))


@pytest.fixture(scope="module")
def craft() -> Model:
    return trace(
        ModelSpec(
            space=CRAFT,
            transition=fly,
            noise=PUSH,
            noise_covariance=fly_noise,
            inputs=INPUT,
            sensors=(SensorSpec("beam", BEAM, beam, beam_noise, 5.0, latency=0.1),),
            parameters={"gain": 2.0, "tau": 5.0},
        )
    )


def craft_state(runs: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(0)
    x = rng.standard_normal((9, runs))
    x[:2] *= 10
    x[2:6] /= np.linalg.norm(x[2:6], axis=0)
    return x, rng.standard_normal((4, runs))


def test_transition_equals_the_function(craft):
    x, u = craft_state(20)
    w = 0.1 * np.random.default_rng(1).standard_normal((5, 20))
    p = type("P", (), {"gain": 2.0, "tau": 5.0})
    args = (CRAFT.unpack(x), INPUT.unpack(u))
    want = CRAFT.pack(fly(*args, PUSH.unpack(w), p, 0.2), "fly")
    np.testing.assert_allclose(craft.step_noisy(x, u, w, 0.2), want, rtol=0, atol=1e-12)
    want = CRAFT.pack(fly(*args, PUSH.unpack(0 * w), p, 0.2), "fly")
    np.testing.assert_allclose(craft.step(x, u, 0.2), want, rtol=0, atol=1e-12)


def test_points_and_noise_of_many_particles(craft):
    x, u = craft_state(4)
    points = CRAFT.retract(x[:, None], 0.1 * np.random.default_rng(2).standard_normal((8, 6, 4)))
    w = 0.1 * np.random.default_rng(3).standard_normal((5, 6, 4))
    moved = craft.step_noisy(points, u, w, 0.2)
    for j in range(6):
        want = craft.step_noisy(points[:, j], u, w[:, j], 0.2)
        np.testing.assert_allclose(moved[:, j], want, rtol=0, atol=1e-14)
    still = craft.step(points, u, 0.2)
    np.testing.assert_allclose(still[:, 3], craft.step(points[:, 3], u, 0.2), rtol=0, atol=1e-14)
    seen = craft.measure(craft.sensors["beam"], points, u)
    want = craft.measure(craft.sensors["beam"], points[:, 3], u)
    np.testing.assert_allclose(seen[:, 3], want, rtol=0, atol=1e-14)


def central(function, d: int, steps) -> np.ndarray:
    """Columns (.., d, M) of a derivative by central differences, fourth order."""
    out = []
    for j in range(d):
        h = np.zeros((d, 1))
        h[j] = steps[j]
        near = (function(h) - function(-h)) / 2
        far = (function(2 * h) - function(-2 * h)) / 2
        out.append((8 * near - far) / (6 * steps[j]))
    return np.stack(out, axis=1)


def model_and_state(name: str, craft: Model) -> tuple[Model, np.ndarray, np.ndarray]:
    runs = 8
    if name == "craft":
        return craft, *craft_state(runs)
    model = {
        "turn": CoordinatedTurn(),
        "attitude": BodyAttitude(),
        "linear": LinearTracking(),
    }[name].filter_model()
    rng = np.random.default_rng(4)
    x = rng.standard_normal((model.space.n, runs))
    for b in model.space.blocks:
        a = model.space.ambient[b.name]
        if b.ambient == b.tangent:
            x[a] *= b.scale
        else:
            x[a] /= np.linalg.norm(x[a], axis=0)
    return model, x, rng.standard_normal((model.inputs.n, runs))


MODELS = ("craft", "turn", "attitude", "linear")


@pytest.mark.parametrize("name", MODELS)
def test_jacobians_against_central_differences(craft, name):
    model, x, u = model_and_state(name, craft)
    space, dt = model.space, 0.25
    scales = np.concatenate([np.full(b.tangent, b.scale) for b in space.blocks])
    mean, f = model.linearise(x, u, dt)[:2]
    np.testing.assert_allclose(mean, model.step(x, u, dt), rtol=1e-14, atol=1e-14)
    want = central(
        lambda d: space.local(mean, model.step(space.retract(x, d), u, dt)), space.d, 1e-3 * scales
    )
    size = np.abs(want).max() + 1
    np.testing.assert_allclose(f, want, rtol=0, atol=1e-8 * size)
    for sensor in model.sensors.values():
        z, h = sensor.linearise(x, u, model.parameters)
        np.testing.assert_allclose(z, model.measure(sensor, x, u), rtol=1e-14, atol=1e-20)
        want = central(
            lambda d, s=sensor, z=z: s.space.local(z, model.measure(s, space.retract(x, d), u)),
            space.d,
            1e-3 * scales,
        )
        np.testing.assert_allclose(h, want, rtol=0, atol=1e-8 * (np.abs(want).max() + 1e-12))


@pytest.mark.parametrize("name", MODELS)
def test_added_noise_is_the_noise_through_the_transition(craft, name):
    model, x, u = model_and_state(name, craft)
    space, dt, q = model.space, 0.25, model.noise.d
    mean = model.step(x, u, dt)
    g = central(
        lambda w: space.local(mean, model.step_noisy(x, u, w + np.zeros((q, x.shape[1])), dt)),
        q,
        np.full(q, 1e-3),
    )
    factor = model.noise_factor(dt, np.float64)[..., 0]
    want = np.einsum("ikm,kl,jlm->ijm", g, factor @ factor.T, g)
    # one for all runs where it depends on none of them
    for added in (model.added_noise(x, u, dt), model.linearise(x, u, dt)[2]):
        assert added.shape[-1] == (1 if model.q_is_common else x.shape[1])
        got = np.broadcast_to(added, want.shape)
        np.testing.assert_allclose(got, want, rtol=0, atol=1e-8 * np.abs(want).max())


@pytest.mark.parametrize("name", MODELS)
@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_values_keep_their_type(craft, name, dtype):
    model, x, u = model_and_state(name, craft)
    x, u = x.astype(dtype), u.astype(dtype)
    values = [model.step(x, u, 0.1), *model.linearise(x, u, 0.1), model.added_noise(x, u, 0.1)]
    p = model.parameters.astype(dtype)
    for sensor in model.sensors.values():
        values += [*sensor.linearise(x, u, p), sensor.covariance(x, u, p)]
    values.append(model.noise_factor(0.1, dtype))
    for value in values:
        assert value.dtype == dtype


@pytest.mark.parametrize("name", MODELS)
def test_bits_do_not_depend_on_the_batch(craft, name):
    model, x, u = model_and_state(name, craft)
    sensor = next(iter(model.sensors.values()))
    whole = (*model.linearise(x, u, 0.1), *sensor.linearise(x, u, model.parameters))
    for first, size in ((0, 2), (1, 3), (3, 5)):
        cut = slice(first, first + size)
        a, b = x[:, cut].copy(), u[:, cut].copy()
        part = (*model.linearise(a, b, 0.1), *sensor.linearise(a, b, model.parameters))
        for one, all_runs in zip(part, whole, strict=True):
            some = all_runs[..., cut] if all_runs.shape[-1] > 1 else all_runs
            np.testing.assert_array_equal(one, some)


def test_noise_factor(craft):
    low = craft.noise_factor(0.2, np.float64)
    assert low.shape == (5, 5, 1)
    want = np.array(fly_noise(type("P", (), {"gain": 2.0}), 0.2), dtype=float)
    np.testing.assert_allclose(low[..., 0] @ low[..., 0].T, want, rtol=1e-14, atol=1e-16)
    # the direction without noise stays without noise
    np.testing.assert_array_equal(low[4], 0)
    np.testing.assert_array_equal(np.triu(low[..., 0], 1), 0)


def test_noise_factor_of_an_indefinite_covariance_is_refused():
    def negative(p, dt):
        return ((-dt,),)

    with np.errstate(all="ignore"), pytest.raises(ValueError, match="positive semidefinite"):
        trace(spec(noise=negative)).noise_factor(0.1, np.float64)


def test_noise_factor_of_a_singular_covariance():
    # discrete white acceleration, rank one (Y. Bar-Shalom, X. R. Li, T. Kirubarajan, Wiley 2001,
    # section 6.3.2): semidefinite, so it has a factor
    space = StateSpace(Vector("position", 1, "m"), Vector("velocity", 1, "m/s"))

    def move(x, u, w, p, dt):
        return x.position + dt * x.velocity + w.position, x.velocity + w.velocity

    def rank_one(p, dt):
        return ((dt**4 / 4, dt**3 / 2), (dt**3 / 2, dt**2))

    model = trace(
        ModelSpec(space=space, transition=move, noise=space, noise_covariance=rank_one, sensors=())
    )
    low = model.noise_factor(1.0, np.float64)[..., 0]
    np.testing.assert_allclose(low @ low.T, [[0.25, 0.5], [0.5, 1.0]], atol=1e-12)


def test_noise_factor_keeps_variances_of_very_different_size():
    # metres beside a bias in rad/s: small in the units chosen, but not nothing
    space = StateSpace(Vector("position", 1, "m"), Vector("bias", 1, "rad/s"))

    def move(x, u, w, p, dt):
        return x.position + w.position, x.bias + w.bias

    def noise(p, dt):
        return diagonal(1e2, 1e-16)

    model = trace(
        ModelSpec(space=space, transition=move, noise=space, noise_covariance=noise, sensors=())
    )
    low = model.noise_factor(1.0, np.float64)[..., 0]
    np.testing.assert_allclose(low, np.diag([10.0, 1e-8]), rtol=1e-14, atol=0)


def test_assumed_scales(craft):
    x, u = craft_state(3)
    scaled = craft.assuming(q_scale=4.0, r_scale=9.0)
    sensor, other = craft.sensors["beam"], scaled.sensors["beam"]
    np.testing.assert_allclose(
        scaled.added_noise(x, u, 0.1), 4 * craft.added_noise(x, u, 0.1), rtol=1e-14
    )
    np.testing.assert_allclose(
        scaled.linearise(x, u, 0.1)[2], 4 * craft.linearise(x, u, 0.1)[2], rtol=1e-14
    )
    np.testing.assert_allclose(
        scaled.noise_factor(0.1, np.float64), 2 * craft.noise_factor(0.1, np.float64), rtol=1e-14
    )
    p = craft.parameters
    np.testing.assert_allclose(
        other.covariance(x, u, p), 9 * sensor.covariance(x, u, p), rtol=1e-14
    )
    np.testing.assert_array_equal(scaled.step(x, u, 0.1), craft.step(x, u, 0.1))
    # scales multiply, and the first model is left alone
    again = scaled.assuming(q_scale=0.25, r_scale=1 / 9)
    np.testing.assert_allclose(
        again.added_noise(x, u, 0.1), craft.added_noise(x, u, 0.1), rtol=1e-14
    )
    assert craft.q_scale == 1.0
    assert craft.sensors["beam"].r_scale == 1.0
    # also where the covariances are common to all runs and remembered
    turn, runs = CoordinatedTurn().filter_model(), np.ones((5, 2))
    none = np.zeros((0, 2))
    np.testing.assert_allclose(
        turn.assuming(3.0).added_noise(runs, none, 1.0), 3 * turn.added_noise(runs, none, 1.0)
    )
    radar, wide = turn.sensors["radar"], turn.assuming(1.0, 3.0).sensors["radar"]
    np.testing.assert_allclose(
        wide.covariance(runs, none, turn.parameters),
        3 * radar.covariance(runs, none, turn.parameters),
    )


def test_added_noise_of_different_steps_is_not_mixed_up():
    turn, x, u = CoordinatedTurn().filter_model(), np.ones((5, 2)), np.zeros((0, 2))
    for dt in (1.0, 0.5, 1.0):
        got = turn.added_noise(x, u, dt)[..., 0]
        np.testing.assert_allclose(
            got[np.ix_([0, 2], [0, 2])], white_acceleration(0.1, dt), rtol=1e-14
        )
        assert got[4, 4] == pytest.approx(1.75e-4 * dt, rel=1e-14)


def test_pickled_model_gives_the_same_bits(craft):
    again = pickle.loads(pickle.dumps(craft))
    x, u = craft_state(5)
    for a, b in zip(again.linearise(x, u, 0.1), craft.linearise(x, u, 0.1), strict=True):
        np.testing.assert_array_equal(a, b)
    sensor, other = craft.sensors["beam"], again.sensors["beam"]
    np.testing.assert_array_equal(
        other.covariance(x, u, again.parameters), sensor.covariance(x, u, craft.parameters)
    )
    assert again.space == craft.space
    assert again.parameter_names == ("gain", "tau")


def test_inputs_are_not_modified(craft):
    x, u = craft_state(5)
    w = np.ones((5, 5))
    kept = [a.copy() for a in (x, u, w)]
    for a in (x, u, w):
        a.flags.writeable = False
    craft.step(x, u, 0.1)
    craft.step_noisy(x, u, w, 0.1)
    craft.linearise(x, u, 0.1)
    craft.added_noise(x, u, 0.1)
    sensor = craft.sensors["beam"]
    sensor.linearise(x, u, craft.parameters)
    sensor.sample(w[:2], x, u, craft.parameters)
    for a, b in zip((x, u, w), kept, strict=True):
        np.testing.assert_array_equal(a, b)


# -- sensors ---------------------------------------------------------------------------------------


def test_sensor_attributes(craft):
    sensor = craft.sensors["beam"]
    assert (sensor.name, sensor.m, sensor.rate, sensor.latency) == ("beam", 2, 5.0, 0.1)
    # the first reading comes after one period unless the phase says otherwise
    assert sensor.phase == pytest.approx(0.2)
    at_once = spec()
    at_once = replace(at_once, sensors=(replace(at_once.sensors[0], phase=0.0),))
    assert trace(at_once).sensors["eye"].phase == 0.0
    assert LinearTracking().filter_model().sensors["fix"].linear
    assert not sensor.linear


def test_sensor_covariance_follows_state_and_parameters(craft):
    x, u = craft_state(6)
    sensor = craft.sensors["beam"]
    got = sensor.covariance(x, u, craft.parameters)
    assert got.shape == (2, 2, 6)
    np.testing.assert_allclose(got[0, 0], 0.1 + 0.01 * x[0] ** 2, rtol=1e-14)
    np.testing.assert_allclose(got[1, 1], 0.04, rtol=1e-14)
    particles = np.repeat(x[:, None], 3, axis=1)
    assert sensor.covariance(particles, u, craft.parameters).shape == (2, 2, 3, 6)
    assert not sensor.r_is_common
    common = CoordinatedTurn().filter_model().sensors["radar"]
    assert common.r_is_common
    assert common.covariance(np.ones((5, 4)), np.zeros((0, 4)), np.ones((4, 1))).shape == (2, 2, 1)


def test_common_sensor_covariance_follows_the_parameters():
    def variance(x, u, p):
        return ((p.sigma**2,),)

    model = trace(replace(spec(variance=variance), parameters={"sigma": 2.0}))
    sensor, x, u = model.sensors["eye"], np.ones((3, 2)), np.zeros((0, 2))
    assert sensor.covariance(x, u, np.array([[2.0]])).item() == 4.0
    assert sensor.covariance(x, u, np.array([[3.0]])).item() == 9.0


def test_sample_adds_noise_of_the_covariance(craft):
    x, u = craft_state(5)
    sensor, p = craft.sensors["beam"], craft.parameters
    normals = np.random.default_rng(5).standard_normal((2, 5))
    got = sensor.sample(normals, x, u, p)
    r = sensor.covariance(x, u, p)
    for m in range(5):
        move = np.linalg.cholesky(r[..., m]) @ normals[:, m]
        z = sensor.measure(x, u, p)[:, m]
        assert got[0, m] == pytest.approx(z[0] + move[0], rel=1e-13)
        assert math.sin(got[1, m] - z[1] - move[1]) == pytest.approx(0, abs=1e-13)
    assert np.abs(got[1]).max() <= math.pi


@pytest.mark.parametrize("lost", [None, 0, 1, 2])
def test_log_density_against_scipy(lost):
    rng = np.random.default_rng(6)
    root = rng.standard_normal((3, 3, 4))
    r = np.einsum("ikm,jkm->ijm", root, root) + 0.5 * np.eye(3)[:, :, None]
    residual = rng.standard_normal((3, 5, 4))
    missing, kept = None, [0, 1, 2]
    if lost is not None:
        # missing in two of the runs only
        missing = np.zeros((3, 4), dtype=bool)
        missing[lost, 1] = missing[lost, 3] = True
        residual[lost, :, 1] = residual[lost, :, 3] = np.nan
        kept = [i for i in range(3) if i != lost]
    sensor = LinearTracking().filter_model().sensors["fix"]
    got = sensor.log_density(residual, r, missing)
    wide = sensor.log_density(residual, np.repeat(r[:, :, None], 5, axis=2), missing)
    np.testing.assert_allclose(wide, got, rtol=1e-13)
    assert got.shape == (5, 4)
    for m in range(4):
        rows = kept if missing is not None and missing[:, m].any() else [0, 1, 2]
        want = multivariate_normal(cov=r[np.ix_(rows, rows)][..., m]).logpdf(residual[rows, :, m].T)
        np.testing.assert_allclose(got[:, m], want, rtol=1e-12)


def test_log_density_with_nothing_left_is_zero():
    sensor = LinearTracking().filter_model().sensors["fix"]
    missing = np.array([[True, False], [True, False]])
    residual = np.full((2, 3, 2), np.nan)
    residual[..., 1] = 0.0
    got = sensor.log_density(residual, np.eye(2)[:, :, None], missing)
    np.testing.assert_array_equal(got[:, 0], 0)
    np.testing.assert_allclose(got[:, 1], -math.log(2 * math.pi), rtol=1e-14)


def test_mask_missing():
    r = np.array([[4.0, 1.0], [1.0, 9.0]])[:, :, None] + np.zeros(2)
    residual = np.array([[1.0, np.nan], [2.0, 3.0]])
    missing = np.isnan(residual)
    kept = r.copy(), residual.copy()
    masked, clean = mask_missing(r, residual, missing)
    np.testing.assert_array_equal(masked[..., 0], [[4, 1], [1, 9]])
    np.testing.assert_array_equal(masked[..., 1], [[1, 0], [0, 9]])
    np.testing.assert_array_equal(clean, [[1, 0], [2, 3]])
    np.testing.assert_array_equal(r, kept[0])
    np.testing.assert_array_equal(residual, kept[1])


def test_diagonal_noise_of_a_common_sensor_is_the_declared_one():
    radar = CoordinatedTurn(range_sigma=7.0, bearing_sigma=0.01).filter_model().sensors["radar"]
    model = CoordinatedTurn(range_sigma=7.0, bearing_sigma=0.01).filter_model()
    got = radar.covariance(np.ones((5, 2)), np.zeros((0, 2)), model.parameters)[..., 0]
    np.testing.assert_allclose(got, np.array(diagonal(49.0, 1e-4)), rtol=1e-14)
