"""Batched linear algebra against numpy.linalg, run by run."""

from __future__ import annotations

import numpy as np
import pytest

from flyoff.numerics import linalg

DTYPES = (np.float64, np.float32)
SIZES = (1, 2, 3, 5, 8, 15)
RUNS = 70


def positive(d: int, runs: int = RUNS, seed: int = 0, dtype=np.float64) -> np.ndarray:
    rng = np.random.default_rng(seed)
    root = rng.standard_normal((d, d, runs))
    return (np.einsum("ikm,jkm->ijm", root, root) + 0.5 * np.eye(d)[:, :, None]).astype(dtype)


def runs_first(a: np.ndarray) -> np.ndarray:
    return np.moveaxis(a, -1, 0)


# -- values ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("d", SIZES)
def test_cholesky(d, dtype):
    a = positive(d, dtype=dtype)
    low, good = linalg.cholesky(a)
    want = np.linalg.cholesky(runs_first(a).astype(float))
    assert low.dtype == dtype
    assert good.dtype == bool
    assert good.all()
    tolerance = 1e-12 if dtype is np.float64 else 2e-5
    np.testing.assert_allclose(runs_first(low), want, rtol=tolerance, atol=tolerance)
    np.testing.assert_array_equal(np.triu(runs_first(low), 1), 0)


def test_cholesky_reads_the_lower_triangle_only():
    a = positive(4)
    b = a.copy()
    for i in range(4):
        b[i, i + 1 :] = np.nan
    np.testing.assert_array_equal(linalg.cholesky(b)[0], linalg.cholesky(a)[0])
    assert linalg.cholesky(b)[1].all()


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("d", SIZES)
def test_substitutions(d, dtype):
    low, _ = linalg.cholesky(positive(d, dtype=dtype))
    b = np.random.default_rng(1).standard_normal((d, 3, RUNS)).astype(dtype)
    tolerance = 1e-11 if dtype is np.float64 else 1e-3
    double, right = runs_first(low).astype(float), runs_first(b).astype(float)
    forward = linalg.solve_lower(low, b.copy())
    assert forward.dtype == dtype
    np.testing.assert_allclose(
        runs_first(forward), np.linalg.solve(double, right), rtol=tolerance, atol=tolerance
    )
    back = linalg.back_substitute(low, b.copy())
    np.testing.assert_allclose(
        runs_first(back),
        np.linalg.solve(np.swapaxes(double, 1, 2), right),
        rtol=tolerance,
        atol=tolerance,
    )


def test_substitutions_work_in_place_on_the_right_hand_side_only():
    low, _ = linalg.cholesky(positive(3))
    kept = low.copy()
    b = np.random.default_rng(2).standard_normal((3, RUNS))
    assert linalg.solve_lower(low, b) is b
    assert linalg.back_substitute(low, b) is b
    np.testing.assert_array_equal(low, kept)


def test_common_factor_serves_all_runs():
    # one factor (d, d, 1) against many right-hand sides
    low, _ = linalg.cholesky(positive(3, runs=1))
    b = np.random.default_rng(3).standard_normal((3, RUNS))
    want = np.linalg.solve(low[..., 0], b)
    np.testing.assert_allclose(linalg.solve_lower(low, b.copy()), want, rtol=1e-11, atol=1e-13)


@pytest.mark.parametrize("d", SIZES)
def test_quadratic_form(d):
    a = positive(d)
    v = np.random.default_rng(4).standard_normal((d, RUNS))
    got = linalg.lower_quadratic(linalg.cholesky(a)[0], v)
    want = [v[:, m] @ np.linalg.solve(a[..., m], v[:, m]) for m in range(RUNS)]
    np.testing.assert_allclose(got, want, rtol=1e-10)


def test_products():
    rng = np.random.default_rng(5)
    a, b, c = (rng.standard_normal(s) for s in ((2, 4, RUNS), (4, 3, RUNS), (3, 4, RUNS)))
    np.testing.assert_allclose(
        runs_first(linalg.product(a, b)), runs_first(a) @ runs_first(b), rtol=1e-12, atol=1e-14
    )
    np.testing.assert_allclose(
        runs_first(linalg.product_t(a, c)),
        runs_first(a) @ np.swapaxes(runs_first(c), 1, 2),
        rtol=1e-12,
        atol=1e-14,
    )


def test_product_with_a_common_factor():
    rng = np.random.default_rng(6)
    a, b = rng.standard_normal((3, 2, RUNS)), rng.standard_normal((2, 2, 1))
    want = runs_first(a) @ b[..., 0]
    np.testing.assert_allclose(runs_first(linalg.product(a, b)), want, rtol=1e-12, atol=1e-14)


