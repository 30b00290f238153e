"""Tapes: every operation against NumPy, buffers, broadcasting, counts, dependence, pickling."""

from __future__ import annotations

import math
import pickle

import casadi as ca
import numpy as np
import pytest

from flyoff.numerics.tape import Tape

DTYPES = (np.float64, np.float32)


def tape_of(function, sizes: dict[str, int]) -> Tape:
    """Trace `function` of lists of scalars, one list a group."""
    ca.GlobalOptions.setNumpyMode(-1)
    groups = {g: [ca.SX.sym(f"{g}{i}") for i in range(n)] for g, n in sizes.items()}
    outputs = [ca.SX(e) for e in function(*groups.values())]
    columns = {g: ca.vertcat(*s) if s else ca.SX(0, 1) for g, s in groups.items()}
    return Tape(columns, outputs)


# name: function of two scalars in (0.1, 0.9), which is inside every domain used
OPERATIONS = {
    "add": lambda a, b: a + b,
    "subtract": lambda a, b: a - b,
    "multiply": lambda a, b: a * b,
    "divide": lambda a, b: a / b,
    "negative": lambda a, b: -a,
    "twice": lambda a, b: a + a,
    "reciprocal": lambda a, b: 1 / a,
    "square": lambda a, b: a**2,
    "cube": lambda a, b: a**3,
    "fourth power": lambda a, b: a**4,
    "fifth power": lambda a, b: a**5,
    "root power": lambda a, b: a**0.5,
    "minus third power": lambda a, b: a**-3,
    "power": lambda a, b: a**b,
    "sqrt": lambda a, b: np.sqrt(a),
    "sin": lambda a, b: np.sin(a),
    "cos": lambda a, b: np.cos(a),
    "tan": lambda a, b: np.tan(a),
    "arcsin": lambda a, b: np.arcsin(a),
    "arccos": lambda a, b: np.arccos(a),
    "arctan": lambda a, b: np.arctan(a),
    "arctan2": lambda a, b: np.arctan2(a - 0.5, b - 0.5),
    "hypot": lambda a, b: np.hypot(a, b),
    "exp": lambda a, b: np.exp(a),
    "log": lambda a, b: np.log(a),
    "expm1": lambda a, b: np.expm1(a),
    "log1p": lambda a, b: np.log1p(a),
    "sinh": lambda a, b: np.sinh(a),
    "cosh": lambda a, b: np.cosh(a),
    "tanh": lambda a, b: np.tanh(a),
    "arcsinh": lambda a, b: np.arcsinh(a),
    "arccosh": lambda a, b: np.arccosh(1 + a),
    "arctanh": lambda a, b: np.arctanh(a),
    "absolute": lambda a, b: np.abs(a - b),
    "sign": lambda a, b: np.sign(a - b),
    "floor": lambda a, b: np.floor(7 * a),
    "ceil": lambda a, b: np.ceil(7 * a),
    "copysign": lambda a, b: np.copysign(a, b - 0.5),
    "fmod": lambda a, b: np.fmod(7 * a, b),
    "where less": lambda a, b: np.where(a < b, a * b, a + b),
    "where less equal": lambda a, b: np.where(a <= b, 2.0, a),
    "where greater": lambda a, b: np.where(a > 0.5, a, b),
    "where equal": lambda a, b: np.where(np.floor(4 * a) == np.floor(4 * b), 1.0, b),
    "where not equal": lambda a, b: np.where(np.floor(4 * a) != np.floor(4 * b), 1.0, b),
    "nested where": lambda a, b: np.where(a < 0.3, b, np.where(b < 0.6, a, 1.0)),
    "maximum": lambda a, b: np.maximum(a, b),
    "minimum": lambda a, b: np.minimum(a, b),
    "clip": lambda a, b: np.clip(a, 0.3, 0.6),
}


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("name", OPERATIONS)
def test_operation_equals_numpy(name, dtype):
    function = OPERATIONS[name]
    tape = tape_of(lambda x: [function(*x)], {"x": 2})
    x = np.random.default_rng(0).uniform(0.1, 0.9, (2, 40)).astype(dtype)
    got = tape(x)
    assert got.shape == (1, 40)
    assert got.dtype == dtype
    tolerance = 4e-15 if dtype is np.float64 else 4e-6
    want = function(*x.astype(float)) if dtype is np.float64 else function(*x)
    np.testing.assert_allclose(got[0], want, rtol=tolerance, atol=tolerance)


