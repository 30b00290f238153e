"""The results table: one statistic a row, reduced in run order from the store."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from flyoff.evidence.intervals import FEWEST_UNITS, REDUCTIONS, Estimate, nees_band
from flyoff.numerics.spaces import Array
from flyoff.registry import discover
from flyoff.scores.contract import Statistic, window_steps
from flyoff.study.plan import Cell

__all__ = ["COLUMNS", "CellData", "build_table", "merge_blocks", "runs_frame", "write_csv"]

COLUMNS = [
    "problem", "condition", "level", "estimator", "window", "quantity", "statistic",
    "value", "low", "high", "unit", "runs", "note",
]  # fmt: skip
# of a recording only what needs no independent runs
_RECORDED = {"pooled-rms": "rms", "pooled-quantile": "pool", "largest": "max", "mean": "mean"}
WHOLE = "scored"  # the window that joins the segments of a recording


@dataclass(frozen=True)
class CellData:
    """Everything stored of a cell, joined over its chunks.

    Attributes
    ----------
    per_run : (M, ...) by ``window/quantity/what``
    profiles : name -> (sum over runs (T,), count (T,))
    traces : (T, c) of run 0
    """

    cell: Cell
    per_run: dict[str, Array]
    profiles: dict[str, tuple[Array, Array]]
    traces: dict[str, Array]


def merge_blocks(cell: Cell, blocks: Sequence[Mapping[str, Array]]) -> CellData:
    """Join chunks in run order."""
    per_run, profiles, traces = {}, {}, {}
    for key in blocks[0]:
        if key.startswith("trace:"):
            traces[key[6:]] = blocks[0][key]
        elif key.startswith("profile:"):
            if key.endswith("/sum"):
                name = key[8:-4]
                total = blocks[0][key].copy()
                count = blocks[0][f"profile:{name}/count"].copy()
                for b in blocks[1:]:
                    total += b[key]
                    count += b[f"profile:{name}/count"]
                profiles[name] = (total, count)
        elif all(key in b for b in blocks):
            per_run[key] = np.concatenate([b[key] for b in blocks])
    return CellData(cell, per_run, profiles, traces)


def _statistics(cell: Cell) -> list[Statistic]:
    problem = cell.problem.problem
    model = problem.filter_model()
    out: list[Statistic] = []
    for score in discover("score").values():
        out += score.statistics(  # type: ignore[attr-defined]
            problem.quantities, model, cell.problem.divergence
        )
    return out


def build_table(
    data: Sequence[CellData], costs: Mapping[tuple[str, str], Mapping[str, Any]]
) -> pd.DataFrame:
    """All rows; cost rows follow the rows of their cell."""
    rows: list[dict[str, Any]] = []
    for d in data:
        cell = d.cell
        base = {
            "problem": cell.problem.name,
            "condition": cell.condition.name,
            "level": "",
            "estimator": cell.estimator.name,
        }
        add = _recorded_rows if cell.problem.problem.recorded else _simulated_rows
        rows += [{**base, **row} for row in add(d)]
        cost = costs.get((cell.problem.name, cell.estimator.name))
        if cost is not None:
            rows += [{**base, **row} for row in _cost_rows(cost)]
    return pd.DataFrame(rows, columns=COLUMNS)


def _row(window: str, s: Statistic, e: Estimate, note: str = "") -> dict[str, Any]:
    notes = [n for n in (e.note, note) if n]
    return {
        "window": window,
        "quantity": s.quantity,
        "statistic": s.statistic,
        "value": e.value * s.factor,
        "low": e.low * s.factor,
        "high": e.high * s.factor,
        "unit": s.unit,
        "runs": e.units,
        "note": "; ".join(notes),
    }


def _simulated_rows(d: CellData) -> list[dict[str, Any]]:
    rows = []
    windows = [name for name, _, _ in d.cell.problem.windows]
    for s in _statistics(d.cell):
        if s.reduction == "rate":
            values = d.per_run.get(f"all/{s.key}")
            if values is None:
                rows.append(_row("all", s, _not_assessable(d)))
            else:
                estimate = REDUCTIONS["rate"](values, s.options)
                rows.append(_row("all", s, estimate, _reasons(d, s)))
            continue
        for window in windows:
            if s.reduction == "in-band":
                rows.append(_row(window, s, _in_band(d, window, s)))
                continue
            values = d.per_run[f"{window}/{s.key}"]
            estimate = REDUCTIONS[s.reduction](values, s.options)
            note = _assessed(d, window, s)
            if s.quantity.startswith("nees") and estimate.units == 0:
                estimate = _not_assessable(d)
            rows.append(_row(window, s, estimate, note))
    return rows


def _reasons(d: CellData, s: Statistic) -> str:
    """How many runs were lost for which reason."""
    if "reasons" not in s.options:
        return ""
    codes = d.per_run[f"all/{s.options['reasons']}"]
    said = d.per_run[f"all/{s.options['reasons']}-message"]
    tally: dict[str, int] = {}
    for code, message in zip(codes, said, strict=True):
        if code:
            text = s.options["texts"][int(code)] + (f" ({message})" if message else "")
            tally[text] = tally.get(text, 0) + 1
    return ", ".join(f"{count} {text}" for text, count in tally.items())


def _not_assessable(d: CellData) -> Estimate:
    return Estimate(math.nan, note="not assessable: no covariance, or too small a sample")


def _assessed(d: CellData, window: str, s: Statistic) -> str:
    """A note where NEES could be assessed in a part of the steps only."""
    if not s.quantity.startswith("nees"):
        return ""
    share = d.per_run.get(f"{window}/{s.quantity}/assessed")
    if share is None or len(share) == 0:
        return ""
    mean = float(np.mean(share))
    if mean > 0.999:
        return ""
    return f"assessable in {100 * mean:.0f} % of steps (effective sample at least 20 a component)"


def _in_band(d: CellData, window: str, s: Statistic) -> Estimate:
    total, count = d.profiles[s.quantity]
    a, b = _window_steps(d, window)
    total, count = total[a:b], count[a:b]
    seen = count > 0
    if not seen.any():
        return _not_assessable(d)
    low, high = nees_band(s.options["size"], count[seen])
    inside = (total[seen] / count[seen] >= low) & (total[seen] / count[seen] <= high)
    runs = int(count.max())
    band = nees_band(s.options["size"], runs)
    note = f"share of time in the 95 % band {float(band[0]):.3f} to {float(band[1]):.3f}"
    return Estimate(float(inside.mean()), units=runs, note=note)


def _window_steps(d: CellData, window: str) -> tuple[int, int]:
    for name, start, end in d.cell.problem.windows:
        if name == window:
            first, last = window_steps(start, end, d.cell.problem.problem.step)
            return first - 1, last
    raise KeyError(window)


def _recorded_rows(d: CellData) -> list[dict[str, Any]]:
    """Every segment's value, and over the segments a value with the range seen; no interval."""
    rows = []
    windows = [name for name, _, _ in d.cell.problem.windows]
    quantities = {q.name: q for q in d.cell.problem.problem.quantities}
    for s in _statistics(d.cell):
        if s.reduction == "rate":
            values = d.per_run.get(f"all/{s.key}")
            if values is not None:
                note = f"{int(np.nansum(values))} of {len(values)} drawn first estimates"
                value = float(np.nanmean(values))
                estimate = Estimate(value, units=len(values), note=note)
                rows.append(_row("all", s, estimate, _reasons(d, s)))
            continue
        if s.reduction not in _RECORDED:
            continue
        if f"{windows[0]}/{s.key}" not in d.per_run:
            if s.statistic == "mean":
                rows.append(_row(WHOLE, s, Estimate(math.nan, note="not assessed: no truth")))
            continue
        parts, pooled = [], None
        for window in windows:
            values = d.per_run[f"{window}/{s.key}"]
            parts.append(REDUCTIONS[s.reduction](values, s.options).value)
            if s.reduction == "pooled-quantile":
                pooled = values if pooled is None else pooled + values
        seen = np.array(parts)
        if s.reduction == "pooled-rms":
            value = float(np.sqrt(np.mean(seen**2)))
        elif s.reduction == "largest":
            value = float(seen.max())
        elif pooled is not None:
            value = REDUCTIONS["pooled-quantile"](pooled, s.options).value
        else:
            value = float(seen.mean())
        low, high = seen.min() * s.factor, seen.max() * s.factor
        note = f"{len(seen)} segments from {low:.3g} to {high:.3g}"
        if len(seen) < FEWEST_UNITS:
            note += f"; under {FEWEST_UNITS} segments no interval"
        q = quantities.get(s.quantity)
        if q is not None and q.agreement:
            note += "; agreement with a truth of similar quality, never a gate"
        rows.append(_row(WHOLE, s, Estimate(value, units=len(seen), note=note)))
        for window, part in zip(windows, parts, strict=True):
            rows.append(_row(window, s, Estimate(part, units=1)))
    return rows


