"""Command line: parse, call, print. Everything else is in `flyoff.api`."""

from __future__ import annotations

import contextlib
import os
import sys
import threading
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

import flyoff
from flyoff.errors import UserError

if TYPE_CHECKING:
    from flyoff.study.config import Experiment
    from flyoff.study.run import Progress, Study

__all__ = ["app", "main"]

app = typer.Typer(
    name="flyoff",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Competitive trials between nonlinear state estimators.",
)


_WithFile = Annotated[
    list[Path] | None,
    typer.Option("--with", help="A Python file with your estimators; may be repeated."),
]
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
            flush=True,
        )
        # workers are gone; should their pool not notice, nothing is worth waiting for
        last = threading.Timer(5.0, os._exit, (1,))
        last.daemon = True
        last.start()
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
    with_file: _WithFile = None,
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
    if only and out is None:
        # a part must not take the place of the whole
        out = Path("results") / "-".join([experiment.name, "only", *only])
    with _progress() as advance:
        study = api.run(experiment, out=out, jobs=jobs, progress=advance)
    _print_study(study)


@app.command()
def reproduce(
    folder: Annotated[Path, typer.Argument(help="A results folder.")],
    jobs: Annotated[int | None, typer.Option(min=1, max=256, help="Worker processes.")] = None,
) -> None:
    """Run a results folder's experiment again and compare it cell by cell."""
    from flyoff import api

    with _progress() as advance:
        outcome = api.reproduce(folder, jobs=jobs, progress=advance)
    for label, same in (("platform", outcome.same_platform), ("source", outcome.same_source)):
        print(f"{label}: {'as stored' if same else 'another one than stored'}")
    for rule, count in outcome.checked.items():
        held = "cells" if rule.startswith("not compared") else "cells held to:"
        print(f"{count:6d} {held} {rule}")
    for d in outcome.differences:
        print(f"differs: {d.cell}: {d.stored:.9g} stored, {d.repeated:.9g} repeated ({d.rule})")
    print(
        "everything that was compared agrees"
        if outcome.agrees
        else f"{len(outcome.differences)} cells differ"
    )
    raise typer.Exit(0 if outcome.agrees else 1)


@app.command()
def crosscheck(
    config: Annotated[Path, typer.Argument(help="Experiment file (YAML).")],
    runs: Annotated[
        int | None, typer.Option(min=1, help="Runs to compare; the reference is slow.")
    ] = None,
    with_file: _WithFile = None,
) -> None:
    """Compare with a general-purpose reference library on the same recordings."""
    from rich.table import Table

    from flyoff import api

    found = api.crosscheck(config, runs, with_file or ())
    console = _console()
    table = Table(
        title="Largest deviation over all steps and runs", title_justify="left", box=_box()
    )
    for head in ("problem", "estimator", "reference", "outcome"):
        table.add_column(head)
    for head in ("mean", "covariance", "tolerance", "runs"):
        table.add_column(head, justify="right")
    for c in found:
        numbers = ["-", "-", "-", "-"]
        if c.outcome != "cannot":
            sizes = (c.deviation_mean, c.deviation_cov, c.tolerance)
            numbers = [*(f"{x:.1e}" for x in sizes), str(c.runs)]
        table.add_row(c.problem, c.estimator, c.reference, c.outcome, *numbers)
    console.print(table)
    for c in found:
        if c.why:
            console.print(f"{c.problem}, {c.estimator}: {c.why}")
    bad = [c for c in found if c.outcome == "differs"]
    console.print(f"{len(bad)} differ" if bad else "no comparison differs")
    raise typer.Exit(1 if bad else 0)


@app.command()
def vet(
    what: Annotated[
        str, typer.Argument(help="A family by name, or a Python file with your estimators.")
    ],
) -> None:
    """Check what every estimator promises, with the evidence."""
    from rich.table import Table

    from flyoff import api

    console = _console()
    broken = 0
    for name, verdicts in api.vet(what).items():
        table = Table(title=name, title_justify="left", title_style="bold", box=_box())
        for head in ("promise", "outcome", "evidence"):
            table.add_column(head, no_wrap=head != "evidence")
        for v in verdicts:
            table.add_row(v.promise, v.outcome, v.evidence)
            broken += v.outcome == "broken"
        console.print(table)
    console.print(f"{broken} promises broken" if broken else "no promise broken")
    raise typer.Exit(1 if broken else 0)


