"""The only time loop: a filter on a recording, observed step by step.

Late readings are handled the same way for every candidate: `apply` uses them on arrival as if they
were current, `drop` leaves them out, `replay` goes back to the belief at the time stamp, corrects
it and repeats what came after. A run that fails is marked with the step and the reason and plays no
further part; the others go on.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any, Literal, Protocol

import numpy as np

from flyoff.estimators.contract import (
    Fault,
    Filter,
    Gaussian,
    Innovation,
    combine_faults,
    moments,
)
from flyoff.models.model import Model
from flyoff.numerics import linalg
from flyoff.numerics.spaces import Array
from flyoff.recordings import Recording

__all__ = ["Late", "Observer", "Outcome", "Step", "arrival_table", "run_filter"]

Late = Literal["apply", "drop", "replay"]


@dataclass(frozen=True)
class Step:
    """What an observer sees after all updates of a step.

    Attributes
    ----------
    k : int, 1 to T
    truth, mean : (n, M)
    cov : (d, d, M) or None where the filter keeps no covariance
    factor : (d, d, M) or None, lower factor of the covariance, NaN where it has none
    ess : (M,) or None, effective sample size of a weighted posterior
    alive : (M,), runs that have not failed
    innovations : pairs of sensor name and `Innovation`
    """

    k: int
    truth: Array
    mean: Array
    cov: Array | None
    factor: Array | None
    ess: Array | None
    alive: Array
    innovations: tuple[tuple[str, Innovation], ...]


class Observer(Protocol):
    """Something that scores step by step."""

    def observe(self, step: Step) -> None:
        """Take in one step."""
        ...


@dataclass(frozen=True)
class Outcome:
    """Which runs failed: fault code (M,), step (M,) where it was first seen, 0 if it was not.

    `messages` (M,) holds what a failed run said, or is empty.
    """

    fault: Array
    step: Array
    messages: Array | None = None


@dataclass
class _Past:
    """One remembered step: the belief before its updates, its input, its readings."""

    before: Any
    u: Array
    readings: list[tuple[int, str, Array]] = field(default_factory=list)


def run_filter(
    bound: Filter,
    model: Model,
    recording: Recording,
    observers: Iterable[Observer] = (),
    late: Late = "replay",
) -> Outcome:
    """Run a bound filter over a recording of at least two runs.

    Parameters
    ----------
    bound : Filter, bound to as many runs as the recording holds
    observers : each sees every `Step`
    late : how readings that arrive after their time stamp are used

    Raises
    ------
    ValueError
        For a batch of one run: pad it to two (bits of reductions differ at one).
    """
    runs = len(recording.runs)
    if runs < 2:
        raise ValueError("a batch of one run must be padded to two")
    watchers = list(observers)
    arrivals, depth = arrival_table(recording, model, late)
    fault = np.zeros(runs, np.uint8)
    fault_step = np.zeros(runs, np.int64)
    dt = recording.dt
    past: dict[int, _Past] = {}
    with np.errstate(all="ignore"):
        belief = bound.start(recording.prior)
        for k in range(1, recording.steps + 1):
            u = recording.inputs[k - 1]
            belief = bound.predict(belief, u, dt)
            due = arrivals.get(k, [])
            seen: list[tuple[str, Innovation]] = []
            if depth:
                past[k] = _Past(belief, u)
                past.pop(k - depth - 1, None)
                belief = _with_replay(bound, model, past, k, due, dt, belief, seen)
            else:
                for _, _, name, z in due:
                    belief, innovation = bound.update(belief, model.sensors[name], z, u)
                    seen.append((name, innovation))
            posterior = bound.posterior(belief)
            mean, cov, ess = moments(model.space, posterior)
            low, sound = (None, None) if cov is None else linalg.cholesky(cov)
            lost = ~np.all(np.isfinite(mean), axis=0)
            new = combine_faults(belief.fault, lost, Fault.NON_FINITE)
            if sound is not None and isinstance(posterior, Gaussian):
                new = combine_faults(new, ~sound, Fault.NOT_POSITIVE_DEFINITE)
            fresh = (new != 0) & (fault == 0)
            fault = np.where(fresh, new, fault)
            fault_step = np.where(fresh, k, fault_step)
            step = Step(k, recording.truth[k], mean, cov, low, ess, fault == 0, tuple(seen))
            for watcher in watchers:
                watcher.observe(step)
    said = getattr(belief, "messages", ("",) * runs)
    return Outcome(fault, fault_step, np.array(said, dtype="U200"))


def arrival_table(
    recording: Recording, model: Model, late: Late
) -> tuple[dict[int, list[tuple[int, int, str, Array]]], int]:
    """Readings by arrival step, in order of stamp and sensor; and how far back a replay reaches."""
    order = {name: i for i, name in enumerate(model.sensors)}
    table: dict[int, list[tuple[int, int, str, Array]]] = {}
    depth = 0
    for r in recording.readings:
        for stamp, arrival, z in zip(r.steps, r.arrivals, r.values, strict=True):
            if late == "drop" and arrival > stamp:
                continue
            depth = max(depth, int(arrival - stamp))
            table.setdefault(int(arrival), []).append((int(stamp), order[r.sensor], r.sensor, z))
    for due in table.values():
        due.sort(key=lambda entry: entry[:2])
    return table, depth if late == "replay" else 0


def _with_replay(
    bound: Filter,
    model: Model,
    past: dict[int, _Past],
    k: int,
    due: list[tuple[int, int, str, Array]],
    dt: float,
    belief: Any,
    seen: list[tuple[str, Innovation]],
) -> Any:
    """Insert the readings due at their stamps and repeat the steps from the earliest one."""
    if not due:
        return belief
    fresh = set()
    for stamp, order, name, z in due:
        past[stamp].readings.append((order, name, z))
        past[stamp].readings.sort(key=lambda entry: entry[0])
        fresh.add((stamp, name))
    first = min(stamp for stamp, *_ in due)
    belief = past[first].before
    for j in range(first, k + 1):
        if j > first:
            belief = bound.predict(belief, past[j].u, dt)
            past[j].before = belief
        for _, name, z in past[j].readings:
            belief, innovation = bound.update(belief, model.sensors[name], z, past[j].u)
            if (j, name) in fresh:
                seen.append((name, innovation))
    return belief