def _cost_rows(cost: Mapping[str, Any]) -> list[dict[str, Any]]:
    batch = f"batch of {cost['batch']}"
    spread = "median of interleaved rounds; low and high are the extremes"

    def row(statistic: str, value: float, low: float, high: float, unit: str, note: str) -> Any:
        return {
            "window": "all", "quantity": "step", "statistic": statistic, "value": value,
            "low": low, "high": high, "unit": unit, "runs": cost["batch"], "note": note,
        }  # fmt: skip

    return [
        row(
            "time", 1e6 * cost["time"], 1e6 * cost["time_low"], 1e6 * cost["time_high"], "us",
            f"amortised over a {batch}; {spread}",
        ),
        row(
            "time-ratio", cost["ratio"], cost["ratio_low"], cost["ratio_high"], "1",
            f"to {cost['to']}; ranks flight code within a factor of about 1.5",
        ),
        row(
            "operations", cost["operations"], math.nan, math.nan, "1",
            "a run and step, tape plus linear algebra; good to about a factor of two",
        ),
    ]  # fmt: skip


def runs_frame(data: Sequence[CellData]) -> pd.DataFrame:
    """One row a run and window: problem, condition, estimator, run, window, then the scores."""
    frames = []
    for d in data:
        size = len(next(iter(d.per_run.values())))
        windows: dict[str, dict[str, Array]] = {}
        for key, values in d.per_run.items():
            if values.ndim == 1:
                window, rest = key.split("/", 1)
                windows.setdefault(window, {})[rest] = values
        for window, columns in windows.items():
            head = {
                "problem": d.cell.problem.name,
                "condition": d.cell.condition.name,
                "estimator": d.cell.estimator.name,
                "run": np.arange(size),
                "window": window,
            }
            frames.append(pd.DataFrame({**head, **columns}))
    return pd.concat(frames, ignore_index=True)


def write_csv(table: pd.DataFrame) -> bytes:
    """The table as CSV, numbers to nine digits."""
    text: str = table.to_csv(index=False, float_format="%.9g", lineterminator="\n")
    return text.encode()
