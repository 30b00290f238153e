"""The readable tables of a study: one set a problem and condition, for terminal and file.

Marks: ``*`` the best of a column, ``~`` not separated from it by the paired 95 % interval, ``^``
overconfident and ``v`` conservative beyond the practical band of 0.8 to 1.25.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import pandas as pd

from flyoff.evidence.paired import paired_ratio
from flyoff.problems.contract import Quantity
from flyoff.study.config import ProblemEntry
from flyoff.study.run import Study
from flyoff.study.table import WHOLE, CellData

__all__ = ["CAUTIONS", "LEGEND", "View", "markdown", "views"]

CAUTIONS = (
    "Simulation evidence supports a design choice; it is not flight clearance, verification credit "
    "or a safety case.",
    "The airworthiness authority and the programme's own process decide; ARP4754, ARP4761 and "
    "DO-178C apply where invoked. This tool is not qualified.",
    "Execution time and stack must be measured on the target; host times rank flight code within a "
    "factor of about 1.5, operation counts within about two.",
    "What the truth model leaves out has not been tested; conditions not listed have not been "
    "tested. Keep the incumbent estimator as fallback in first flights.",
)
LEGEND = (
    "[a, b] 95 % interval over runs; * best; ~ not separated from the best (paired interval); "
    "^ overconfident, v conservative beyond 0.8 to 1.25"
)
LEGEND_RECORDED = (
    "{a .. b} range over the segments of the recording: too few for an interval, so nothing is "
    "marked; no candidate is chosen on one recording"
)
_PRACTICAL = (0.8, 1.25)


@dataclass(frozen=True)
class View:
    """One readable table: title, column heads, rows of cells, groups of rows, notes."""

    title: str
    heads: list[str]
    rows: list[list[str]]
    breaks: set[int] = field(default_factory=set)
    notes: list[str] = field(default_factory=list)


def number(x: float) -> str:
    """Three significant digits, without an exponent in the usual range."""
    if math.isnan(x):
        return "-"
    if math.isinf(x):
        return "inf" if x > 0 else "-inf"
    if x == 0:
        return "0"
    digits = 2 - math.floor(math.log10(abs(x)))
    if -2 <= digits <= 8:
        return f"{x:.{max(digits, 0)}f}"
    return f"{x:.2e}"


def views(study: Study) -> Iterator[View]:
    """Two tables a problem and condition: accuracy; consistency, lost runs and cost."""
    for problem in study.experiment.problems:
        for condition in study.experiment.conditions:
            if not condition.applies(problem.name):
                continue
            part = study.table[
                (study.table.problem == problem.name) & (study.table.condition == condition.name)
            ]
            cells = [
                c
                for c in study.cells
                if c.cell.problem is problem and c.cell.condition is condition
            ]
            if part.empty or not cells:
                continue
            title = f"{problem.name} ({problem.kind}), {condition.name}"
            index = _Index(part)
            yield _accuracy(title, problem, cells, index)
            yield _credibility(title, problem, cells, index)


class _Index:
    """Rows of one problem and condition by (estimator, window, quantity, statistic)."""

    def __init__(self, part: pd.DataFrame) -> None:
        keys = zip(part.estimator, part.window, part.quantity, part.statistic, strict=True)
        self.rows = dict(zip(keys, part.itertuples(index=False), strict=True))

    def value(self, *key: Any) -> float:
        row = self.rows.get(key)
        return math.nan if row is None else float(row.value)

    def interval(self, *key: Any) -> str:
        row = self.rows.get(key)
        if row is None or math.isnan(row.value):
            return "-"
        if math.isnan(row.low):
            return number(row.value)
        return f"{number(row.value)} [{number(row.low)}, {number(row.high)}]"

    def spread(self, estimator: str, windows: Sequence[str], quantity: str, statistic: str) -> str:
        """A recording's value with the range over its segments."""
        value = self.value(estimator, WHOLE, quantity, statistic)
        parts = [self.value(estimator, w, quantity, statistic) for w in windows]
        if math.isnan(value):
            return "-"
        return f"{number(value)} {{{number(min(parts))} .. {number(max(parts))}}}"


def _accuracy(title: str, problem: ProblemEntry, cells: Sequence[CellData], index: _Index) -> View:
    quantities: tuple[Quantity, ...] = problem.problem.quantities
    names = [c.cell.estimator.name for c in cells]
    windows = [w for w, _, _ in problem.windows]
    if problem.problem.recorded:
        heads = ["estimator", *(_head(q, "rms error") for q in quantities)]
        rows = [[n, *(index.spread(n, windows, q.name, "rmse") for q in quantities)] for n in names]
        notes = [LEGEND_RECORDED]
        if any(q.agreement for q in quantities):
            agreeing = ", ".join(q.name for q in quantities if q.agreement)
            notes.append(f"{agreeing}: agreement with a truth of similar quality, never a gate")
        return View(f"{title}: accuracy", heads, rows, notes=notes)
    heads = ["window", "estimator"]
    for q in quantities:
        heads += [_head(q, "typical rms"), "p95"]
    rows, breaks = [], set()
    for window in windows:
        marks = {q.name: _marks(cells, window, q.name) for q in quantities}
        for n in names:
            row = [window, n]
            for q in quantities:
                cell = index.interval(n, window, q.name, "rmse-typical")
                row.append(f"{cell} {marks[q.name].get(n, ' ')}")
                row.append(number(index.value(n, window, q.name, "p95")))
            rows.append(row)
        breaks.add(len(rows))
    return View(f"{title}: accuracy, {problem.runs} runs", heads, rows, breaks, [LEGEND])


