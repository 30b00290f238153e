"""Execution of a plan: local processes, one thread of linear algebra each."""

from __future__ import annotations

import concurrent.futures as futures
import contextlib
import multiprocessing
import os
import signal
import statistics
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from flyoff.errors import UserError
from flyoff.estimators.guarded import Guarded
from flyoff.filtering import Outcome, arrival_table, run_filter
from flyoff.models.model import Model
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.recordings import Recording
from flyoff.study.config import Entry, Experiment, ProblemEntry
from flyoff.study.custom import files_of, is_custom, load_user_file
from flyoff.study.plan import Block, Unit, cells, make_context, make_recording, make_scores
from flyoff.study.store import Store

__all__ = ["evaluate", "run_units", "time_cells"]

_THREADS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


def evaluate(unit: Unit, folder: str) -> list[str]:
    """Run a unit and write its blocks; returns their keys. Runs in a worker process."""
    store = Store(Path(folder))
    first, last = unit.runs
    streams = Streams(unit.seed, "test", unit.problem.name, range(first, last))
    model, recording = make_recording(unit.problem, unit.condition, streams)
    done = []
    by_estimator: dict[str, list[Block]] = {}
    for block in unit.blocks:
        by_estimator.setdefault(block.cell.estimator.name, []).append(block)
    for group in by_estimator.values():
        estimator = group[0].cell.estimator.what
        size = max(2, estimator.batch(model))
        for block in group:
            # a block is the unit of storage; consecutive ones are evaluated together
            if block.key in done:
                continue
            together = _consecutive(group, block, size)
            lo, hi = together[0].first - first, together[-1].last - first
            arrays = _batches(estimator, unit, model, recording, streams, lo, hi, size)
            for b in together:
                part = slice(b.first - first - lo, b.last - first - lo)
                store.write(b.key, _block_arrays(arrays, part, with_trace=b.first == 0))
                done.append(b.key)
    return done


def _consecutive(group: list[Block], start: Block, size: int) -> list[Block]:
    out = [start]
    for b in group[group.index(start) + 1 :]:
        if b.first != out[-1].last or b.last - start.first > max(size, b.last - b.first):
            break
        out.append(b)
    return out


def _batches(
    estimator: Any,
    unit: Unit,
    model: Model,
    recording: Recording,
    streams: Streams,
    lo: int,
    hi: int,
    size: int,
) -> dict[str, Array]:
    """Evaluate runs lo to hi in batches and join: per-run arrays (M, ...), profiles (T, M)."""
    parts: list[dict[str, Array]] = []
    for at in range(lo, hi, size):
        part = slice(at, min(at + size, hi))
        few, own = recording.select(part), streams.select(part)
        alone = len(own) == 1
        if alone:  # reductions over one run have other bits
            few, own = few.padded(), own.padded()
        context = make_context(unit.problem, model, few)
        scores = make_scores(context)
        bound = bind(estimator, model, own)
        outcome = run_filter(bound, model, few, context.tracks.values(), unit.late)
        arrays = _collect(scores, outcome)
        if alone:
            arrays = {k: v[:, :1] if k.startswith("profile:") else v[:1] for k, v in arrays.items()}
        parts.append(arrays)
    joined = {}
    for key, first in parts[0].items():
        if key.startswith("trace:"):
            joined[key] = first
        else:
            axis = 1 if key.startswith("profile:") else 0
            joined[key] = np.concatenate([p[key] for p in parts], axis=axis)
    return joined


def bind(estimator: Any, model: Model, streams: Streams) -> Any:
    """A filter for the runs of `streams`; one from outside the package is guarded."""
    if not is_custom(estimator):
        return estimator.bind(model, streams)
    try:
        inner = estimator.bind(model, streams)
    except Exception as why:
        raise UserError(
            f"estimator `{type(estimator).__name__}` cannot be bound: {type(why).__name__}: {why}",
            code=1,
        ) from None
    return Guarded(inner, model, len(streams))


def _collect(scores: list[Any], outcome: Outcome) -> dict[str, Array]:
    out: dict[str, Array] = {}
    with np.errstate(all="ignore"):
        for score in scores:
            out |= score.per_run(outcome)
            out |= {f"profile:{name}": v for name, v in score.profiles().items()}
            out |= {f"trace:{name}": v for name, v in score.traces().items()}
    return out


def _block_arrays(arrays: dict[str, Array], part: slice, with_trace: bool) -> dict[str, Array]:
    """What is stored of a chunk: per-run rows, sums over its runs of profiles, one trace."""
    out = {}
    for key, value in arrays.items():
        if key.startswith("trace:"):
            if with_trace:
                out[key] = value
        elif key.startswith("profile:"):
            rows = value[:, part]
            out[f"{key}/sum"] = np.nansum(np.ascontiguousarray(rows), axis=1)
            out[f"{key}/count"] = np.isfinite(rows).sum(axis=1)
        else:
            out[key] = value[part]
    return out