@app.command()
def catalogue(
    markdown: Annotated[bool, typer.Option("--markdown", help="As Markdown.")] = False,
    schema: Annotated[
        bool, typer.Option("--schema", help="JSON Schema of experiment files, for editors.")
    ] = False,
) -> None:
    """List estimators, point rules, problems, conditions and scores with their options."""
    from flyoff.study import catalogue as listing

    if schema:
        import json

        print(json.dumps(listing.experiment_schema(), indent=1))
        return
    if markdown:
        print(listing.markdown())
        return
    from rich.table import Table

    console = _console()
    items = listing.catalogue()
    for kind, title in listing.KINDS.items():
        table = Table(title=title, title_justify="left", title_style="bold", box=_box())
        for head in ("name", "purpose and options"):
            table.add_column(head, no_wrap=head == "name")
        for item in items:
            if item.kind == kind:
                table.add_row(item.name, _described(item), end_section=True)
        console.print(table)


def _described(item: Any) -> str:
    lines = [item.purpose]
    for o in item.options:
        unit = f" {o.unit}" if o.unit else ""
        lines.append(f"  {o.name}: {o.default}{unit}" + (f" ({o.rule})" if o.rule else ""))
    if item.rows:
        lines.append("  rows: " + ", ".join(item.rows))
    if item.cites:
        lines.append(f"  {item.cites}")
    return "\n".join(lines)


@app.command()
def inspect(
    folder: Annotated[Path, typer.Argument(help="A results folder.")],
    problem: Annotated[str, typer.Option(help="Problem, as named in the experiment.")],
    estimator: Annotated[str, typer.Option(help="Estimator, as named in the experiment.")],
    run: Annotated[int, typer.Option(help="Run number, from 0.")],
    condition: Annotated[
        str | None, typer.Option(help="Condition; the problem's first if not given.")
    ] = None,
) -> None:
    """Simulate one run again: error, sigma, innovations, and what was counted against it."""
    from flyoff import api

    found, table, figure = api.inspect(folder, problem, estimator, run, condition)
    print(f"{problem}, {found.cell.condition.name}, {estimator}, run {run}:")
    for verdict in found.verdicts:
        print(f"  {verdict}")
    windows = [name for name, _, _ in found.cell.problem.windows]
    for q in found.cell.problem.problem.quantities:
        sizes = (found.scores[f"{w}/{q.name}/rms"] * q.shown_factor for w in windows)
        shown = ", ".join(f"{v:.4g} in `{w}`" for v, w in zip(sizes, windows, strict=True))
        print(f"  {q.name} rms [{q.shown_unit}]: {shown}")
    print(f"  written: {table}, {figure}")


def _console(stderr: bool = False) -> Any:
    from rich.console import Console

    console = Console(stderr=stderr, highlight=False, markup=False)
    if not console.is_terminal:
        # a pipe has no width: do not squeeze tables into 80 columns
        console.width = 200
    return console


@contextlib.contextmanager
def _progress() -> Iterator[Progress]:
    """A progress bar on a terminal; silence in a pipe."""
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bars

    console = _console(stderr=True)
    labels = {"runs": "blocks of runs", "timing": "timing pass", "figures": "figures"}
    with Bars(
        TextColumn("{task.description:15}"),
        BarColumn(bar_width=32),
        TextColumn("{task.completed:.0f}/{task.total:.0f}"),
        TimeElapsedColumn(),
        console=console,
        disable=not console.is_terminal,
    ) as bars:
        tasks: dict[str, Any] = {}

        def advance(what: str, done: int, total: int) -> None:
            if what not in tasks:
                tasks[what] = bars.add_task(labels[what], total=total)
            bars.update(tasks[what], completed=done, total=total)

        yield advance


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
    console.print(
        f"\nresults in {study.folder}: report.html, table.csv, tables.md, manifest.json, figures/"
    )


def _box() -> Any:
    from rich import box

    return box.SIMPLE_HEAD


def _print_plan(experiment: Experiment, jobs: int | None) -> None:
    from rich.table import Table

    from flyoff.study.plan import check_memory, estimate

    console = _console()
    table = Table(title=f"Plan of {experiment.name}", title_justify="left", box=_box())
    for head in ("problem", "condition", "estimator"):
        table.add_column(head)
    for head in ("runs", "steps a run", "memory [MB]", "time [s]"):
        table.add_column(head, justify="right")
    workers = jobs or os.cpu_count() or 1
    check_memory(experiment, workers)
    estimates = estimate(experiment)
    for e in estimates:
        c = e.cell
        table.add_row(
            c.problem.name, c.condition.name, c.estimator.name, str(c.problem.runs),
            str(c.steps), f"{e.megabytes:.0f}", f"{e.seconds:.1f}",
        )  # fmt: skip
    console.print(table)
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
