"""The same from Python as from the command line: check a file, run an experiment."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from flyoff.study.config import Experiment, load_experiment, select
from flyoff.study.custom import load_user_file

if TYPE_CHECKING:
    from flyoff.study.run import Progress, Study

__all__ = ["load", "run", "select"]


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
    figures : whether to draw them
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

        total = 3 * len({c.cell.condition.name for c in study.cells})
        for done, _ in enumerate(write_figures(study, folder / "figures"), 1):
            if progress is not None:
                progress("figures", done, total)
    return study