# -- processes -------------------------------------------------------------------------------------


def _start_worker(files: Sequence[Path] = ()) -> None:
    """Workers leave Ctrl-C to the parent and end with it, even if it is killed."""
    for file in files:
        load_user_file(file)
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()

    def watch() -> None:
        if parent is not None:
            parent.join()
            os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


@contextlib.contextmanager
def _ctrl_c_ignored() -> Iterator[None]:
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    old = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, old)


def run_units(
    work: Sequence[Unit], folder: Path, jobs: int, advance: Callable[[Sequence[str]], None]
) -> None:
    """Evaluate units, in this process or in `jobs` others; `advance` hears of every written block.

    Bits do not depend on `jobs` nor on the order of completion.
    """
    if jobs <= 1 or len(work) <= 1:
        for unit in work:
            advance(evaluate(unit, str(folder)))
        return
    for name in _THREADS:
        os.environ.setdefault(name, "1")
    spawn = multiprocessing.get_context("spawn")
    pool = futures.ProcessPoolExecutor(
        min(jobs, len(work)),
        mp_context=spawn,
        initializer=_start_worker,
        initargs=(files_of(b.cell.estimator.what for unit in work for b in unit.blocks),),
    )
    try:
        with _ctrl_c_ignored():  # workers are born deaf to it: the parent decides
            pending = [pool.submit(evaluate, unit, str(folder)) for unit in work]
        for future in futures.as_completed(pending):
            advance(future.result())
    except BaseException:
        for process in list((pool._processes or {}).values()):
            process.terminate()
        pool.shutdown(wait=False, cancel_futures=True)
        raise
    pool.shutdown()


# -- the timing pass -------------------------------------------------------------------------------

_ROUNDS = 7
_TIMED_SECONDS = 0.06  # of one estimator in one round


def time_cells(experiment: Experiment) -> dict[tuple[str, str], dict[str, Any]]:
    """Amortised time a run and step of every estimator on every problem, interleaved.

    All candidates of a problem are timed in turn in the same process, round after round, so that a
    slow moment of the machine falls on all of them; the ratio is taken within a round. Only the
    filter is timed, not simulation nor scoring.
    """
    out: dict[tuple[str, str], dict[str, Any]] = {}
    for problem in experiment.problems:
        seen: dict[str, Entry] = {}
        for cell in cells(experiment):
            if cell.problem is problem:
                seen.setdefault(cell.estimator.name, cell.estimator)
        for name, figures in _time_problem(experiment.seed, problem, list(seen.values())):
            out[problem.name, name] = figures
    return out


def _time_problem(
    seed: int, problem: ProblemEntry, estimators: list[Entry]
) -> Iterator[tuple[str, dict[str, Any]]]:
    runs = max(2, min(problem.runs, 512))
    streams = Streams(seed, "timing", problem.name, range(runs))
    model, recording = make_recording(problem, Entry("", ()), streams)
    middle = recording.stretch(recording.steps // 2, 60)
    prepared = []
    for e in estimators:
        batch = max(2, min(e.what.batch(model), runs))
        part = slice(0, batch)
        few, own = middle.select(part), streams.select(part)
        bound = bind(e.what, model, own)
        probe = _timed(bound, model, few.stretch(0, 6))
        steps = int(np.clip(_TIMED_SECONDS / max(probe / 6, 1e-9), 6, middle.steps))
        prepared.append((e, bound, few.stretch(0, steps), batch))
    rounds: dict[str, list[float]] = {e.name: [] for e in estimators}
    for _ in range(_ROUNDS):
        for e, bound, few, batch in prepared:
            rounds[e.name].append(_timed(bound, model, few) / (few.steps * batch))
    first = rounds[estimators[0].name]
    rates = recording.readings_per_step()
    for e, bound, _, batch in prepared:
        times = rounds[e.name]
        ratios = [t / f for t, f in zip(times, first, strict=True)]
        operations = bound.operations(rates)
        yield (
            e.name,
            {
                "time": statistics.median(times),
                "time_low": min(times),
                "time_high": max(times),
                "ratio": statistics.median(ratios),
                "ratio_low": min(ratios),
                "ratio_high": max(ratios),
                "to": estimators[0].name,
                "batch": batch,
                "operations": operations.total,
            },
        )


def _timed(bound: Any, model: Model, recording: Recording) -> float:
    """Seconds of predictions and updates alone."""
    due, _ = arrival_table(recording, model, "apply")
    dt = recording.dt
    with np.errstate(all="ignore"):
        belief = bound.start(recording.prior)
        start = time.perf_counter()
        for k in range(1, recording.steps + 1):
            u = recording.inputs[k - 1]
            belief = bound.predict(belief, u, dt)
            for _, _, name, z in due.get(k, ()):
                belief, _ = bound.update(belief, model.sensors[name], z, u)
        return time.perf_counter() - start
