"""One run opened up: simulated again from its key, step by step.

Nobody trusts a count of lost runs that cannot be opened. The run's recording comes from the same
streams and its filter is the same, so errors repeat to the bit.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy import special

from flyoff.checks.reproduce import reload
from flyoff.errors import UserError, nearest
from flyoff.estimators.contract import Fault
from flyoff.filtering import Step, run_filter
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.scores.accuracy import ErrorTrack
from flyoff.scores.consistency import ConsistencyTrack
from flyoff.scores.contract import Context
from flyoff.study.config import Experiment
from flyoff.study.execute import bind
from flyoff.study.plan import Cell, cells, make_context, make_recording, make_scores

__all__ = ["Inspection", "inspect_run"]

NIS_TAIL = 1e-3  # the bound drawn beside the innovations: exceeded once in a thousand readings


@dataclass(frozen=True)
class Inspection:
    """One run, step by step.

    Attributes
    ----------
    steps : DataFrame, a row a step: time, error and sigma of every component, size of every scored
        error, NEES, NIS and residuals of every sensor
    verdicts : sentences: what happened to the run and when
    nis_bound : by sensor, the 99.9 % bound of NIS for a full reading
    scores : per-run scores by key, as the store holds them
    """

    cell: Cell
    run: int
    steps: pd.DataFrame
    verdicts: list[str]
    nis_bound: dict[str, float]
    scores: dict[str, Any]


class _Trace:
    """Error, sigma and innovations of run 0 of the batch."""

    def __init__(self, context: Context) -> None:
        space = context.model.space
        self.space = space
        self.error = np.full((context.steps, space.d), np.nan)
        self.sigma = np.full((context.steps, space.d), np.nan)
        self.residual = {
            name: np.full((context.steps, s.m), np.nan) for name, s in context.model.sensors.items()
        }

    def observe(self, step: Step) -> None:
        row = step.k - 1
        self.error[row] = self.space.local(step.mean, step.truth)[:, 0]
        if step.cov is not None:
            index = range(self.space.d)
            self.sigma[row] = np.sqrt(step.cov[index, index, 0])
        for name, innovation in step.innovations:
            gone = innovation.missing
            seen = np.ones(len(innovation.residual), bool) if gone is None else ~gone[:, 0]
            self.residual[name][row, seen] = innovation.residual[seen, 0]


def inspect_run(
    folder: Path, problem: str, estimator: str, run: int, condition: str | None = None
) -> Inspection:
    """Simulate one run of a results folder again.

    Raises
    ------
    UserError
        If the folder, problem, estimator, condition or run does not exist.
    """
    experiment, _ = reload(folder)
    cell = _find(experiment, problem, estimator, condition)
    if not 0 <= run < cell.problem.runs:
        raise UserError(f"--run {run}: `{problem}` has runs 0 to {cell.problem.runs - 1}")
    # the run and, beside it, a copy: a batch of one has other bits
    streams = Streams(experiment.seed, "test", problem, [run, run])
    model, recording = make_recording(cell.problem, cell.condition, streams)
    context = make_context(cell.problem, model, recording)
    scores = make_scores(context)
    trace = context.track(_Trace)
    bound = bind(cell.estimator.what, model, streams)
    with np.errstate(all="ignore"):
        outcome = run_filter(bound, model, recording, context.tracks.values(), experiment.late)
        found: dict[str, Any] = {}
        for score in scores:
            found |= {k: v[0] for k, v in score.per_run(outcome).items() if v.ndim == 1}
    sizes = context.track(ErrorTrack).magnitudes()
    consistency = context.track(ConsistencyTrack)
    columns: dict[str, Array] = {"time [s]": recording.times[1:]}
    for j, (name, unit) in enumerate(model.space.components()):
        columns[f"error {name} [{unit}]"] = trace.error[:, j]
        columns[f"sigma {name} [{unit}]"] = trace.sigma[:, j]
    for q in context.quantities:
        columns[f"size {q.name} [{q.unit}]"] = sizes[q.name][:, 0]
    columns["nees/d"] = consistency.nees[""][:, 0]
    bounds = {}
    for name, sensor in model.sensors.items():
        columns[f"nis {name}"] = consistency.nis[name][:, 0]
        for j, (part, unit) in enumerate(sensor.space.components()):
            columns[f"innovation {name}.{part} [{unit}]"] = trace.residual[name][:, j]
        bounds[name] = float(special.chdtri(sensor.m, NIS_TAIL))
    verdicts = _verdicts(found, recording.dt)
    return Inspection(cell, run, pd.DataFrame(columns), verdicts, bounds, found)


def _find(experiment: Experiment, problem: str, estimator: str, condition: str | None) -> Cell:
    known = cells(experiment)
    names = {c.problem.name for c in known}
    if problem not in names:
        raise UserError(f"--problem {problem}: not in the experiment{nearest(problem, names)}")
    names = {c.estimator.name for c in known if c.problem.name == problem}
    if estimator not in names:
        raise UserError(f"--estimator {estimator}: not on `{problem}`{nearest(estimator, names)}")
    fits = [c for c in known if (c.problem.name, c.estimator.name) == (problem, estimator)]
    if condition is None:
        return fits[0]
    for c in fits:
        if c.condition.name == condition:
            return c
    names = {c.condition.name for c in fits}
    raise UserError(f"--condition {condition}: not on `{problem}`{nearest(condition, names)}")


def _verdicts(found: dict[str, Any], dt: float) -> list[str]:
    if found["all/runs/failed"]:
        said = str(found["all/runs/fault-message"])
        reason = Fault(int(found["all/runs/fault"])).text + (f": {said}" if said else "")
        return [f"failed at {found['all/runs/fault-step'] * dt:g} s: {reason}"]
    out = []
    if found.get("all/runs/diverged"):
        out.append("diverged: beyond the bound for the hold, after it had converged")
    if found.get("all/runs/never-converged"):
        out.append("never converged within the bound in time")
    elif found.get("all/runs/settled-step", -1) > 0:
        out.append(f"first settled within the bound at {found['all/runs/settled-step'] * dt:g} s")
    if found.get("all/runs/overconfident"):
        out.append("overconfident: NEES beyond its 1 - 1e-6 quantile for the hold, track kept")
    return out or ["nothing was counted against this run"]