def test_logical_operations():
    def function(x):
        a, b = x
        both = ca.logic_and(a > 0.3, b > 0.3)
        either = ca.logic_or(a > 0.7, b > 0.7)
        return [ca.if_else(both, a, b), ca.if_else(ca.logic_not(either), 1.0, 2.0)]

    tape = tape_of(function, {"x": 2})
    a, b = x = np.random.default_rng(1).uniform(0, 1, (2, 200))
    np.testing.assert_array_equal(tape(x)[0], np.where((a > 0.3) & (b > 0.3), a, b))
    np.testing.assert_array_equal(tape(x)[1], np.where((a > 0.7) | (b > 0.7), 2.0, 1.0))


def test_an_operation_without_counterpart_is_refused_by_name():
    with pytest.raises(ValueError, match="ERF"):
        tape_of(lambda x: [ca.erf(x[0])], {"x": 1})


def branching(x):
    """Selects of several kinds, nested, whose conditions can all hold, all fail, or differ."""
    a, b, c = x
    s, k = np.sin(a), np.cos(a)
    inner = np.where(a < 1, s / (1 + b * b), k * b)
    outer = np.where(b < 1, inner * c, inner + np.exp(-c * c))
    either = np.where(c < 1, outer, 0.0)
    series = a * a * a - 2 * a + s
    return [outer, either, np.where(a < 1, series, outer / (2 + k)), s + k, 3.0]


@pytest.mark.parametrize("dtype", DTYPES)
def test_uniform_and_mixed_branches_give_the_same_bits(dtype):
    # whether the other runs of the batch take the same branch must not matter
    tape = tape_of(branching, {"x": 3})
    rng = np.random.default_rng(10)
    below = rng.uniform(-3, 0.9, (3, 12)).astype(dtype)
    above = rng.uniform(1.1, 4, (3, 12)).astype(dtype)
    some = rng.uniform(-3, 4, (3, 12)).astype(dtype)
    some[:, 0] = np.nan
    mixed = tape(np.concatenate([below, above, some], axis=1))
    tolerance = 1e-14 if dtype is np.float64 else 1e-5
    for x, got in zip((below, above, some), np.split(mixed, 3, axis=1), strict=True):
        np.testing.assert_array_equal(tape(x), got)
        want = [np.broadcast_to(w, 12) for w in branching(x.astype(float))]
        np.testing.assert_allclose(got, want, rtol=tolerance, atol=tolerance)
    # single runs as well, and one run repeated
    for m in range(36):
        x = np.concatenate([below, above, some], axis=1)[:, m : m + 1]
        np.testing.assert_array_equal(tape(np.repeat(x, 2, axis=1))[:, 0], mixed[:, m])


def test_a_branch_on_a_common_parameter():
    tape = tape_of(
        lambda x, p: [np.where(p[0] > 0, np.sin(x[0]) * x[1], np.exp(x[1]) - x[0])],
        {"x": 2, "p": 1},
    )
    a, b = x = np.random.default_rng(11).standard_normal((2, 3, 8))
    for value, want in ((1.0, np.sin(a) * b), (-1.0, np.exp(b) - a)):
        for p in (np.full((1, 1), value), np.full((1, 8), value)):
            np.testing.assert_allclose(tape(x, p)[0], want, rtol=1e-14)
    signs = np.where(np.arange(8) % 2, 1.0, -1.0)
    want = np.where(signs > 0, np.sin(a) * b, np.exp(b) - a)
    np.testing.assert_allclose(tape(x, signs[None])[0], want, rtol=1e-14)


def test_the_branch_not_taken_does_no_harm():
    # a division by zero behind a select does not show
    tape = tape_of(lambda x: [np.where(x[0] == 0, 1.0, np.sin(x[0]) / x[0])], {"x": 1})
    for x in ([[0.0, 0.0]], [[0.0, 0.5]], [[0.5, 0.5]]):
        with np.errstate(all="ignore"):
            got = tape(np.array(x))[0]
        want = [1.0 if v == 0 else math.sin(v) / v for v in x[0]]
        np.testing.assert_allclose(got, want, rtol=1e-15)


# -- sines and cosines of one angle ----------------------------------------------------------------


def test_sine_and_cosine_of_one_angle_are_exact_to_rounding():
    tape = tape_of(lambda x: [np.sin(x[0]), np.cos(x[0])], {"x": 1})
    near = np.concatenate([k * math.pi / 2 + np.array([-1e-9, 0, 1e-12]) for k in range(-8, 9)])
    wide = np.random.default_rng(2).uniform(-50, 50, 2000)
    x = np.concatenate([near, wide, [0.0, -0.0, 1e-300, 1e-9]])
    got = tape(x[None])
    np.testing.assert_allclose(got[0], np.sin(x), rtol=0, atol=5e-16)
    np.testing.assert_allclose(got[1], np.cos(x), rtol=0, atol=5e-16)
    np.testing.assert_allclose((got**2).sum(axis=0), 1, rtol=0, atol=1e-15)


