"""A study: an experiment carried out, its blocks in the store, its table, runs and manifest."""

from __future__ import annotations

import datetime
import hashlib
import importlib.metadata
import json
import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from flyoff.errors import UserError
from flyoff.study.config import Experiment
from flyoff.study.custom import digest_of, files_of
from flyoff.study.execute import run_units, time_cells
from flyoff.study.plan import Block, blocks, cells, check_memory, units
from flyoff.study.store import Store, canonical, content_key, environment, source_digest
from flyoff.study.table import CellData, build_table, merge_blocks, runs_frame, write_csv

__all__ = ["Progress", "Study", "carry_out", "write_atomically"]

_TIMED = {"time", "time_low", "time_high", "ratio", "ratio_low", "ratio_high", "to", "batch"}
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class Study:
    """The results of an experiment.

    Attributes
    ----------
    table : DataFrame, one statistic a row
    runs : DataFrame, one run and window a row
    manifest : Series, what was run with what
    folder : where the files are
    repaired : blocks that were damaged and have been computed again
    """

    experiment: Experiment
    folder: Path
    table: pd.DataFrame
    runs: pd.DataFrame
    manifest: pd.Series
    cells: tuple[CellData, ...]
    repaired: int = 0


def carry_out(
    experiment: Experiment, folder: Path, jobs: int, progress: Progress | None = None
) -> Study:
    """Compute what the store has not, reduce, and write table, manifest and the file as run.

    Raises
    ------
    UserError
        For a folder that cannot be written or that another run holds.
    """
    check_memory(experiment, jobs)
    files_of(e.what for e in experiment.estimators)  # clashing names are refused before the work
    store = Store(folder)
    store.create()
    with store.lock():
        store.sweep()
        plan = [(cell, blocks(experiment, cell)) for cell in cells(experiment)]
        repaired = _fill(experiment, store, [b for _, bs in plan for b in bs], jobs, progress)
        costs = _costs(experiment, store, progress)
        data = tuple(_read(store, cell, bs) for cell, bs in plan)
        table = build_table(data, costs)
        manifest = _manifest(experiment, plan)
        _write(folder, experiment, table, manifest)
    return Study(experiment, folder, table, runs_frame(data), pd.Series(manifest), data, repaired)


def _fill(
    experiment: Experiment,
    store: Store,
    wanted: Sequence[Block],
    jobs: int,
    progress: Progress | None,
) -> int:
    """Compute what the store has not; returns how many blocks were damaged."""
    states = {b.key: store.state(b.key) for b in wanted}
    needed = [b for b in wanted if states[b.key] != "good"]
    total = len(states)
    done = total - len({b.key for b in needed})

    def advance(keys: Sequence[str]) -> None:
        nonlocal done
        done += len(keys)
        if progress is not None:
            progress("runs", done, total)

    advance([])
    run_units(units(experiment, needed), store.folder.parent, jobs, advance)
    return sum(s == "damaged" for s in states.values())


def _read(store: Store, cell: Any, parts: Sequence[Block]) -> CellData:
    arrays = []
    for b in parts:
        block = store.read(b.key)
        if block is None:
            raise UserError(
                f"{store.path(b.key)}: vanished or damaged while the run went on; "
                "run the same command again",
                code=1,
            )
        arrays.append(block)
    return merge_blocks(cell, arrays)


def _costs(
    experiment: Experiment, store: Store, progress: Progress | None
) -> dict[tuple[str, str], dict[str, Any]]:
    """The timing pass, from the store if it was made for exactly this."""
    key = content_key(
        purpose="timing",
        seed=experiment.seed,
        problems=[(p.name, p.problem, p.runs) for p in experiment.problems],
        estimators=[(e.name, e.what, e.only, digest_of(e.what)) for e in experiment.estimators],
        late=experiment.late,
    )
    file = store.folder / f"timing-{key}.json"
    wanted = {(c.problem.name, c.estimator.name) for c in cells(experiment)}
    try:
        saved = json.loads(file.read_text())
        whole = {(row["problem"], row["estimator"]) for row in saved} == wanted
        whole = whole and all(set(row) >= _TIMED for row in saved)
    except (OSError, ValueError, TypeError, KeyError):
        whole = False
    if not whole:
        if progress is not None:
            progress("timing", 0, 1)
        measured = time_cells(experiment)
        saved = [{"problem": p, "estimator": e, **v} for (p, e), v in measured.items()]
        write_atomically(file, json.dumps(saved, indent=1).encode())
        if progress is not None:
            progress("timing", 1, 1)
    return {(row["problem"], row["estimator"]): row for row in saved}


def _manifest(experiment: Experiment, plan: Any) -> dict[str, Any]:
    return {
        "format": 1,
        "flyoff": importlib.metadata.version("flyoff"),
        "experiment": experiment.name,
        "purpose": experiment.purpose,
        "seed": experiment.seed,
        "only": list(experiment.only),
        "config": hashlib.sha256(experiment.source).hexdigest(),
        "source": source_digest(),
        "environment": environment(),
        "date": datetime.datetime.now(datetime.UTC).date().isoformat(),
        "problems": {
            p.name: {
                "kind": p.kind,
                "runs": p.runs,
                "recorded": p.problem.recorded,
                "options": canonical(p.problem),
                "windows": canonical(p.windows),
                "mismatches": list(p.problem.mismatches),
                "expected": canonical(p.problem.expected),
            }
            for p in experiment.problems
        },
        "conditions": {c.name: canonical(c.what) for c in experiment.conditions},
        "estimators": {e.name: canonical(e.what) for e in experiment.estimators},
        "user files": {
            f.name: hashlib.sha256(f.read_bytes()).hexdigest()
            for f in files_of(e.what for e in experiment.estimators)
        },
        "blocks": [
            {
                "problem": cell.problem.name,
                "condition": cell.condition.name,
                "estimator": cell.estimator.name,
                "keys": [b.key for b in parts],
            }
            for cell, parts in plan
        ],
    }


def _write(
    folder: Path, experiment: Experiment, table: pd.DataFrame, manifest: dict[str, Any]
) -> None:
    write_atomically(folder / "config.yaml", experiment.source)
    for file in files_of(e.what for e in experiment.estimators):
        # whoever reproduces the table needs the code that made it
        write_atomically(folder / file.name, file.read_bytes())
    write_atomically(folder / "table.csv", write_csv(table))
    write_atomically(folder / "manifest.json", (json.dumps(manifest, indent=1) + "\n").encode())


def write_atomically(file: Path, content: bytes) -> None:
    """Write a file so that it is there whole or not at all."""
    part = file.with_name(file.name + ".part")
    try:
        part.write_bytes(content)
        os.replace(part, file)
    except OSError as why:
        raise UserError(f"{file}: cannot be written ({why.strerror})", code=1) from None
