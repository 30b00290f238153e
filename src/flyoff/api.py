"""The same from Python as from the command line: run an experiment, get its results."""

from __future__ import annotations

import datetime
import hashlib
import json
import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pandas as pd

import flyoff
from flyoff.errors import UserError, nearest
from flyoff.study.config import Experiment, load_experiment
from flyoff.study.execute import run_units, time_cells
from flyoff.study.plan import Block, blocks, cells, units
from flyoff.study.store import Store, canonical, content_key, environment, source_digest
from flyoff.study.table import CellData, build_table, merge_blocks, runs_frame, write_csv

__all__ = ["Study", "load", "run", "select", "write_report"]

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


def load(config: str | Path) -> Experiment:
    """Read and check an experiment file.

    Raises
    ------
    UserError
        Every mistake with file and line.
    """
    return load_experiment(Path(config))


def select(experiment: Experiment, only: Sequence[str]) -> Experiment:
    """Keep the named problems, conditions and estimators; kinds that are not named stay whole.

    Raises
    ------
    UserError
        For a name that the experiment does not have.
    """
    kept: dict[str, Any] = {}
    known: set[str] = set()
    for kind in ("problems", "conditions", "estimators"):
        entries = getattr(experiment, kind)
        known |= {e.name for e in entries}
        chosen = tuple(e for e in entries if e.name in only)
        kept[kind] = chosen or entries
    for name in only:
        if name not in known:
            raise UserError(
                f"--only {name}: no problem, condition or estimator of that name"
                f"{nearest(name, known)}"
            )
    return replace(experiment, **kept)


def run(
    config: str | Path | Experiment,
    out: str | Path | None = None,
    jobs: int | None = None,
    progress: Progress | None = None,
) -> Study:
    """Run an experiment, or go on with one that was stopped, and write its results.

    Parameters
    ----------
    config : path of an experiment file, or a loaded experiment
    out : results folder; ``results/<experiment>`` below the current folder by default
    jobs : worker processes; one a core by default
    progress : called with (what, done, total)

    Raises
    ------
    UserError
        For mistakes in the file and for folders that cannot be written.
    """
    experiment = config if isinstance(config, Experiment) else load(config)
    folder = Path(out) if out is not None else Path("results") / experiment.name
    jobs = jobs or os.cpu_count() or 1
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


def write_report(study: Study, progress: Progress | None = None) -> list[Path]:
    """Write ``tables.md`` and the figures of a study; returns the files."""
    from flyoff.report.figures import write_figures
    from flyoff.report.views import markdown

    tables = study.folder / "tables.md"
    _atomic(tables, markdown(study).encode())
    total = 3 * len({c.cell.condition.name for c in study.cells})
    done = 0

    def advance() -> None:
        nonlocal done
        done += 1
        if progress is not None:
            progress("figures", done, total)

    return [tables, *write_figures(study, study.folder / "figures", advance)]


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
        estimators=[(e.name, e.what, e.only) for e in experiment.estimators],
        late=experiment.late,
    )
    file = store.folder / f"timing-{key}.json"
    try:
        saved = json.loads(file.read_text())
    except (OSError, ValueError):
        if progress is not None:
            progress("timing", 0, 1)
        measured = time_cells(experiment)
        saved = [{"problem": p, "estimator": e, **v} for (p, e), v in measured.items()]
        _atomic(file, json.dumps(saved, indent=1).encode())
        if progress is not None:
            progress("timing", 1, 1)
    return {(row["problem"], row["estimator"]): row for row in saved}


def _manifest(experiment: Experiment, plan: Any) -> dict[str, Any]:
    return {
        "format": 1,
        "flyoff": flyoff.__version__,
        "experiment": experiment.name,
        "purpose": experiment.purpose,
        "seed": experiment.seed,
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
    _atomic(folder / "config.yaml", experiment.source)
    _atomic(folder / "table.csv", write_csv(table))
    _atomic(folder / "manifest.json", (json.dumps(manifest, indent=1) + "\n").encode())


def _atomic(file: Path, content: bytes) -> None:
    part = file.with_name(file.name + ".part")
    try:
        part.write_bytes(content)
        os.replace(part, file)
    except OSError as why:
        raise UserError(f"{file}: cannot be written ({why.strerror})", code=1) from None