def test_several_angles_do_not_mix():
    def function(x):
        a, b, c = x
        return [np.cos(b), np.sin(a), np.cos(a) * np.sin(b), np.cos(c)]

    x = np.random.default_rng(3).uniform(-3, 3, (3, 30))
    a, b, c = x
    want = [np.cos(b), np.sin(a), np.cos(a) * np.sin(b), np.cos(c)]
    np.testing.assert_allclose(tape_of(function, {"x": 3})(x), want, rtol=0, atol=1e-15)


# -- outputs ---------------------------------------------------------------------------------------


def test_constants_inputs_repeats_and_zeros_as_outputs():
    def function(x):
        a, b = x
        shared = a * b
        return [shared, 3.5, a, 0.0, shared, b, 0 * a, shared + 1]

    a, b = x = np.random.default_rng(4).standard_normal((2, 6))
    one, nil = np.ones(6), np.zeros(6)
    want = [a * b, 3.5 * one, a, nil, a * b, b, nil, a * b + 1]
    np.testing.assert_array_equal(tape_of(function, {"x": 2})(x), want)


def test_no_outputs():
    assert tape_of(lambda x: [], {"x": 2})(np.ones((2, 5))).shape == (0, 5)


def test_results_are_fresh():
    tape = tape_of(lambda x: [x[0] + 1, x[1], 2.0], {"x": 2})
    x = np.ones((2, 5))
    first = tape(x)
    kept = first.copy()
    second = tape(2 * x)
    np.testing.assert_array_equal(first, kept)
    assert not np.shares_memory(first, second)
    first[:] = 99
    np.testing.assert_array_equal(tape(x), kept)
    assert not np.shares_memory(tape(x), x)


def test_inputs_are_not_modified_and_need_not_be_contiguous():
    tape = tape_of(lambda x, y: [x[0] * y[0], np.sin(x[1]) - x[0]], {"x": 2, "y": 1})
    big = np.random.default_rng(5).standard_normal((4, 12))
    x, y = big[::2, ::3], big[1:2, 1::3]
    kept = big.copy()
    big.flags.writeable = False
    got = tape(x, y)
    np.testing.assert_array_equal(big, kept)
    np.testing.assert_allclose(got, [x[0] * y[0], np.sin(x[1]) - x[0]], atol=1e-15)


# -- shapes ----------------------------------------------------------------------------------------


def busy(x, p, dt):
    a, b = x
    s, c = np.sin(a), np.cos(a)
    return [
        s * p[0] + b * dt[0],
        np.where(a < b, c, p[1]),
        p[0] * p[1] * dt[0],
        np.hypot(a, b) / (1 + c * c),
    ]


SIZES = {"x": 2, "p": 2, "dt": 1}


def test_batches_broadcast():
    tape = tape_of(busy, SIZES)
    rng = np.random.default_rng(6)
    x, p = rng.standard_normal((2, 5, 7)), rng.standard_normal((2, 7))
    for parameters in (p, p[:, None], p[:, :1], p[:, :1, None]):
        for dt in (np.full((1, 1), 0.1), np.full((1, 1, 1), 0.1), np.full((1, 7), 0.1)):
            got = tape(x, parameters, dt)
            assert got.shape == (4, 5, 7)
            want = busy(x, np.broadcast_to(parameters.reshape(2, -1), (2, 7)), dt.reshape(1, -1))
            want = np.array([np.broadcast_to(w, (5, 7)) for w in want])
            np.testing.assert_allclose(got, want, rtol=1e-14, atol=1e-15)


def test_many_shapes_in_turn():
    # more shapes than plans are kept: each comes back right
    tape = tape_of(busy, SIZES)
    rng = np.random.default_rng(7)
    p, dt = rng.standard_normal((2, 1)), np.full((1, 1), 0.5)
    cases = [rng.standard_normal((2, k)) for k in range(1, 31)]
    for _ in range(2):
        for x in cases:
            got = tape(x, p, dt)
            want = [np.broadcast_to(w, x.shape[1]) for w in busy(x, p, dt)]
            np.testing.assert_allclose(got, want, rtol=1e-14, atol=1e-15)


def test_an_empty_group_is_allowed():
    tape = tape_of(lambda x, u: [2 * x[0]], {"x": 1, "u": 0})
    np.testing.assert_array_equal(tape(np.ones((1, 4)), np.zeros((0, 4))), 2 * np.ones((1, 4)))


