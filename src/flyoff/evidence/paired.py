"""Paired comparison of two candidates on the same runs."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from flyoff.evidence.intervals import student
from flyoff.numerics.spaces import Array

__all__ = ["PairedRatio", "paired_ratio"]


@dataclass(frozen=True)
class PairedRatio:
    """Typical ratio of per-run errors, its 95 % interval, and on how many common runs."""

    ratio: float
    low: float
    high: float
    runs: int

    @property
    def separated(self) -> bool:
        """Whether the interval excludes one."""
        return self.runs >= 2 and not (self.low <= 1 <= self.high)


def paired_ratio(a: Array, b: Array) -> PairedRatio:
    """Geometric mean of a/b over the runs where both have a value, Student interval of the log.

    Parameters
    ----------
    a, b : (M,), positive per-run errors on common random numbers, NaN where failed
    """
    both = np.isfinite(a) & np.isfinite(b) & (a > 0) & (b > 0)
    logs = np.log(a[both] / b[both])
    mean, low, high = student(logs)
    # rounding is no evidence: filters that agree to ten digits are not separated
    if both.any() and np.abs(logs).max() < 1e-9:
        return PairedRatio(1.0, 1.0, 1.0, int(both.sum()))
    ratio, low, high = (math.exp(min(x, 700)) for x in (mean, low, high))
    return PairedRatio(ratio, low, high, int(both.sum()))
