"""Keyed streams: a draw depends on its name only."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

from flyoff.numerics.streams import Streams

RUNS = tuple(range(7, 27))


def streams(**change) -> Streams:
    kept = {"seed": 1, "purpose": "test", "label": "a", "runs": RUNS, "replicate": 0}
    return Streams(**{**kept, **change})


KINDS = ("normal", "uniform")


@pytest.mark.parametrize("kind", KINDS)
def test_shape_type_and_layout(kind):
    draws = getattr(streams(), kind)("role", (3, 5), 2)
    assert draws.shape == (3, 5, len(RUNS))
    assert draws.dtype == np.float64
    assert draws.flags.c_contiguous
    assert getattr(streams(), kind)("role", (0,)).shape == (0, len(RUNS))
    assert len(streams()) == len(RUNS)


@pytest.mark.parametrize("kind", KINDS)
def test_same_key_same_numbers_for_any_batching(kind):
    whole = getattr(streams(), kind)("role", (3, 5), 4)
    for cut in (slice(0, 1), slice(3, 8), slice(0, 20), slice(19, 20), slice(None, None, 2)):
        part = getattr(streams().select(cut), kind)("role", (3, 5), 4)
        np.testing.assert_array_equal(part, whole[..., cut])
        alone = getattr(streams(runs=RUNS[cut]), kind)("role", (3, 5), 4)
        np.testing.assert_array_equal(alone, whole[..., cut])


@pytest.mark.parametrize("kind", KINDS)
def test_same_key_same_numbers_in_any_order(kind):
    whole = getattr(streams(), kind)("role", (4,), 4)
    mixed = np.random.default_rng(0).permutation(len(RUNS))
    shuffled = streams(runs=[RUNS[i] for i in mixed])
    np.testing.assert_array_equal(getattr(shuffled, kind)("role", (4,), 4), whole[:, mixed])
    # other draws in between, of other kinds and steps, change nothing
    busy = streams()
    busy.normal("other", (2,), 9)
    busy.uniform("role", (3,), 4)
    getattr(busy, kind)("role", (5,), 3)
    np.testing.assert_array_equal(getattr(busy, kind)("role", (4,), 4), whole)
    np.testing.assert_array_equal(getattr(busy, kind)("role", (4,), 4), whole)


def test_pickled_and_padded_streams_are_the_same_streams():
    one = streams(replicate=3)
    want = one.normal("role", (4,), 2)
    again = pickle.loads(pickle.dumps(one))
    assert again.runs == RUNS
    np.testing.assert_array_equal(again.normal("role", (4,), 2), want)
    padded = one.padded()
    assert padded.runs == (*RUNS, RUNS[-1])
    got = padded.normal("role", (4,), 2)
    np.testing.assert_array_equal(got[:, :-1], want)
    np.testing.assert_array_equal(got[:, -1], want[:, -1])
    np.testing.assert_array_equal(
        one.select(slice(5, 9)).normal("role", (4,), 2), want[:, slice(5, 9)]
    )


@pytest.mark.parametrize("kind", KINDS)
def test_every_part_of_the_key_counts(kind):
    def draw(one: Streams, role: str = "role", step: int = 5) -> np.ndarray:
        return getattr(one, kind)(role, (50,), step)

    first = draw(streams())
    others = {
        "role": draw(streams(), role="role:b"),
        "step": draw(streams(), step=6),
        "step zero": draw(streams(), step=0),
        "seed": draw(streams(seed=2)),
        "purpose": draw(streams(purpose="tuning")),
        "label": draw(streams(label="b")),
        "runs": draw(streams(runs=[r + 20 for r in RUNS])),
        "replicate": draw(streams(replicate=1)),
    }
    for name, other in others.items():
        assert not np.isin(first, other).any(), name
        # 1000 pairs: five standard errors of a correlation
        correlation = np.corrcoef(first.ravel(), other.ravel())[0, 1]
        assert abs(correlation) < 5 / np.sqrt(first.size), name
    # and the runs differ among themselves
    assert len(np.unique(first)) == first.size


def test_large_and_neighbouring_seeds_and_steps():
    draws = [
        streams(seed=seed).uniform("role", (3,), step)
        for seed in (0, 1, 2**31, 2**63, 2**64 + 1)
        for step in (0, 1, 2, 10_000, 10_001)
    ]
    assert len(np.unique(draws)) == np.size(draws)


def test_names_that_could_run_together_are_kept_apart():
    a = streams(label="a", purpose="test").normal("b:c", (5,))
    b = streams(label="a:b", purpose="test").normal("c", (5,))
    assert not np.isin(a, b).any()


def test_mean_and_variance():
    many = streams(runs=range(500))
    z = many.normal("role", (400,))
    size = z.size
    assert z.mean() == pytest.approx(0, abs=4 / np.sqrt(size))
    assert z.var() == pytest.approx(1, abs=4 * np.sqrt(2 / size))
    assert (z**4).mean() == pytest.approx(3, abs=4 * np.sqrt(96 / size))
    u = many.uniform("role", (400,))
    assert u.min() >= 0
    assert u.max() < 1
    assert u.mean() == pytest.approx(0.5, abs=4 * np.sqrt(1 / 12 / size))
    assert u.var() == pytest.approx(1 / 12, abs=4 * np.sqrt(1 / 180 / size))
    # the first draw of every run and step, where a poor start would show
    first = np.array([many.uniform("role", (1,), k)[0] for k in range(200)])
    counts = np.histogram(first, bins=20, range=(0, 1))[0]
    expected = first.size / 20
    chi_square = ((counts - expected) ** 2 / expected).sum()
    assert chi_square < 19 + 5 * np.sqrt(2 * 19)


def test_neighbouring_runs_and_steps_are_not_correlated():
    many = streams(runs=range(400))
    z = np.array([many.normal("role", (5,), k) for k in range(100)])  # step, draw, run
    bound = 5 / np.sqrt(z.size)
    for axis in range(3):
        a, b = np.take(z, range(z.shape[axis] - 1), axis), np.take(z, range(1, z.shape[axis]), axis)
        assert abs(np.mean(a * b)) < bound
        # nor are their sizes
        assert abs(np.corrcoef(np.abs(a).ravel(), np.abs(b).ravel())[0, 1]) < bound
    # normals and uniforms of one key come from the same bits, those of two roles do not
    u = np.array([many.uniform("other", (5,), k) for k in range(100)])
    assert abs(np.corrcoef(z.ravel(), u.ravel())[0, 1]) < bound
