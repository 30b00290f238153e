"""Figures of a study. The only importer of matplotlib and seaborn."""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np

mpl.use("Agg")
import matplotlib.pyplot as plt
import seaborn as sns
from matplotlib.figure import Figure

from flyoff.checks.inspection import Inspection
from flyoff.evidence.intervals import nees_band
from flyoff.study.config import ProblemEntry
from flyoff.study.run import Study
from flyoff.study.table import WHOLE, CellData

__all__ = ["write_figures", "write_inspection"]

# colour-blind safe (P. Tol, "Colour schemes", SRON technical note, 2021: the muted scheme), and
# never colour alone: a marker and a line style each
_COLOURS = (
    "#332288", "#CC6677", "#117733", "#DDAA33", "#88CCEE", "#AA4499", "#44AA99", "#661100",
    "#999933", "#555555",
)  # fmt: skip
_MARKERS = "osD^vPX<>h"
_LINES = ("-", "--", "-.", ":", (0, (5, 1)), (0, (3, 1, 1, 1, 1, 1)))
_INK = "#222222"


def _style() -> dict[str, Any]:
    return {
        "font.size": 8.5, "axes.titlesize": 9, "axes.labelsize": 8.5, "legend.fontsize": 8.5,
        "axes.edgecolor": "#888888", "axes.linewidth": 0.7, "text.color": _INK,
        "axes.labelcolor": _INK, "xtick.color": _INK, "ytick.color": _INK,
        "grid.color": "#e3e3e3", "grid.linewidth": 0.6, "savefig.dpi": 130,
    }  # fmt: skip


