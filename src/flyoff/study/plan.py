"""The plan: which blocks an experiment needs, and what they will cost, before anything is spent."""

from __future__ import annotations

import math
import os
import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from flyoff.errors import UserError
from flyoff.filtering import run_filter
from flyoff.models.model import Model
from flyoff.numerics.streams import Streams
from flyoff.problems.conditions import apply_to_model, apply_to_recording, initial_error_scale
from flyoff.recordings import Recording
from flyoff.registry import discover
from flyoff.scores.contract import Context, Window, window_steps
from flyoff.study.config import Entry, Experiment, ProblemEntry
from flyoff.study.custom import digest_of
from flyoff.study.store import CHUNK, content_key

__all__ = [
    "Block",
    "Cell",
    "CellEstimate",
    "Unit",
    "blocks",
    "cells",
    "check_memory",
    "estimate",
    "make_context",
    "make_recording",
    "make_scores",
    "megabytes",
    "units",
]

_CHUNKS_A_BATCH = 8


@dataclass(frozen=True)
class Cell:
    """One estimator on one problem under one condition."""

    problem: ProblemEntry
    condition: Entry
    estimator: Entry

    @property
    def steps(self) -> int:
        """Prediction steps of one run."""
        return round(self.problem.problem.duration / self.problem.problem.step)


@dataclass(frozen=True)
class Block:
    """One chunk of runs of one cell."""

    cell: Cell
    first: int
    last: int
    key: str


@dataclass(frozen=True)
class Unit:
    """Work that shares recordings: one problem, one condition, one batch of runs."""

    seed: int
    late: Any
    problem: ProblemEntry
    condition: Entry
    blocks: tuple[Block, ...]

    @property
    def runs(self) -> tuple[int, int]:
        """First and last run (exclusive)."""
        return min(b.first for b in self.blocks), max(b.last for b in self.blocks)


def cells(experiment: Experiment) -> list[Cell]:
    """All cells, in the order of the file."""
    return [
        Cell(p, c, e)
        for p in experiment.problems
        for c in experiment.conditions
        if c.applies(p.name)
        for e in experiment.estimators
        if e.applies(p.name)
    ]


def blocks(experiment: Experiment, cell: Cell) -> list[Block]:
    """The chunks of a cell."""
    out = []
    for first in range(0, cell.problem.runs, CHUNK):
        last = min(first + CHUNK, cell.problem.runs)
        key = content_key(
            problem=cell.problem.problem,
            label=cell.problem.name,
            condition=cell.condition.what,
            estimator=cell.estimator.what,
            windows=cell.problem.windows,
            divergence=cell.problem.divergence,
            late=experiment.late,
            runs=[first, last],
            seed=experiment.seed,
            purpose="test",
            precision="double",
            user_file=digest_of(cell.estimator.what),
        )
        out.append(Block(cell, first, last, key))
    return out


def units(experiment: Experiment, needed: Sequence[Block]) -> list[Unit]:
    """Group blocks that share a recording, the longest first."""
    groups: dict[tuple[str, str, int], list[Block]] = {}
    for b in needed:
        batch = b.first // (CHUNK * _CHUNKS_A_BATCH)
        key = (b.cell.problem.name, b.cell.condition.name, batch)
        groups.setdefault(key, []).append(b)
    out = [
        Unit(
            experiment.seed,
            experiment.late,
            group[0].cell.problem,
            group[0].cell.condition,
            tuple(group),
        )
        for group in groups.values()
    ]
    return sorted(out, key=lambda u: -sum(_weight(b) for b in u.blocks))


def _weight(block: Block) -> float:
    """Rough share of the work, for the order only: steps cost about as much as 200 runs' worth."""
    cell = block.cell
    particles = getattr(cell.estimator.what, "particles", 1)
    size = cell.problem.problem.filter_model().space.d
    return cell.steps * (200 + (block.last - block.first) * particles / 3) * size


def make_recording(
    problem: ProblemEntry, condition: Entry, streams: Streams
) -> tuple[Model, Recording]:
    """Filter model and recording of a batch under a condition."""
    model = apply_to_model(condition.what, problem.problem.filter_model())
    recording = problem.problem.record(streams, initial_error_scale(condition.what))
    return model, apply_to_recording(condition.what, recording, streams)


