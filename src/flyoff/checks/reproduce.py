"""Repeat a results folder and compare it cell by cell.

On the same platform - versions, architecture, processor features as in the content key - every
number agrees to 1e-6. Elsewhere deterministic families on problems that are not chaotic still do;
sampling families and chaotic problems are held within three combined standard errors. Measured
times are never compared, their ratios within a stated band.
"""

from __future__ import annotations

import json
import math
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from flyoff.errors import UserError
from flyoff.study.config import Experiment, load_experiment, select
from flyoff.study.custom import load_user_file
from flyoff.study.run import Progress, carry_out
from flyoff.study.store import environment, source_digest
from flyoff.study.table import COLUMNS

__all__ = ["Difference", "Reproduction", "compare_tables", "reload", "reproduce"]

RELATIVE = 1e-6
STANDARD_ERRORS = 3.0
NOT_COMPARED = "not compared: another platform, a sampling family, no interval"
RATIO_BAND = (0.4, 2.5)  # host noise between two timing passes
_KEY = ["problem", "condition", "level", "estimator", "window", "quantity", "statistic"]
_Z = 1.959964  # half width of a 95 % interval in standard errors


@dataclass(frozen=True)
class Difference:
    """A cell that does not agree: where, the two values, the rule it was held to."""

    cell: str
    stored: float
    repeated: float
    rule: str


@dataclass(frozen=True)
class Reproduction:
    """Outcome of a comparison.

    Attributes
    ----------
    checked : cells compared, by rule
    differences : those that do not agree, and cells that only one side has
    same_platform, same_source : whether environment and source are those of the stored run
    """

    checked: dict[str, int]
    differences: list[Difference]
    same_platform: bool
    same_source: bool

    @property
    def agrees(self) -> bool:
        """Whether everything that was compared agrees."""
        return not self.differences


def reload(folder: Path) -> tuple[Experiment, dict[str, Any]]:
    """The experiment of a results folder, with the user's files it was run with, and its manifest.

    Raises
    ------
    UserError
        If the folder holds no results, or not those its manifest describes.
    """
    try:
        manifest: dict[str, Any] = json.loads((folder / "manifest.json").read_text())
    except OSError:
        raise UserError(f"{folder}: holds no results (no manifest.json)") from None
    except ValueError:
        raise UserError(f"{folder / 'manifest.json'}: is not JSON") from None
    if not isinstance(manifest, dict) or not {"environment", "blocks", "seed"} <= set(manifest):
        raise UserError(f"{folder / 'manifest.json'}: is not a manifest of results")
    for name in manifest.get("user files", {}):
        load_user_file(folder / Path(name).name)
    experiment = load_experiment(folder / "config.yaml")
    return select(experiment, manifest.get("only", [])), manifest


def reproduce(folder: Path, jobs: int, progress: Progress | None = None) -> Reproduction:
    """Run the recorded experiment again, in a scratch folder, and compare the tables."""
    experiment, manifest = reload(folder)
    try:
        stored = pd.read_csv(folder / "table.csv", keep_default_na=False, na_values=[""])
    except (OSError, ValueError) as why:
        raise UserError(f"{folder / 'table.csv'}: cannot be read ({why})") from None
    if list(stored.columns) != COLUMNS:
        raise UserError(f"{folder / 'table.csv'}: is not a whole table of results")
    with tempfile.TemporaryDirectory() as scratch:
        repeated = carry_out(experiment, Path(scratch) / "again", jobs, progress).table
    same = manifest.get("environment") == environment()
    loose = {
        (p.name, e.name)
        for p in experiment.problems
        for e in experiment.estimators
        if getattr(e.what, "sampling", False) or getattr(p.problem, "chaotic", False)
    }
    checked, differences = compare_tables(stored, repeated, same, loose)
    return Reproduction(checked, differences, same, manifest.get("source") == source_digest())


def compare_tables(
    stored: pd.DataFrame,
    repeated: pd.DataFrame,
    same_platform: bool,
    loose: set[tuple[str, str]],
) -> tuple[dict[str, int], list[Difference]]:
    """Compare two tables row by row; `loose` names (problem, estimator) pairs that sample."""
    checked: dict[str, int] = {}
    out: list[Difference] = []
    old, new = _indexed(stored), _indexed(repeated)
    for key in [*old, *(k for k in new if k not in old)]:
        name = " / ".join(part for part in key if part)
        if key not in old or key not in new:
            side = "the repeated run" if key not in new else "the stored table"
            out.append(Difference(name, math.nan, math.nan, f"missing in {side}"))
            continue
        a, b = old[key], new[key]
        if key[5] == "step" and key[6] == "time":
            continue
        if key[5] == "step" and key[6] == "time-ratio":
            rule = f"ratio of the ratios within {RATIO_BAND[0]:g} to {RATIO_BAND[1]:g}"
            ratio = b.value / a.value if a.value else math.nan
            fine = RATIO_BAND[0] <= ratio <= RATIO_BAND[1]
        elif same_platform or (key[0], key[3]) not in loose:
            rule = f"relative {RELATIVE:g}"
            fine = all(_close(getattr(a, c), getattr(b, c)) for c in ("value", "low", "high"))
            fine = fine and str(a.unit) == str(b.unit) and int(a.runs) == int(b.runs)
        elif math.isnan(a.low) or math.isnan(b.low) or math.isinf(a.high) or math.isinf(b.high):
            rule, fine = NOT_COMPARED, True
        else:
            rule = f"within {STANDARD_ERRORS:g} combined standard errors"
            error = math.hypot((a.high - a.low) / (2 * _Z), (b.high - b.low) / (2 * _Z))
            fine = abs(a.value - b.value) <= STANDARD_ERRORS * error
        checked[rule] = checked.get(rule, 0) + 1
        if not fine:
            out.append(Difference(name, float(a.value), float(b.value), rule))
    return checked, out


def _indexed(table: pd.DataFrame) -> dict[tuple[str, ...], Any]:
    keys = [tuple("" if pd.isna(v) else str(v) for v in row) for row in table[_KEY].to_numpy()]
    return dict(zip(keys, table.itertuples(index=False), strict=True))


def _close(a: float, b: float) -> bool:
    if math.isnan(a) or math.isnan(b):
        return math.isnan(a) and math.isnan(b)
    if math.isinf(a) or math.isinf(b):
        return a == b
    return abs(a - b) <= RELATIVE * max(abs(a), abs(b)) + 1e-12