def _head(q: Quantity, what: str) -> str:
    return f"{q.name} {what} [{q.shown_unit}]"


def _marks(cells: Sequence[CellData], window: str, quantity: str) -> dict[str, str]:
    """Best by typical error, and what the paired interval does not separate from it."""
    errors = {c.cell.estimator.name: c.per_run[f"{window}/{quantity}/rms"] for c in cells}
    typical = {name: float(pd.Series(e[e > 0]).map(math.log).mean()) for name, e in errors.items()}
    ranked = [n for n in typical if not math.isnan(typical[n])]
    if len(ranked) < 2:
        return {}
    # rounding decides nothing: of equals the first in the file is the best
    least = min(typical[n] for n in ranked)
    best = next(n for n in ranked if typical[n] - least < 1e-9)
    out = {best: "*"}
    for n in ranked:
        if n != best and not paired_ratio(errors[n], errors[best]).separated:
            out[n] = "~"
    return out


def _credibility(
    title: str, problem: ProblemEntry, cells: Sequence[CellData], index: _Index
) -> View:
    recorded = problem.problem.recorded
    windows = [w for w, _, _ in problem.windows]
    window = WHOLE if recorded else windows[-1]
    sensors = list(problem.problem.filter_model().sensors)
    heads = ["estimator", "NEES/d mean", "median", "in 3 sigma [%]"]
    if not recorded:
        heads.insert(3, "in band [%]")
    heads += [f"NIS/m {s}" for s in sensors]
    heads += ["failed", "diverged", "never conv.", "overconf."]
    heads += ["time [us]", "ratio", "operations"]
    rows = []
    for c in cells:
        n = c.cell.estimator.name
        mean = index.value(n, window, "nees", "mean")
        typical = index.value(n, window, "nees", "median")
        judged = typical if not math.isnan(typical) else mean
        mark = "" if math.isnan(judged) else _band_mark(judged)
        if recorded:
            row = [n, index.spread(n, windows, "nees", "mean"), "-"]
        else:
            row = [n, index.interval(n, window, "nees", "mean"), f"{number(typical)} {mark}"]
            row.append(_percent(index.value(n, window, "nees", "in-band")))
        row.append(_percent(index.value(n, window, "nees", "inside-3s")))
        row += [number(index.value(n, window, f"nis.{s}", "mean")) for s in sensors]
        for lost in ("failed", "diverged", "never-converged", "overconfident"):
            row.append(_count(index, n, lost))
        row.append(number(index.value(n, "all", "step", "time")))
        row.append(number(index.value(n, "all", "step", "time-ratio")))
        operations = index.value(n, "all", "step", "operations")
        row.append("-" if math.isnan(operations) else f"{operations:.0f}")
        rows.append(row)
    where = "over the segments" if recorded else f"window `{window}`"
    notes = [
        f"NEES and NIS per component, {where}, a mean without interval has a run beyond 5 medians; "
        f"lost runs are counted over the whole run, of "
        f"{problem.runs}; time is a run and step, amortised over a batch, its ratio to "
        f"`{cells[0].cell.estimator.name}`; operations a run and step",
    ]
    for c in cells:
        lost_row = index.rows.get((c.cell.estimator.name, "all", "runs", "failed"))
        if lost_row is not None and lost_row.value > 0:
            notes.append(f"{c.cell.estimator.name} failed in {lost_row.note}")
    notes += [f"truth differs from the filter model: {m}" for m in problem.problem.mismatches]
    return View(f"{title}: consistency, lost runs, cost", heads, rows, notes=notes)


def _band_mark(value: float) -> str:
    if value > _PRACTICAL[1]:
        return "^"
    return "v" if value < _PRACTICAL[0] else " "


def _percent(share: float) -> str:
    return "-" if math.isnan(share) else f"{100 * share:.1f}"


def _count(index: _Index, estimator: str, statistic: str) -> str:
    row = index.rows.get((estimator, "all", "runs", statistic))
    if row is None or math.isnan(row.value):
        return "-"
    return str(round(row.value * row.runs))


def markdown(study: Study) -> str:
    """All tables as one Markdown text with the cautions."""
    lines = [f"# {study.experiment.name}", "", study.experiment.purpose, ""]
    for view in views(study):
        lines += [f"## {view.title}", ""]
        lines.append("| " + " | ".join(_escape(h) for h in view.heads) + " |")
        lines.append("|" + " --- |" * len(view.heads))
        lines += ["| " + " | ".join(_escape(c.strip()) for c in row) + " |" for row in view.rows]
        lines += ["", *(f"- {_escape(n)}" for n in view.notes), ""]
    lines += ["## Cautions", "", *(f"- {c}" for c in CAUTIONS), ""]
    return "\n".join(lines)


def _escape(text: str) -> str:
    for mark in "\\`*_~|<":
        text = text.replace(mark, "\\" + mark)
    return text