def make_context(problem: ProblemEntry, model: Model, recording: Recording) -> Context:
    """What the scores of a batch may know."""
    dt, last = recording.dt, recording.steps
    windows = []
    for name, start, end in problem.windows:
        first, final = window_steps(start, end, dt)
        windows.append(Window(name, first, min(last, final)))
    p = problem.problem
    return Context(
        model,
        p.quantities,
        tuple(windows),
        problem.divergence,
        recording,
        p.alignment,
        p.truth_covariance,
    )


def make_scores(context: Context) -> list[Any]:
    """One of every registered score for a batch; they ask the context for their tracks."""
    return [cls(context) for cls in discover("score").values()]


def megabytes(cell: Cell) -> float:
    """Arrays that evaluating a cell holds at once: recording, error tracks, particles [MB]."""
    problem = cell.problem.problem
    model = problem.filter_model()
    runs = min(cell.problem.runs, CHUNK * _CHUNKS_A_BATCH)
    batch = max(2, min(cell.estimator.what.batch(model), runs))
    rates = [s.space.n * min(s.rate * problem.step, 1.0) for s in model.sensors.values()]
    recording = cell.steps * runs * (model.space.n + model.inputs.n + 2 * sum(rates))
    blocks = 1 + len(model.space.blocks)
    tracks = cell.steps * batch * (len(problem.quantities) + 2.5 * blocks + 2 * len(rates))
    particles = getattr(cell.estimator.what, "particles", 0) * batch * 6 * model.space.n
    return 8e-6 * (recording + 2 * tracks + particles)


def check_memory(experiment: Experiment, jobs: int) -> None:
    """Refuse what would not fit, before anything is allocated.

    Raises
    ------
    UserError
        Naming the largest cell, what it needs and what the machine has.
    """
    have = _machine_megabytes()
    for cell in cells(experiment):
        need = megabytes(cell) * max(1, jobs)
        if need > 0.8 * have:
            raise UserError(
                f"{experiment.file}: `{cell.estimator.name}` on `{cell.problem.name}` needs about "
                f"{need / 1000:.0f} GB in {jobs} process(es), the machine has {have / 1000:.0f} "
                "GB: take fewer steps, runs or particles, or fewer --jobs"
            )


def _machine_megabytes() -> float:
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e6
    except (AttributeError, ValueError, OSError):  # not POSIX
        return 16_000.0


@dataclass(frozen=True)
class CellEstimate:
    """Cost of a cell before it is run."""

    cell: Cell
    seconds: float
    megabytes: float


def estimate(experiment: Experiment, probe_steps: int = 12) -> list[CellEstimate]:
    """Measure a few steps of every estimator on every problem and scale up.

    One process; the number of processes divides the sum.
    """
    out = []
    for p in experiment.problems:
        runs = min(p.runs, CHUNK * _CHUNKS_A_BATCH)
        streams = Streams(experiment.seed, "timing", p.name, range(max(2, runs)))
        model, recording = make_recording(p, Entry("", ()), streams)
        recording = recording.stretch(recording.steps // 2, probe_steps)
        for cell in cells(experiment):
            if cell.problem is not p:
                continue
            seconds, batch = _probe(cell, model, recording, streams)
            per_step = seconds / recording.steps
            total = per_step * cell.steps * math.ceil(p.runs / batch)
            out.append(CellEstimate(cell, total, megabytes(cell)))
    return out


def _probe(cell: Cell, model: Model, recording: Recording, streams: Streams) -> tuple[float, int]:
    batch = max(2, min(cell.estimator.what.batch(model), len(recording.runs)))
    part = slice(0, batch)
    few, own = recording.select(part), streams.select(part)
    context = make_context(cell.problem, model, few)
    best = math.inf
    for _ in range(2):
        make_scores(context)
        start = time.perf_counter()
        run_filter(cell.estimator.what.bind(model, own), model, few, context.tracks.values())
        best = min(best, time.perf_counter() - start)
    return best, batch