def write_figures(study: Study, folder: Path) -> Iterator[Path]:
    """Three figures a condition: errors with +-3 sigma, NEES over time, accuracy against cost.

    Yields each file, named ``<what>-<condition>.png``, when it is written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    with sns.axes_style("whitegrid"), mpl.rc_context(_style()):
        for condition in study.experiment.conditions:
            cells = [c for c in study.cells if c.cell.condition is condition]
            if not cells:
                continue
            for name, draw in (
                ("errors", _errors),
                ("nees", _nees),
                ("accuracy-cost", _accuracy_cost),
            ):
                figure = draw(study, cells)
                file = folder / f"{name}-{condition.name}.png"
                figure.savefig(file, metadata={"Software": "flyoff"})
                plt.close(figure)
                yield file


def _look(study: Study, name: str) -> dict[str, Any]:
    names = [e.name for e in study.experiment.estimators]
    i = names.index(name)
    return {"color": _COLOURS[i % len(_COLOURS)], "marker": _MARKERS[i % len(_MARKERS)]}


def _line(study: Study, name: str) -> dict[str, Any]:
    names = [e.name for e in study.experiment.estimators]
    i = names.index(name)
    return {"color": _COLOURS[i % len(_COLOURS)], "linestyle": _LINES[i % len(_LINES)]}


def _by_problem(study: Study, cells: list[CellData]) -> list[tuple[ProblemEntry, list[CellData]]]:
    out = []
    for p in study.experiment.problems:
        own = [c for c in cells if c.cell.problem is p]
        if own:
            out.append((p, own))
    return out


def _shown_component(problem: ProblemEntry) -> tuple[int, str, str, float]:
    """Index, name, unit and factor of the error component drawn for a problem."""
    space = problem.problem.filter_model().space
    first = problem.problem.quantities[0]
    block = getattr(first.error, "block", space.blocks[0].name)
    index = space.tangent[block].start
    name, unit = space.components()[index]
    if unit == first.unit:
        unit, factor = first.shown_unit, first.shown_factor
    else:
        factor = 1.0
    return index, name, unit, factor


def _errors(study: Study, cells: list[CellData]) -> Figure:
    groups = _by_problem(study, cells)
    columns = max(len(own) for _, own in groups)
    figure, axes = plt.subplots(
        len(groups), columns, figsize=(max(6.0, 1.0 + 2.1 * columns), 0.9 + 1.95 * len(groups)),
        squeeze=False, layout="constrained",
    )  # fmt: skip
    for row, (problem, own) in enumerate(groups):
        index, component, unit, factor = _shown_component(problem)
        limit = max(_settled_range(c, index) for c in own) * factor
        for column, c in enumerate(own):
            ax = axes[row, column]
            name = c.cell.estimator.name
            t = problem.problem.step * np.arange(1, len(c.traces["sigma"]) + 1)
            sigma = 3 * c.traces["sigma"][:, index] * factor
            look = _line(study, name)
            ax.fill_between(t, -sigma, sigma, color=look["color"], alpha=0.16, linewidth=0)
            ax.plot(t, sigma, color=look["color"], linewidth=0.7)
            ax.plot(t, -sigma, color=look["color"], linewidth=0.7)
            ax.plot(t, c.traces["error"][:, index] * factor, color=_INK, linewidth=0.8)
            if limit > 0:
                ax.set_ylim(-1.15 * limit, 1.15 * limit)
            ax.set_xlim(0, t[-1])
            ax.set_title(name if np.isfinite(sigma).any() else f"{name} (no covariance)")
            if column == 0:
                ax.set_ylabel(f"{problem.name}\n{component} [{unit}]")
            else:
                ax.tick_params(labelleft=False)
            ax.set_xlabel("time [s]", labelpad=1)
        for ax in axes[row, len(own) :]:
            ax.axis("off")
    condition = cells[0].cell.condition.name
    figure.suptitle(
        f"Error of run 0 (dark line) within the filter's own ±3 sigma (shaded): {condition}",
        fontsize=10,
    )
    return figure


def _settled_range(c: CellData, index: int) -> float:
    """Scale of a panel from its settled part; a lost run may leave the panel."""
    sigma, error = 3 * c.traces["sigma"][:, index], np.abs(c.traces["error"][:, index])
    tail = slice(len(sigma) // 5, None)
    capped = np.fmin(error, 3 * sigma)
    seen = np.concatenate([sigma[tail], capped[tail]])
    seen = seen[np.isfinite(seen)]
    return float(np.quantile(seen, 0.99)) if len(seen) else 0.0


def _grid(count: int, legend: bool = True) -> tuple[Figure, list[Any]]:
    columns = min(count, 2)
    rows = math.ceil(count / columns)
    figure, axes = plt.subplots(
        rows, columns, figsize=(max(7.0, 4.6 * columns), 2.9 * rows + 1.0), squeeze=False,
        layout="constrained",
    )  # fmt: skip
    flat = list(axes.ravel())
    for ax in flat[count:]:
        ax.axis("off")
    return figure, flat[:count]


def _plain_ticks(axis: Any) -> None:
    """Numbers without powers of ten on a logarithmic axis, minor ones where they have room."""
    low, high = sorted(axis.get_view_interval())
    plain = mpl.ticker.FuncFormatter(lambda v, _: f"{v:g}")
    axis.set_major_formatter(plain)
    wide = high / max(low, 1e-300) > 60
    axis.set_minor_formatter(mpl.ticker.NullFormatter() if wide else plain)
    if not wide:
        axis.set_minor_locator(mpl.ticker.LogLocator(subs=(2, 5), numticks=20))


def _legend(figure: Figure, axes: list[Any]) -> None:
    seen: dict[str, Any] = {}
    for ax in axes:
        for handle, label in zip(*ax.get_legend_handles_labels(), strict=True):
            seen.setdefault(label, handle)
    figure.legend(
        list(seen.values()), list(seen), loc="outside lower center", ncols=min(len(seen), 4),
        frameon=False,
    )  # fmt: skip


def _nees(study: Study, cells: list[CellData]) -> Figure:
    groups = _by_problem(study, cells)
    figure, axes = _grid(len(groups))
    for ax, (problem, own) in zip(axes, groups, strict=True):
        size = problem.problem.filter_model().space.d
        top = 2.0
        for c in own:
            total, count = c.profiles["nees"]
            seen = count > 0
            if not seen.any():
                continue
            t = problem.problem.step * np.arange(1, len(total) + 1)[seen]
            value = _smooth(total[seen] / count[seen], problem)
            top = max(top, float(np.quantile(value, 0.995)))
            name = c.cell.estimator.name
            ax.plot(t, value, label=name, linewidth=1.1, **_line(study, name))
        low, high = nees_band(size, problem.runs)
        if problem.problem.recorded:
            title = f"{problem.name}: a recording, no band"
        else:
            ax.axhspan(float(low), float(high), color="#bbbbbb", alpha=0.55, linewidth=0, zorder=0,
                       label="95 % band if consistent")  # fmt: skip
            title = f"{problem.name}: {problem.runs} runs, d = {size}"
        for edge in (0.8, 1.25):
            ax.axhline(edge, color="#777777", linewidth=0.7, linestyle=(0, (1, 2)))
        ax.set_yscale("log")
        ax.set_ylim(0.3, max(3.0, 1.3 * top))
        _plain_ticks(ax.yaxis)
        ax.set_title(title)
        ax.set_xlabel("time [s]")
        ax.set_ylabel("NEES / d, mean over runs")
    _legend(figure, axes)
    condition = cells[0].cell.condition.name
    figure.suptitle(
        f"Normalised NEES over time: {condition}\n"
        "dotted: practical band 0.8 to 1.25; above it a filter is overconfident",
        fontsize=10,
    )
    return figure


def _smooth(value: Any, problem: ProblemEntry) -> Any:
    """Mean over 1/200 of the run: a recording at 100 Hz would draw as a black patch."""
    width = max(1, len(value) // 200)
    kernel = np.ones(width) / width
    padded = np.pad(value, (width // 2, width - 1 - width // 2), mode="edge")
    return np.convolve(padded, kernel, mode="valid")


def _accuracy_cost(study: Study, cells: list[CellData]) -> Figure:
    groups = _by_problem(study, cells)
    figure, axes = _grid(len(groups))
    table = study.table
    for ax, (problem, own) in zip(axes, groups, strict=True):
        q = problem.problem.quantities[0]
        recorded = problem.problem.recorded
        window = WHOLE if recorded else problem.windows[-1][0]
        statistic = "rmse" if recorded else "rmse-typical"
        here = table[
            (table.problem == problem.name) & (table.condition == own[0].cell.condition.name)
        ]
        for c in own:
            name = c.cell.estimator.name
            mine = here[here.estimator == name]
            error = mine[(mine.quantity == q.name) & (mine.statistic == statistic)].set_index(
                "window"
            )
            cost = mine[(mine.quantity == "step") & (mine.statistic == "time")]
            if cost.empty or window not in error.index:
                continue
            y = float(error.loc[window, "value"])
            if recorded:
                parts = error.loc[[w for w, _, _ in problem.windows], "value"]
                low, high = float(parts.min()), float(parts.max())
            else:
                low, high = float(error.loc[window, "low"]), float(error.loc[window, "high"])
            x, x_low, x_high = (float(cost[k].iloc[0]) for k in ("value", "low", "high"))
            look = _look(study, name)
            bars = [[max(y - low, 0)], [max(high - y, 0)]] if low == low else None
            ax.errorbar(
                x, y, yerr=bars, xerr=[[x - x_low], [x_high - x]], label=name, linestyle="none",
                markersize=6, capsize=2.5, elinewidth=0.9, markeredgecolor="white",
                markeredgewidth=0.6, ecolor=look["color"], **look,
            )  # fmt: skip
        ax.set_xscale("log")
        ax.margins(x=0.18, y=0.2)
        ax.autoscale_view()
        _plain_ticks(ax.xaxis)
        what = "rms, range of segments" if recorded else f"typical rms, `{window}`"
        ax.set_title(problem.name)
        ax.set_xlabel("time a run and step [us], amortised over a batch")
        ax.set_ylabel(f"{q.name} [{q.shown_unit}]\n{what}")
    _legend(figure, axes)
    condition = cells[0].cell.condition.name
    figure.suptitle(
        f"Accuracy against cost: {condition}\n"
        "bars: 95 % interval over runs; extremes of the timing rounds",
        fontsize=10,
    )
    return figure


def write_inspection(inspection: Inspection, file: Path) -> None:
    """Errors within 3 sigma, NEES and innovations of one run, as one figure."""
    table = inspection.steps
    t = table["time [s]"].to_numpy()
    parts = [c[6:] for c in table.columns if c.startswith("error ")]
    sensors = list(inspection.nis_bound)
    columns = 3
    rows = math.ceil(len(parts) / columns)
    extra = math.ceil((1 + len(sensors)) / columns)
    cell, colour = inspection.cell, _COLOURS[0]
    with sns.axes_style("whitegrid"), mpl.rc_context(_style()):
        figure, axes = plt.subplots(
            rows + extra, columns, figsize=(10.5, 1.0 + 1.9 * (rows + extra)), squeeze=False,
            layout="constrained",
        )  # fmt: skip
        flat = list(axes.ravel())
        for ax, part in zip(flat, parts, strict=False):
            sigma = 3 * table[f"sigma {part}"].to_numpy()
            ax.fill_between(t, -sigma, sigma, color=colour, alpha=0.18, linewidth=0)
            ax.plot(t, table[f"error {part}"], color=_INK, linewidth=0.9)
            ax.set_ylabel(part)
        below = flat[rows * columns :]
        below[0].plot(t, table["nees/d"], color=_INK, linewidth=0.9)
        below[0].axhspan(0.8, 1.25, color="#bbbbbb", alpha=0.55, linewidth=0)
        below[0].set_ylabel("NEES / d")
        if (table["nees/d"] > 0).any():
            below[0].set_yscale("log")
        for ax, name in zip(below[1:], sensors, strict=False):
            ax.plot(
                t, table[f"nis {name}"], color=_COLOURS[1], marker=".", markersize=2.5,
                linestyle="none",
            )  # fmt: skip
            ax.axhline(inspection.nis_bound[name], color="#777777", linewidth=0.8, linestyle="--")
            ax.set_ylabel(f"NIS {name}\n(dashed: 99.9 %)")
            if (table[f"nis {name}"] > 0).any():
                ax.set_yscale("log")
        for ax in (*flat[len(parts) : rows * columns], *below[1 + len(sensors) :]):
            ax.axis("off")
        for ax in flat:
            ax.set_xlim(0, t[-1])
            ax.set_xlabel("time [s]", labelpad=1)
        figure.suptitle(
            f"{cell.problem.name}, {cell.condition.name}, {cell.estimator.name}, run "
            f"{inspection.run}: error (dark) within 3 sigma (shaded)\n"
            + "; ".join(inspection.verdicts),
            fontsize=10,
        )
        figure.savefig(file, metadata={"Software": "flyoff"})
        plt.close(figure)
