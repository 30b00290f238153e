"""The same from Python as from the command line: check a file, run an experiment."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from flyoff.errors import UserError
from flyoff.registry import lookup
from flyoff.study.config import Experiment, load_experiment, select
from flyoff.study.custom import load_user_file

if TYPE_CHECKING:
    from flyoff.checks.conformance import Verdict
    from flyoff.checks.crosscheck import Comparison
    from flyoff.checks.inspection import Inspection
    from flyoff.checks.reproduce import Reproduction
    from flyoff.study.run import Progress, Study

__all__ = ["crosscheck", "inspect", "load", "reproduce", "run", "select", "vet"]


def load(config: str | Path, with_files: Sequence[str | Path] = ()) -> Experiment:
    """Read and check an experiment file; `with_files` hold the user's own estimators.

    Raises
    ------
    UserError
        Every mistake with file and line.
    """
    for file in with_files:
        load_user_file(Path(file))
    return load_experiment(Path(config))


def reproduce(
    folder: str | Path, jobs: int | None = None, progress: Progress | None = None
) -> Reproduction:
    """Run a results folder's experiment again in a scratch folder and compare cell by cell."""
    from flyoff.checks.reproduce import reproduce as repeat

    return repeat(Path(folder), jobs or os.cpu_count() or 1, progress)


def crosscheck(
    config: str | Path, runs: int | None = None, with_files: Sequence[str | Path] = ()
) -> list[Comparison]:
    """Compare an experiment's estimators with a reference library on the same recordings."""
    from flyoff.checks.crosscheck import crosscheck as compare

    return compare(load(config, with_files), runs)


def vet(what: str | Path) -> dict[str, list[Verdict]]:
    """Check the promises of a family, or of every estimator in a file, in default options.

    Raises
    ------
    UserError
        If there is no such family or file, or an estimator has no default options.
    """
    from flyoff.checks.conformance import vet as check
    from flyoff.registry import discover

    if str(what).endswith(".py"):
        before = set(discover("estimator"))
        load_user_file(Path(what))
        found = {k: c for k, c in discover("estimator").items() if k not in before}
        if not found:
            raise UserError(f"{what}: registers no estimator")
    else:
        found = {str(what): lookup("estimator", str(what))}
    out = {}
    for name, cls in found.items():
        try:
            estimator = cls()
        except Exception as why:
            first = str(why).splitlines()[0]
            raise UserError(f"{name}: has no default options ({first})") from None
        out[name] = check(estimator)
    return out


def inspect(
    folder: str | Path, problem: str, estimator: str, run: int, condition: str | None = None
) -> tuple[Inspection, Path, Path]:
    """Simulate one run again; returns it with the CSV and the figure written for it."""
    from flyoff.checks.inspection import inspect_run
    from flyoff.report.figures import write_inspection
    from flyoff.study.run import write_atomically

    found = inspect_run(Path(folder), problem, estimator, run, condition)
    where = Path(folder) / "inspect"
    name = f"{problem}-{found.cell.condition.name}-{estimator}-run{run}"
    table, figure = where / f"{name}.csv", where / f"{name}.png"
    try:
        where.mkdir(parents=True, exist_ok=True)
    except OSError as why:
        raise UserError(f"{where}: cannot be written ({why.strerror})", code=1) from None
    text = found.steps.to_csv(index=False, float_format="%.9g", lineterminator="\n")
    write_atomically(table, text.encode())
    write_inspection(found, figure)
    return found, table, figure


def run(
    config: str | Path | Experiment,
    out: str | Path | None = None,
    jobs: int | None = None,
    progress: Progress | None = None,
    figures: bool = True,
    with_files: Sequence[str | Path] = (),
) -> Study:
    """Run an experiment, or go on with one that was stopped, and write its results.

    Parameters
    ----------
    config : path of an experiment file, or a loaded experiment
    out : results folder; ``results/<experiment>`` below the current folder by default
    jobs : worker processes; one a core by default
    progress : called with (what, done, total)
    figures : whether to draw them, and the page that shows them
    with_files : Python files with the user's own estimators

    Returns
    -------
    Study, whose `table`, `runs` and `manifest` are pandas objects

    Raises
    ------
    UserError
        For mistakes in the file and for folders that cannot be written.
    """
    # loaded late: a mistake in a file is answered without tables and figures
    from flyoff.report.views import markdown
    from flyoff.study.run import carry_out, write_atomically

    experiment = config if isinstance(config, Experiment) else load(config, with_files)
    folder = Path(out) if out is not None else Path("results") / experiment.name
    study = carry_out(experiment, folder, jobs or os.cpu_count() or 1, progress)
    write_atomically(folder / "tables.md", markdown(study).encode())
    if figures:
        from flyoff.report.figures import write_figures
        from flyoff.report.page import page

        if (folder / "figures").exists() and not (folder / "figures").is_dir():
            raise UserError(f"{folder / 'figures'}: is in the way, not a folder", code=1)
        total = 3 * len({c.cell.condition.name for c in study.cells})
        drawn = []
        for file in write_figures(study, folder / "figures"):
            drawn.append(file)
            if progress is not None:
                progress("figures", len(drawn), total)
        write_atomically(folder / "report.html", page(study, drawn).encode())
    return study
