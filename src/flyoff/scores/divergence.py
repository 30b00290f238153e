"""Lost runs, counted apart: failed, diverged, never converged, overconfident.

* failed: non-finite, covariance not positive definite, weights collapsed, exception;
* never converged: not within every bound, for `hold` seconds, starting by `converge_by`;
* diverged: converged, and after `converge_by` beyond a bound for `hold` seconds;
* overconfident: none of these, but NEES beyond its 1 - 1e-6 quantile for `hold` seconds.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from flyoff.estimators.contract import Fault
from flyoff.filtering import Outcome
from flyoff.models.model import Model
from flyoff.numerics.spaces import Array
from flyoff.problems.contract import Quantity
from flyoff.registry import register
from flyoff.scores.accuracy import ErrorTrack
from flyoff.scores.consistency import ConsistencyTrack
from flyoff.scores.contract import Context, Divergence, PlainScore, Statistic, held

__all__ = ["LostRuns"]


@register(
    "score",
    "lost-runs",
    cites="C. Clopper, E. Pearson, Biometrika 26:404-413, 1934 (intervals)",
)
class LostRuns(PlainScore):
    """Failed, diverged, never-converged and overconfident runs."""

    def __init__(self, context: Context) -> None:
        self.context = context
        self.track = context.track(ErrorTrack)
        self.consistency = context.track(ConsistencyTrack)

    def per_run(self, outcome: Outcome) -> dict[str, Array]:
        """``all/runs/...``: flags and times, over the whole run."""
        from scipy.special import chdtri

        context, limits = self.context, self.context.divergence
        dt = context.recording.dt
        hold = max(1, round(limits.hold / dt))
        runs = context.runs
        by = min(max(1, round(limits.converge_by / dt)), context.steps)
        beyond = np.zeros((context.steps, runs), dtype=bool)
        sizes = self.track.magnitudes()
        judged = [q for q in limits.bounds if q in sizes]
        for name in judged:
            beyond |= sizes[name] > limits.bounds[name]
        failed = outcome.fault != 0
        out = {
            "all/runs/fault": outcome.fault.astype(np.int64),
            "all/runs/fault-step": outcome.step,
            "all/runs/failed": failed.astype(float),
            "all/runs/fault-message": np.array(
                ["" if m is None else m for m in outcome.messages]
                if outcome.messages is not None
                else [""] * runs,
                dtype="U200",
            ),
        }
        never = np.zeros(runs, dtype=bool)
        diverged = np.zeros(runs, dtype=bool)
        if judged:
            within = held(~beyond, hold)
            # the hold may end after converge_by, it must begin before
            entered = within[: min(by + hold - 1, context.steps)]
            first = np.argmax(entered, axis=0) - hold + 2
            settled = np.where(entered.any(axis=0) & ~failed, first, -1)
            never = ~failed & (settled < 0)
            away = held(beyond[by - 1 :], hold).any(axis=0)
            diverged = ~failed & ~never & away
            out["all/runs/settled-step"] = settled
            out["all/runs/never-converged"] = np.where(failed, 0.0, never)
            out["all/runs/diverged"] = np.where(failed, 0.0, diverged)
        if self.consistency.assessed:
            d = context.model.space.d
            limit = float(chdtri(d, 1e-6)) / d
            nees = self.consistency.nees[""]
            with np.errstate(invalid="ignore"):
                over = held(nees[by - 1 :] > limit, hold).any(axis=0)
            lost = failed | never | diverged
            out["all/runs/overconfident"] = (over & ~lost).astype(float)
        return out

    @staticmethod
    def statistics(
        quantities: Sequence[Quantity], model: Model, divergence: Divergence
    ) -> list[Statistic]:
        """Proportions of runs."""
        names = ["failed", "overconfident"]
        if any(q.name in divergence.bounds for q in quantities):
            names[1:1] = ["diverged", "never-converged"]
        reasons = {"reasons": "runs/fault", "texts": {int(f): f.text for f in Fault if f}}
        return [
            Statistic("runs", n, f"runs/{n}", "rate", options=reasons if n == "failed" else {})
            for n in names
        ]