def test_a_wrong_number_of_components_is_refused_by_name():
    tape = tape_of(busy, SIZES)
    with pytest.raises(ValueError, match=r"group `p` has 2 components, got shape \(3, 1\)"):
        tape(np.ones((2, 4)), np.ones((3, 1)), np.ones((1, 1)))


def test_batches_that_do_not_fit_are_refused():
    tape = tape_of(busy, SIZES)
    with pytest.raises(ValueError, match="shape"):
        tape(np.ones((2, 4)), np.ones((2, 3)), np.ones((1, 1)))


@pytest.mark.parametrize("dtype", DTYPES)
def test_bits_do_not_depend_on_the_batch(dtype):
    tape = tape_of(busy, SIZES)
    rng = np.random.default_rng(8)
    x = rng.standard_normal((2, 70)).astype(dtype)
    p, dt = rng.standard_normal((2, 1)).astype(dtype), np.full((1, 1), 0.1, dtype)
    whole = tape(x, p, dt)
    for size in (2, 3, 5, 8, 13, 33, 64):
        for first in {0, 1, 70 - size}:
            cut = slice(first, first + size)
            np.testing.assert_array_equal(tape(x[:, cut], p, dt), whole[:, cut])
    # nor on how the runs are arranged
    np.testing.assert_array_equal(tape(x.reshape(2, 7, 10), p, dt).reshape(4, 70), whole)
    # nor on whether a parameter is common or given a run
    wide = np.repeat(p, 70, axis=1)
    np.testing.assert_array_equal(tape(x, wide, dt), whole)


@pytest.mark.parametrize("dtype", DTYPES)
def test_the_type_of_the_first_input_holds_throughout(dtype):
    tape = tape_of(busy, SIZES)
    x = np.ones((2, 4), dtype)
    got = tape(x, np.ones((2, 1), np.float64), np.ones((1, 1), np.float64))
    assert got.dtype == dtype
    # constants and branches do not widen it: single precision keeps its own rounding
    third = tape_of(lambda x: [np.where(x[0] > 0, x[0] / 3, 0.1)], {"x": 1})
    assert third(np.ones((1, 2), dtype))[0, 0] == dtype(1) / dtype(3)


# -- what is known of a tape -----------------------------------------------------------------------


def test_depends_on():
    tape = tape_of(lambda x, u, p: [x[0] * p[0], x[1], 1.0], {"x": 2, "u": 2, "p": 1})
    assert tape.depends_on("x")
    assert not tape.depends_on("u")
    assert tape.depends_on("p")
    # an input that drops out by algebra does not count
    assert not tape_of(lambda x, u: [x[0] + u[0] - u[0]], {"x": 1, "u": 1}).depends_on("u")
    # a branch counts
    branch = tape_of(lambda x, u: [np.where(u[0] > 0, x[0], 1.0)], {"x": 1, "u": 1})
    assert branch.depends_on("u")


def test_counts():
    tape = tape_of(
        lambda x: [
            x[0] * x[1] + x[2],
            -(x[0] / x[1]),
            np.sqrt(x[2]) - np.sin(x[0]),
            np.where(x[0] > x[1], x[2], 0.0),
            3.0,
            x[0],
        ],
        {"x": 3},
    )
    counts = tape.counts()
    assert (counts.add, counts.mul, counts.div) == (2, 1, 1)
    assert (counts.sqrt, counts.transcendental) == (1, 1)
    assert counts.total == 6


def test_common_subexpressions_are_counted_once():
    tape = tape_of(lambda x: [np.exp(x[0] * x[1]), 1 + np.exp(x[0] * x[1])], {"x": 2})
    assert (tape.counts().transcendental, tape.counts().mul, tape.counts().add) == (1, 1, 1)


def test_cubes_and_fourth_powers_are_products():
    counts = tape_of(lambda x: [x[0] ** 3, x[0] ** 4], {"x": 1}).counts()
    assert counts.transcendental == 0
    assert counts.mul == 3


def test_pickled_tape_is_the_same_tape():
    tape = tape_of(busy, SIZES)
    args = (np.random.default_rng(9).standard_normal((2, 9)), np.ones((2, 1)), np.ones((1, 1)))
    want = tape(*args)
    again = pickle.loads(pickle.dumps(tape))
    np.testing.assert_array_equal(again(*args), want)
    assert again.groups == SIZES
    assert again.counts() == tape.counts()
    # plans and buffers stay behind
    assert len(pickle.dumps(tape)) < 10_000
