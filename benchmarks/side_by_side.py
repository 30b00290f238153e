"""Time two ways of doing the same work in turn, round after round, in one process."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Result:
    """Microseconds a run and step of both, and the ratio (rival / ours), medians over rounds."""

    name: str
    ours: float
    rival: float
    ratio: float
    low: float
    high: float

    def line(self) -> str:
        return (
            f"{self.name:34} {self.rival:10.2f} {self.ours:10.3f} {self.ratio:8.1f}x   "
            f"{self.low:.1f} to {self.high:.1f}"
        )


HEADER = f"{'':34} {'rival us':>10} {'ours us':>10} {'ratio':>9}   over rounds"


def compare(
    name: str,
    ours: Callable[[], object],
    ours_work: int,
    rival: Callable[[], object],
    rival_work: int,
    rounds: int = 9,
) -> Result:
    """Median ratio of time a run and step; each round times both, so noise falls on both.

    `ours_work` and `rival_work` are runs x steps of one call. Ours is called twice a round, before
    and after the rival, so that a change of the machine's speed within a round cancels.
    """
    ours()
    rival()
    mine, theirs, ratios = [], [], []
    for _ in range(rounds):
        a = _clock(ours)
        r = _clock(rival) / rival_work
        b = _clock(ours)
        o = (a + b) / 2 / ours_work
        mine.append(o)
        theirs.append(r)
        ratios.append(r / o)
    return Result(
        name,
        1e6 * statistics.median(mine),
        1e6 * statistics.median(theirs),
        statistics.median(ratios),
        min(ratios),
        max(ratios),
    )


def _clock(work: Callable[[], object]) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start
