"""Accuracy: error magnitudes of each scored quantity, per run and window."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from flyoff.filtering import Outcome, Step
from flyoff.models.model import Model
from flyoff.numerics.spaces import Array
from flyoff.problems.contract import Quantity
from flyoff.registry import register
from flyoff.scores.contract import Context, Divergence, PlainScore, Statistic

__all__ = ["EDGES", "Accuracy", "ErrorTrack"]

# 40 bins a decade, in SI: pooled quantiles can be rebuilt to a fraction of a bin
_DECADES = (-12, 9)
EDGES = np.logspace(*_DECADES, (_DECADES[1] - _DECADES[0]) * 40 + 1)


class ErrorTrack:
    """Error magnitude of every quantity, (T, M) each; NaN once a run has failed."""

    def __init__(self, context: Context) -> None:
        self.context = context
        shape = (context.steps, context.runs)
        self.direct = {
            q.name: np.full(shape, np.nan) for q in context.quantities if q.error is not None
        }
        self.alive = np.zeros(shape, dtype=bool)
        self.kept: Array | None = None

    def observe(self, step: Step) -> None:
        """Take in one step."""
        self.alive[step.k - 1] = step.alive
        for q in self.context.quantities:
            if q.error is not None:
                size = q.magnitude(step.truth, step.mean)
                self.direct[q.name][step.k - 1] = np.where(step.alive, size, np.nan)
        if self.context.alignment is not None:
            channels = self.context.alignment.channels(step.mean)
            if self.kept is None:
                self.kept = np.full((self.context.steps, *channels.shape), np.nan)
            self.kept[step.k - 1] = np.where(step.alive, channels, np.nan)

    def magnitudes(self) -> dict[str, Array]:
        """All of them, aligned where the problem asks for it."""
        alignment = self.context.alignment
        if alignment is not None and self.kept is not None:
            self.direct |= alignment.errors(self.context.recording, self.kept)
            self.kept = None
        return self.direct


@register(
    "score",
    "accuracy",
    cites="H. A. David, H. N. Nagaraja, 'Order Statistics', Wiley 2003, section 7.1 (intervals)",
)
class Accuracy(PlainScore):
    """rms, quantiles, maximum and a histogram of each error magnitude."""

    def __init__(self, context: Context) -> None:
        self.context = context
        self.track = context.track(ErrorTrack)

    def per_run(self, outcome: Outcome) -> dict[str, Array]:
        """``window/quantity/rms|p50|p95|p99|max|histogram``."""
        out: dict[str, Array] = {}
        for name, size in self.track.magnitudes().items():
            for window in self.context.windows:
                part = size[window.slice]
                # truth may be unknown at some times: those are left out, failed runs are not
                unknown = (np.isnan(part) & self.track.alive[window.slice]).any(axis=1)
                part = part[~unknown]
                key = f"{window.name}/{name}"
                out[f"{key}/rms"] = np.sqrt(np.mean(part**2, axis=0))
                quantiles = np.quantile(part, [0.5, 0.95, 0.99], axis=0)
                for label, row in zip(("p50", "p95", "p99"), quantiles, strict=True):
                    out[f"{key}/{label}"] = row
                out[f"{key}/max"] = part.max(axis=0)
                out[f"{key}/histogram"] = _histograms(part)
        return out

    def profiles(self) -> dict[str, Array]:
        """Squared error of each quantity."""
        return {f"square/{name}": size**2 for name, size in self.track.magnitudes().items()}

    @staticmethod
    def statistics(
        quantities: Sequence[Quantity], model: Model, divergence: Divergence
    ) -> list[Statistic]:
        """Six statistics a quantity."""
        out = []
        for q in quantities:
            for statistic, key, reduction in (
                ("rmse-typical", "rms", "geometric-mean"),
                ("rmse-median", "rms", "median"),
                ("rmse", "rms", "pooled-rms"),
                ("p95", "histogram", "pooled-quantile"),
                ("rmse-run95", "rms", "run-quantile"),
                ("max", "max", "largest"),
            ):
                out.append(
                    Statistic(
                        q.name, statistic, f"{q.name}/{key}", reduction, q.shown_unit,
                        q.shown_factor, {"agreement": q.agreement},
                    )
                )  # fmt: skip
        return out


def _histograms(part: Array) -> Array:
    """Counts (M, bins) of magnitudes (T, M); NaN runs count nothing, the ends catch the rest."""
    bins, runs = len(EDGES) - 1, part.shape[1]
    place = np.searchsorted(EDGES, part, side="right") - 1
    place = np.clip(place, 0, bins - 1)
    flat = place + np.arange(runs) * bins
    fine = ~np.isnan(part)
    counts = np.bincount(flat[fine].ravel(), minlength=runs * bins)
    return counts.reshape(runs, bins).astype(np.uint32)
