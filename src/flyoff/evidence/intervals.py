"""Reductions over independent runs: a value with a 95 % interval, or the reason why there is none.

Names are those of `scores.contract.Statistic.reduction`. A run without a value (failed) is left out
and counted in the note; nothing is dropped silently.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import special

from flyoff.numerics.spaces import Array
from flyoff.scores.accuracy import EDGES

__all__ = [
    "REDUCTIONS",
    "Estimate",
    "clopper_pearson",
    "nees_band",
    "order_interval",
    "student",
]

LEVEL = 0.95
FEWEST_UNITS = 20  # under this many segments of a recording there is no interval
_BOOTSTRAP = 400
# beyond this ratio of the worst run to the median the mean of squares has no honest interval:
# at 1 % of runs 20 times worse a bootstrap covers 45-73 % instead of 95 % (computed)
_TAIL = 5.0


@dataclass(frozen=True)
class Estimate:
    """A value, the ends of its interval (NaN where there is none), how many units, a note."""

    value: float
    low: float = math.nan
    high: float = math.nan
    units: int = 0
    note: str = ""


def student(values: Array) -> tuple[float, float, float]:
    """Mean and 95 % Student interval of independent values; NaN ends under two values."""
    n = len(values)
    mean = float(np.mean(values)) if n else math.nan
    if n < 2:
        return mean, math.nan, math.nan
    half = float(special.stdtrit(n - 1, (1 + LEVEL) / 2) * np.std(values, ddof=1) / math.sqrt(n))
    return mean, mean - half, mean + half


def order_interval(values: Array, p: float) -> tuple[float, float, float]:
    """Quantile and its distribution-free 95 % interval from order statistics.

    An end that no order statistic covers is infinite (open). H. A. David, H. N. Nagaraja, "Order
    Statistics", Wiley 2003, section 7.1.
    """
    n = len(values)
    if n == 0:
        return math.nan, math.nan, math.nan
    ordered = np.sort(values)
    ranks = np.arange(n + 1)
    below = special.bdtr(ranks, n, p)  # P(at most k values below the quantile)
    tail = (1 - LEVEL) / 2
    low_rank = int(np.searchsorted(below, tail, side="right"))  # ranks from one
    high_rank = int(np.searchsorted(below, 1 - tail, side="left")) + 1
    low = float(ordered[low_rank - 1]) if low_rank >= 1 else -math.inf
    high = float(ordered[high_rank - 1]) if high_rank <= n else math.inf
    return float(np.quantile(ordered, p)), low, high


def clopper_pearson(hits: int, n: int) -> tuple[float, float]:
    """Exact 95 % interval of a proportion (C. Clopper, E. Pearson, Biometrika 26:404-413, 1934)."""
    tail = (1 - LEVEL) / 2
    low = 0.0 if hits == 0 else float(special.betaincinv(hits, n - hits + 1, tail))
    high = 1.0 if hits == n else float(special.betaincinv(hits + 1, n - hits, 1 - tail))
    return low, high


def nees_band(size: Array | int, runs: Array | int) -> tuple[Array, Array]:
    """95 % band of the run-averaged, normalised NEES: quantiles of chi2(runs size)/(runs size)."""
    freedom = np.maximum(np.asarray(size) * np.asarray(runs, dtype=float), 1e-300)
    tail = (1 - LEVEL) / 2
    return special.chdtri(freedom, 1 - tail) / freedom, special.chdtri(freedom, tail) / freedom


# -- reductions: (per-run values, options) -> Estimate ---------------------------------------------


def _kept(values: Array) -> tuple[Array, str]:
    fine = np.isfinite(values)
    lost = int((~fine).sum())
    return values[fine], f"{lost} of {len(values)} without a value" if lost else ""


def _joined(*notes: str) -> str:
    return "; ".join(n for n in notes if n)


def _geometric_mean(values: Array, options: Mapping[str, Any]) -> Estimate:
    v, note = _kept(values)
    if len(v) == 0 or not (v > 0).all():
        return Estimate(math.nan, units=len(v), note=_joined(note, "no positive values"))
    mean, low, high = student(np.log(v))
    return Estimate(math.exp(mean), _exp(low), _exp(high), len(v), note)


def _exp(x: float) -> float:
    return math.exp(x) if x < 700 else math.inf


def _median(values: Array, options: Mapping[str, Any]) -> Estimate:
    v, note = _kept(values)
    return Estimate(*order_interval(v, 0.5), len(v), note)


def _run_quantile(values: Array, options: Mapping[str, Any]) -> Estimate:
    v, note = _kept(values)
    value, low, high = order_interval(v, 0.95)
    if math.isinf(high):
        note = _joined(note, "open above: fewer than 72 runs")
    return Estimate(value, low, high, len(v), note)


def _largest(values: Array, options: Mapping[str, Any]) -> Estimate:
    v, note = _kept(values)
    return Estimate(float(v.max()) if len(v) else math.nan, units=len(v), note=note)


def _mean(values: Array, options: Mapping[str, Any]) -> Estimate:
    v, note = _kept(values)
    if options.get("heavy_tail") and len(v):
        worst = float(v.max() / np.median(v))
        if worst > _TAIL:
            note = _joined(note, f"no interval: a run is {worst:.0f} times the median")
            return Estimate(float(v.mean()), units=len(v), note=note)
    mean, low, high = student(v)
    if "least" in options:  # an end beyond what the quantity can be says nothing
        low, high = max(low, options["least"]), min(high, options.get("most", math.inf))
    return Estimate(mean, low, high, len(v), note)


def _pooled_rms(values: Array, options: Mapping[str, Any]) -> Estimate:
    v, note = _kept(values)
    if len(v) == 0:
        return Estimate(math.nan, units=0, note=note)
    mean, low, high = student(v**2)
    value = math.sqrt(mean)
    worst = float(v.max() / np.median(v))
    if worst > _TAIL:
        note = _joined(note, f"no interval: a run is {worst:.0f} times the median")
        return Estimate(value, units=len(v), note=note)
    return Estimate(value, math.sqrt(max(low, 0)) if low == low else low, math.sqrt(high)
                    if high == high else high, len(v), note)  # fmt: skip


def _pooled_quantile(values: Array, options: Mapping[str, Any]) -> Estimate:
    """Quantile over runs and time from histograms (M, bins); bootstrap over runs."""
    counts = values.astype(float)
    used = counts.sum(axis=1) > 0
    lost = int((~used).sum())
    note = f"{lost} of {len(counts)} without a value" if lost else ""
    counts = counts[used]
    n = len(counts)
    if n == 0:
        return Estimate(math.nan, note=note)
    # only the occupied bins; whole numbers below 2^53 add up exactly in any order
    first, last = np.flatnonzero(counts.any(axis=0))[[0, -1]]
    counts, edges = counts[:, first : last + 1], EDGES[first : last + 2]
    value = float(_histogram_quantile(counts.sum(axis=0)[None], edges, 0.95)[0])
    if n < 2:
        return Estimate(value, units=n, note=note)
    rng = np.random.default_rng(n)
    share = rng.multinomial(n, np.full(n, 1 / n), size=_BOOTSTRAP).astype(float)
    draws = _histogram_quantile(share @ counts, edges, 0.95)
    tail = (1 - LEVEL) / 2
    low, high = np.quantile(draws, [tail, 1 - tail])
    return Estimate(value, float(low), float(high), n, note)


def _histogram_quantile(counts: Array, edges: Array, p: float) -> Array:
    """Quantiles of histograms (B, bins), interpolated in the logarithm within a bin."""
    up = np.cumsum(counts, axis=1)
    want = p * up[:, -1]
    k = (up < want[:, None]).sum(axis=1)
    before = np.where(k > 0, np.take_along_axis(up, np.maximum(k - 1, 0)[:, None], 1)[:, 0], 0)
    inside = np.take_along_axis(counts, k[:, None], 1)[:, 0]
    share = (want - before) / inside
    out: Array = edges[k] * (edges[k + 1] / edges[k]) ** share
    return out


def _rate(values: Array, options: Mapping[str, Any]) -> Estimate:
    n, hits = len(values), int(np.nansum(values))
    low, high = clopper_pearson(hits, n)
    return Estimate(hits / n, low, high, n, f"{hits} of {n}")


REDUCTIONS: dict[str, Callable[[Array, Mapping[str, Any]], Estimate]] = {
    "geometric-mean": _geometric_mean,
    "median": _median,
    "pooled-rms": _pooled_rms,
    "pooled-quantile": _pooled_quantile,
    "run-quantile": _run_quantile,
    "largest": _largest,
    "mean": _mean,
    "rate": _rate,
}
