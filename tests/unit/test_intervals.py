"""Intervals: against SciPy's own, against tables, and by their coverage."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from flyoff.evidence.intervals import (
    REDUCTIONS,
    clopper_pearson,
    nees_band,
    order_interval,
    student,
)
from flyoff.evidence.paired import paired_ratio
from flyoff.scores.accuracy import EDGES


@pytest.mark.parametrize(("hits", "n"), [(0, 20), (81, 263), (15, 148), (20, 20), (1, 29)])
def test_clopper_pearson_equals_scipy(hits, n):
    want = stats.binomtest(hits, n).proportion_ci(0.95, "exact")
    assert clopper_pearson(hits, n) == pytest.approx((want.low, want.high), abs=1e-12)


def test_clopper_pearson_of_newcombe():
    """R. Newcombe, Stat. Med. 17:857-872, 1998, table I (from memory)."""
    for hits, n, low, high in (
        (81, 263, 0.2527, 0.3676),
        (15, 148, 0.0578, 0.1617),
        (0, 20, 0.0, 0.1684),
        (1, 29, 0.0009, 0.1776),
    ):
        assert clopper_pearson(hits, n) == pytest.approx((low, high), abs=5e-5)


def test_student_equals_scipy():
    values = np.random.default_rng(1).normal(3, 2, 17)
    want = stats.ttest_1samp(values, 0).confidence_interval(0.95)
    assert student(values) == pytest.approx((values.mean(), want.low, want.high), abs=1e-12)
    assert np.isnan(student(values[:1])[1])


def test_sleep_data():
    """Student 1908, paired t interval -2.4599 to -0.7001 (standard example, from memory)."""
    a = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0])
    b = np.array([1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4])
    _, low, high = student(a - b)
    assert (low, high) == pytest.approx((-2.4598858, -0.7001142), abs=1e-6)


def test_order_interval_of_the_median():
    """n = 10: the 2nd and 9th of ten (97.9 %), as in tables of order-statistic intervals."""
    values = np.arange(1.0, 11.0)
    assert order_interval(values, 0.5) == pytest.approx((5.5, 2.0, 9.0))


def test_order_interval_opens_above_under_72_runs():
    """P(all n below the 95 % quantile) = 0.95^n exceeds 2.5 % up to n = 71."""
    for n, open_above in ((71, True), (72, False)):
        assert np.isinf(order_interval(np.arange(n, dtype=float), 0.95)[2]) == open_above
    note = REDUCTIONS["run-quantile"](np.arange(71.0), {}).note
    assert note == "open above: fewer than 72 runs"


@pytest.mark.parametrize(
    ("size", "runs", "low", "high"),
    [(3, 50, 0.7866, 1.2387), (6, 100, 0.8900, 1.1163), (15, 50, 0.9013, 1.1037)],
)
def test_nees_band(size, runs, low, high):
    """Average-NEES bands over n (computed from the chi-square distribution, four digits)."""
    assert nees_band(size, runs) == pytest.approx((low, high), abs=5e-5)


def test_nees_region_of_bar_shalom():
    """Y. Bar-Shalom et al. 2001, section 5.4: 50 runs, n = 2: [1.5, 2.6] (from memory)."""
    low, high = nees_band(2, 50)
    assert (2 * low, 2 * high) == pytest.approx((1.4844, 2.5912), abs=5e-5)


def _coverage(reduction, draw, truth, studies=600, runs=64):
    rng = np.random.default_rng(5)
    hits = 0
    for _ in range(studies):
        e = REDUCTIONS[reduction](draw(rng, runs), {})
        hits += e.low <= truth <= e.high
    return hits / studies


def test_coverage_of_the_default_summaries():
    """1000 lognormal studies cover 94-95 %: within Monte Carlo error at 600."""

    def lognormal(rng, n):
        return rng.lognormal(0.3, 0.4, n)

    assert _coverage("geometric-mean", lognormal, np.exp(0.3)) == pytest.approx(0.95, abs=0.03)
    assert _coverage("median", lognormal, np.exp(0.3)) > 0.93
    wanted = np.exp(0.3 + 0.4 * stats.norm.ppf(0.95))
    assert _coverage("run-quantile", lognormal, wanted, runs=100) > 0.93


def test_pooled_rms_has_no_interval_with_a_wild_run():
    calm = np.linspace(1, 2, 50)
    e = REDUCTIONS["pooled-rms"](calm, {})
    assert e.low < np.sqrt(np.mean(calm**2)) == e.value < e.high
    wild = REDUCTIONS["pooled-rms"](np.append(calm, 30.0), {})
    assert np.isnan(wild.low)
    assert wild.note == "no interval: a run is 20 times the median"
    heavy = REDUCTIONS["mean"](np.append(calm, 30.0), {"heavy_tail": True})
    assert np.isnan(heavy.high)
    assert np.isfinite(REDUCTIONS["mean"](np.append(calm, 30.0), {}).high)


def test_pooled_quantile_from_histograms():
    rng = np.random.default_rng(3)
    samples = np.abs(rng.normal(0, 2.5, (40, 500)))
    counts = np.array([np.histogram(s, EDGES)[0] for s in samples])
    e = REDUCTIONS["pooled-quantile"](counts, {})
    assert e.value == pytest.approx(np.quantile(samples, 0.95), rel=5e-3)
    assert e.low < 2.5 * 1.95996 < e.high
    assert e.units == 40
    again = REDUCTIONS["pooled-quantile"](counts, {})
    assert (again.low, again.high) == (e.low, e.high)


def test_failed_runs_are_counted_not_dropped():
    values = np.array([1.0, 2.0, np.nan, 4.0])
    for name in ("geometric-mean", "median", "mean", "largest", "pooled-rms"):
        e = REDUCTIONS[name](values, {})
        assert e.units == 3
        assert "1 of 4 without a value" in e.note
    rate = REDUCTIONS["rate"](np.array([0.0, 1.0, 0.0, 0.0]), {})
    assert (rate.value, rate.note) == (0.25, "1 of 4")


def test_paired_ratio():
    rng = np.random.default_rng(2)
    common = rng.lognormal(0, 0.8, 100)
    a = common * rng.lognormal(0.1, 0.1, 100)
    ratio = paired_ratio(a, common)
    want = stats.ttest_1samp(np.log(a / common), 0).confidence_interval(0.95)
    assert (ratio.low, ratio.high) == pytest.approx((np.exp(want.low), np.exp(want.high)))
    assert ratio.separated
    # unpaired, the spread of the runs would have hidden ten per cent
    assert stats.ttest_ind(np.log(a), np.log(common)).pvalue > 0.05
    assert not paired_ratio(common * (1 + 1e-12), common).separated
    a[3] = np.nan
    assert paired_ratio(a, common).runs == 99
