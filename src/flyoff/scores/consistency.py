"""Consistency: does the filter's covariance describe its errors?

NEES e' P^-1 e, jointly and by block, divided by the number of components; NIS of each sensor, with
S from the prior covariance; containment within 1, 2 and 3 standard deviations. Y. Bar-Shalom,
X. R. Li, T. Kirubarajan 2001, section 5.4.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from flyoff.filtering import Outcome, Step
from flyoff.models.model import Model
from flyoff.numerics import linalg
from flyoff.numerics.spaces import Array
from flyoff.problems.contract import Quantity
from flyoff.registry import register
from flyoff.scores.contract import Context, Divergence, PlainScore, Statistic

__all__ = ["Consistency", "ConsistencyTrack", "assessable_sample"]


def assessable_sample(d: int) -> float:
    """Effective sample size below which the NEES of a weighted sample says nothing: 20 d.

    With m samples E[NEES] = d (1 + 1/m)(m - 1)/(m - d - 2): 6 % high at m = 20 d, d large.
    """
    return 20.0 * d


class ConsistencyTrack:
    """NEES by block, containment and NIS by sensor, (T, M) each; NaN where not assessable."""

    def __init__(self, context: Context) -> None:
        self.context = context
        space, truth = context.model.space, context.recording.truth
        shape = (context.steps, context.runs)
        # components without a truth counterpart are not assessed
        known: Array = np.any(np.isfinite(truth), axis=(0, 2))
        has_truth = [known[space.ambient[b.name]].all() for b in space.blocks]
        names = [b.name for b, has in zip(space.blocks, has_truth, strict=True) if has]
        self.blocks = {"": space.indices(names)}
        if len(space.blocks) > 1:
            self.blocks |= {name: space.indices([name]) for name in names}
        self.exact = context.truth_covariance is None and len(names) == len(space.blocks)
        self.nees = {name: np.full(shape, np.nan) for name in self.blocks}
        self.inside = {name: np.full((3, *shape), np.nan, dtype=np.float32) for name in self.blocks}
        self.nis = {s: np.full(shape, np.nan) for s in context.model.sensors}
        self.count = {s: np.zeros(shape, dtype=np.int32) for s in context.model.sensors}
        self.assessed = False
        # error and standard deviation of every component of the first run, for a figure
        self.example = np.full((2, context.steps, space.d), np.nan)

    def observe(self, step: Step) -> None:
        """Take in one step."""
        row = step.k - 1
        for name, innovation in step.innovations:
            fresh = innovation.nis
            good = step.alive & (innovation.count > 0) & np.isfinite(fresh)
            old = self.nis[name][row]
            nis = np.where(np.isnan(old), 0, old) + fresh
            self.nis[name][row] = np.where(good, nis, old)
            self.count[name][row] += np.where(good, innovation.count, 0)
        space = self.context.model.space
        e = space.local(step.mean, step.truth)
        self.example[0, row] = np.where(step.alive[0], e[:, 0], np.nan)
        if step.cov is None or step.factor is None or not self.blocks[""]:
            return
        self.example[1, row] = np.sqrt(step.cov[range(space.d), range(space.d), 0])
        judged = self.blocks[""]
        good = step.alive & np.isfinite(e[judged]).all(axis=0)
        if step.ess is not None:
            good &= step.ess >= assessable_sample(space.d)
        if not good.any():
            return
        self.assessed = True
        cov = step.cov
        if self.context.truth_covariance is not None:
            cov = cov + self.context.truth_covariance[:, :, None]
        z = np.abs(e) / np.sqrt(np.einsum("iim->im", cov))
        inside: Array = z <= np.array([1, 2, 3])[:, None, None]
        for name, index in self.blocks.items():
            if name == "" and self.exact:
                low = step.factor
            else:
                low, _ = linalg.cholesky(cov[index][:, index])
            value = linalg.lower_quadratic(low, e[index]) / len(index)
            self.nees[name][row] = np.where(good, value, np.nan)
            share = inside[:, index].sum(axis=1, dtype=np.float32) / np.float32(len(index))
            self.inside[name][:, row] = np.where(good, share, np.float32(np.nan))


@register(
    "score",
    "consistency",
    cites=(
        "Y. Bar-Shalom, X. R. Li, T. Kirubarajan, 'Estimation with Applications to "
        "Tracking and Navigation', Wiley 2001, section 5.4"
    ),
)
class Consistency(PlainScore):
    """NEES joint and by block, NIS by sensor, containment."""

    def __init__(self, context: Context) -> None:
        self.context = context
        self.track = context.track(ConsistencyTrack)

    def per_run(self, outcome: Outcome) -> dict[str, Array]:
        """``window/nees[.block]/mean|inside-ks`` and ``window/nis.sensor/mean``."""
        out: dict[str, Array] = {}
        failed = outcome.fault != 0
        with np.errstate(invalid="ignore", divide="ignore"):
            for window in self.context.windows:
                for name, nees in self.track.nees.items():
                    key = f"{window.name}/nees{'.' + name if name else ''}"
                    part = nees[window.slice]
                    used = np.isfinite(part).sum(axis=0)
                    mean = np.nansum(part, axis=0) / used
                    out[f"{key}/mean"] = np.where(failed, np.nan, mean)
                    out[f"{key}/assessed"] = used / part.shape[0]
                    for s in range(3):
                        inside = self.track.inside[name][s, window.slice].astype(float)
                        share = np.nansum(inside, axis=0) / used
                        out[f"{key}/inside-{s + 1}s"] = np.where(failed, np.nan, share)
                for sensor, nis in self.track.nis.items():
                    total = np.nansum(nis[window.slice], axis=0)
                    mean = total / self.track.count[sensor][window.slice].sum(axis=0)
                    out[f"{window.name}/nis.{sensor}/mean"] = np.where(failed, np.nan, mean)
        return out

    def profiles(self) -> dict[str, Array]:
        """NEES over time."""
        return {f"nees{'.' + name if name else ''}": v for name, v in self.track.nees.items()}

    def traces(self) -> dict[str, Array]:
        """Error and standard deviation (T, d) of the first run."""
        return {"error": self.track.example[0], "sigma": self.track.example[1]}

    @staticmethod
    def statistics(
        quantities: Sequence[Quantity], model: Model, divergence: Divergence
    ) -> list[Statistic]:
        """Means with between-run intervals, in-band share of time, containment."""
        blocks = [b.name for b in model.space.blocks] if len(model.space.blocks) > 1 else []
        heavy = {"heavy_tail": True, "least": 0.0}
        share = {"least": 0.0, "most": 1.0}
        out = []
        for name in ["nees", *(f"nees.{b}" for b in blocks)]:
            d = model.space.d if name == "nees" else len(model.space.indices([name[5:]]))
            out.append(Statistic(name, "mean", f"{name}/mean", "mean", options=heavy))
            out.append(Statistic(name, "median", f"{name}/mean", "median"))
            out.append(
                Statistic(name, "in-band", f"profile:{name}", "in-band", options={"size": d})
            )
            for s in (1, 2, 3):
                out.append(
                    Statistic(name, f"inside-{s}s", f"{name}/inside-{s}s", "mean", options=share)
                )
        for sensor in model.sensors:
            key = f"nis.{sensor}/mean"
            out.append(Statistic(f"nis.{sensor}", "mean", key, "mean", options=heavy))
        return out
