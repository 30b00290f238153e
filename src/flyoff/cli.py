"""Command line: parse, call, print. Everything else is in `flyoff.api`."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

import flyoff
from flyoff.errors import UserError

if TYPE_CHECKING:
    from flyoff.study.config import Experiment
    from flyoff.study.run import Study

__all__ = ["app", "main"]

app = typer.Typer(
    name="flyoff",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Competitive trials between nonlinear state estimators.",
)


_INTERRUPTED = 130  # what the parser makes of Ctrl-C


def main() -> None:
    """Entry point: mistakes as one line each, exit 2 (usage) or 1 (failure), no traceback."""
    try:
        code = app(standalone_mode=False)
        if code == _INTERRUPTED:
            raise KeyboardInterrupt
        sys.exit(code if isinstance(code, int) else 0)
    except UserError as why:
        for line in why.lines:
            print(line, file=sys.stderr)
        sys.exit(why.code)
    except KeyboardInterrupt:
        print(
            "stopped; what is finished is stored: the same command goes on from there",
            file=sys.stderr,
        )
        sys.exit(1)
    except BrokenPipeError:
        sys.exit(1)
    except Exception as why:
        code = getattr(why, "exit_code", None)
        if code is None:
            raise
        show = getattr(why, "show", None)
        if show is not None:
            show()
        sys.exit(code)


@app.callback(invoke_without_command=True)
def _top(
    version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False,
) -> None:
    if version:
        print(f"flyoff {flyoff.__version__}")
        raise typer.Exit


@app.command()
def run(
    config: Annotated[Path, typer.Argument(help="Experiment file (YAML).")],
    out: Annotated[
        Path | None, typer.Option(help="Results folder; results/<experiment> if not given.")
    ] = None,
    jobs: Annotated[
        int | None, typer.Option(min=1, max=256, help="Worker processes; one a core if not given.")
    ] = None,
    only: Annotated[
        list[str] | None,
        typer.Option(help="Keep only this problem, condition or estimator; may be repeated."),
    ] = None,
    with_file: Annotated[
        list[Path] | None,
        typer.Option("--with", help="A Python file with your estimators; may be repeated."),
    ] = None,
    plan: Annotated[
        bool, typer.Option("--plan", help="Show cells, steps, memory and time; run nothing.")
    ] = False,
) -> None:
    """Run an experiment, or go on with one that was stopped."""
    from flyoff import api

    experiment = api.select(api.load(config, with_file or ()), only or [])
    if plan:
        _print_plan(experiment, jobs)
        return
    study = _run_with_progress(experiment, out, jobs)
    _print_study(study)


def _console(stderr: bool = False) -> Any:
    from rich.console import Console

    console = Console(stderr=stderr, highlight=False, markup=False)
    if not console.is_terminal:
        # a pipe has no width: do not squeeze tables into 80 columns
        console.width = 200
    return console


def _run_with_progress(experiment: Experiment, out: Path | None, jobs: int | None) -> Study:
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    from flyoff import api

    console = _console(stderr=True)
    labels = {"runs": "blocks of runs", "timing": "timing pass", "figures": "figures"}
    with Progress(
        TextColumn("{task.description:15}"),
        BarColumn(bar_width=32),
        TextColumn("{task.completed:.0f}/{task.total:.0f}"),
        TimeElapsedColumn(),
        console=console,
        disable=not console.is_terminal,
    ) as progress:
        tasks: dict[str, Any] = {}

        def advance(what: str, done: int, total: int) -> None:
            if what not in tasks:
                tasks[what] = progress.add_task(labels[what], total=total)
            progress.update(tasks[what], completed=done, total=total)

        return api.run(experiment, out=out, jobs=jobs, progress=advance)


def _print_study(study: Study) -> None:
    from rich.table import Table

    from flyoff.report.views import CAUTIONS, views

    console = _console()
    for view in views(study):
        table = Table(title=view.title, title_justify="left", title_style="bold", box=_box())
        for i, head in enumerate(view.heads):
            text = head in ("window", "estimator")
            table.add_column(head, justify="left" if text else "right", no_wrap=i < 2 and text)
        for i, row in enumerate(view.rows, 1):
            table.add_row(*row, end_section=i in view.breaks)
        console.print(table)
        for note in view.notes:
            console.print(f"  {note}", style="dim")
        console.print()
    if study.repaired:
        console.print(f"{study.repaired} damaged block(s) were found and computed again")
    for caution in CAUTIONS:
        console.print(f"! {caution}")
    console.print(f"\nresults in {study.folder}: table.csv, tables.md, manifest.json, figures/")


def _box() -> Any:
    from rich import box

    return box.SIMPLE_HEAD


def _print_plan(experiment: Experiment, jobs: int | None) -> None:
    import os

    from rich.table import Table

    from flyoff.study.plan import estimate

    console = _console()
    table = Table(title=f"Plan of {experiment.name}", title_justify="left", box=_box())
    for head in ("problem", "condition", "estimator"):
        table.add_column(head)
    for head in ("runs", "steps a run", "memory [MB]", "time [s]"):
        table.add_column(head, justify="right")
    estimates = estimate(experiment)
    for e in estimates:
        c = e.cell
        table.add_row(
            c.problem.name, c.condition.name, c.estimator.name, str(c.problem.runs),
            str(c.steps), f"{e.megabytes:.0f}", f"{e.seconds:.1f}",
        )  # fmt: skip
    console.print(table)
    workers = jobs or os.cpu_count() or 1
    seconds = sum(e.seconds for e in estimates)
    steps = sum(e.cell.steps * e.cell.problem.runs for e in estimates)
    largest = max(e.megabytes for e in estimates)
    console.print(
        f"{len(estimates)} cells, {steps / 1e6:.2f} million run-steps; about {seconds:.0f} s of "
        f"work, {seconds / workers:.0f} s on {workers} process(es), plus the timing pass and "
        f"figures; at most {largest:.0f} MB of arrays a process"
    )
    console.print("time is measured on a few steps of each cell; nothing has been run or stored")


if __name__ == "__main__":
    main()