def test_symmetrise():
    a = np.random.default_rng(7).standard_normal((4, 4, RUNS))
    got = linalg.symmetrise(a)
    np.testing.assert_array_equal(got, np.swapaxes(got, 0, 1))
    np.testing.assert_allclose(got[1, 3], (a[1, 3] + a[3, 1]) / 2, rtol=1e-15)


# -- runs without a factor -------------------------------------------------------------------------


def broken() -> dict[str, np.ndarray]:
    """Matrices (3, 3) that have no Cholesky factor."""
    nan = np.eye(3)
    nan[2, 0] = np.nan
    infinite = np.eye(3)
    infinite[1, 1] = np.inf
    return {
        "negative first": np.diag([-1.0, 1.0, 1.0]),
        "negative last": np.diag([1.0, 1.0, -1.0]),
        "indefinite": np.array([[1.0, 2.0, 0.0], [2.0, 1.0, 0.0], [0.0, 0.0, 1.0]]),
        "zero": np.zeros((3, 3)),
        "singular first": np.diag([0.0, 1.0, 1.0]),
        "singular middle": np.diag([1.0, 0.0, 1.0]),
        "singular last": np.diag([1.0, 1.0, 0.0]),
        "rank one": np.ones((3, 3)),
        "nan": nan,
        "all nan": np.full((3, 3), np.nan),
        "infinite": infinite,
    }


@pytest.mark.parametrize("dtype", DTYPES)
def test_runs_without_a_factor_are_marked_and_leave_the_others_alone(dtype):
    good = positive(3, runs=len(broken()) + 1, dtype=dtype)
    mixed = np.empty((3, 3, 2 * len(broken()) + 1), dtype=dtype)
    mixed[..., ::2] = good
    mixed[..., 1::2] = np.stack(list(broken().values()), axis=-1)
    with np.errstate(all="ignore"):
        low, ok = linalg.cholesky(mixed)
    assert ok[::2].all()
    for name, flag in zip(broken(), ok[1::2], strict=True):
        assert not flag, name
    np.testing.assert_array_equal(low[..., ::2], linalg.cholesky(good)[0])


def test_nan_below_the_diagonal_is_not_mistaken_for_a_factor():
    # the last entry of the first column is bad, every pivot before it is fine
    for i, j in ((1, 0), (2, 0), (2, 1)):
        a = positive(3, runs=2)
        a[i, j, 1] = np.nan
        with np.errstate(all="ignore"):
            _, ok = linalg.cholesky(a)
        assert ok.tolist() == [True, False]


@pytest.mark.parametrize("d", [1, 2])
def test_small_matrices_that_fail(d):
    a = np.repeat(np.eye(d)[:, :, None], 4, axis=2)
    a[-1, -1] = [1.0, 0.0, -1.0, np.nan]
    with np.errstate(all="ignore"):
        _, ok = linalg.cholesky(a)
    assert ok.tolist() == [True, False, False, False]


# -- bits ------------------------------------------------------------------------------------------

OPERATIONS = {
    "cholesky": lambda a, v, c: linalg.cholesky(a)[0],
    "solve_lower": lambda a, v, c: linalg.solve_lower(linalg.cholesky(a)[0], v.copy()),
    "back_substitute": lambda a, v, c: linalg.back_substitute(linalg.cholesky(a)[0], v.copy()),
    "lower_quadratic": lambda a, v, c: linalg.lower_quadratic(linalg.cholesky(a)[0], v),
    "product": lambda a, v, c: linalg.product(c, a),
    "product_t": lambda a, v, c: linalg.product_t(a, c),
    "symmetrise": lambda a, v, c: linalg.symmetrise(linalg.product(a, a)),
}


@pytest.mark.parametrize("name", OPERATIONS)
@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("d", [1, 2, 5, 15])
def test_bits_do_not_depend_on_the_batch(d, dtype, name):
    rng = np.random.default_rng(8)
    a = positive(d, dtype=dtype)
    v = rng.standard_normal((d, RUNS)).astype(dtype)
    c = rng.standard_normal((2, d, RUNS)).astype(dtype)
    whole = OPERATIONS[name](a, v, c)
    for size in (2, 3, 4, 5, 7, 8, 9, 16, 17, 33, 64, 69):
        for first in {0, 1, RUNS - size}:
            cut = slice(first, first + size)
            part = OPERATIONS[name](*(np.ascontiguousarray(x[..., cut]) for x in (a, v, c)))
            np.testing.assert_array_equal(part, whole[..., cut])


@pytest.mark.parametrize("name", OPERATIONS)
def test_inputs_are_not_modified(name):
    rng = np.random.default_rng(9)
    arrays = (positive(4), rng.standard_normal((4, RUNS)), rng.standard_normal((2, 4, RUNS)))
    for a in arrays:
        a.flags.writeable = False
    kept = [a.copy() for a in arrays]
    OPERATIONS[name](*arrays)
    for a, b in zip(arrays, kept, strict=True):
        np.testing.assert_array_equal(a, b)
