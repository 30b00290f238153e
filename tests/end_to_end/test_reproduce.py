"""A results folder is repeated from its manifest and compared cell by cell."""

from __future__ import annotations

import json
import subprocess
import sys

import pandas as pd
import pytest

import flyoff
from flyoff.checks.reproduce import compare_tables, reload
from tests.conftest import ROOT, SMALL


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    top = tmp_path_factory.mktemp("reproduce")
    file = top / "small.yaml"
    file.write_text(SMALL.format(runs=20, particles=60))
    flyoff.run(file, out=top / "out", jobs=1, figures=False)
    return top / "out"


def command(*args):
    return subprocess.run(
        [sys.executable, "-m", "flyoff.cli", "reproduce", *map(str, args)],
        capture_output=True, text=True,
    )  # fmt: skip


def test_a_folder_reproduces(folder):
    done = command(folder)
    assert done.returncode == 0, done.stdout + done.stderr
    lines = done.stdout.splitlines()
    assert lines[:2] == ["platform: as stored", "source: as stored"]
    assert "cells held to: relative 1e-06" in done.stdout
    assert lines[-1] == "everything that was compared agrees"
    assert not (folder / "again").exists()


def test_a_touched_number_is_found(folder, tmp_path):
    copy = tmp_path / "copy"
    copy.mkdir()
    for name in ("config.yaml", "manifest.json", "table.csv"):
        (copy / name).write_bytes((folder / name).read_bytes())
    table = pd.read_csv(copy / "table.csv", keep_default_na=False)
    k = table.index[(table.statistic == "rmse-typical") & (table.estimator == "ckf")][0]
    table["value"] = table["value"].astype(object)
    table.loc[k, "value"] = float(table.loc[k, "value"]) * 1.00001
    table.drop(index=len(table) - 1).to_csv(copy / "table.csv", index=False)
    done = command(copy)
    assert done.returncode == 1
    assert "differs: balloon / nominal / ckf" in done.stdout
    assert "missing in the stored table" in done.stdout
    assert done.stdout.splitlines()[-1] == "2 cells differ"


def table(value, low=float("nan"), high=float("nan"), estimator="pf", statistic="rmse-typical"):
    quantity = "step" if statistic.startswith("time") else "position"
    return pd.DataFrame(
        [
            [
                "p",
                "nominal",
                "",
                estimator,
                "late",
                quantity,
                statistic,
                value,
                low,
                high,
                "m",
                9,
                "",
            ]
        ],
        columns=flyoff.study.table.COLUMNS,
    )


@pytest.mark.parametrize(
    ("a", "b", "same", "agrees"),
    [
        (table(1.0, 0.9, 1.1), table(1.0 + 5e-7, 0.9, 1.1), True, True),
        (table(1.0, 0.9, 1.1), table(1.0 + 5e-6, 0.9, 1.1), True, False),
        # another platform: a standard error is 0.051 on either side, combined 0.072
        (table(1.0, 0.9, 1.1), table(1.2, 1.1, 1.3), False, True),
        (table(1.0, 0.9, 1.1), table(1.23, 1.13, 1.33), False, False),
        (table(1.0, estimator="ekf"), table(1.00001, estimator="ekf"), False, False),
        (table(1.0, statistic="time"), table(9.0, statistic="time"), True, True),
        (table(1.0, statistic="time-ratio"), table(2.4, statistic="time-ratio"), True, True),
        (table(1.0, statistic="time-ratio"), table(2.6, statistic="time-ratio"), True, False),
    ],
)
def test_rules(a, b, same, agrees):
    checked, differences = compare_tables(a, b, same, {("p", "pf")})
    assert (not differences) == agrees
    assert sum(checked.values()) == (0 if a.statistic[0] == "time" else 1)


def test_the_committed_reference_is_whole():
    """The full comparison takes a minute: `flyoff reproduce results/first-look`."""
    folder = ROOT / "results" / "first-look"
    experiment, manifest = reload(folder)
    stored = pd.read_csv(folder / "table.csv", keep_default_na=False)
    assert experiment.source == (ROOT / "configs" / "first-look.yaml").read_bytes()
    cells = {(b["problem"], b["condition"], b["estimator"]) for b in manifest["blocks"]}
    assert cells == set(zip(stored.problem, stored.condition, stored.estimator, strict=True))
    assert {f.name for f in (folder / "figures").iterdir()} >= {"nees-nominal.png"}
    text = json.dumps(manifest) + (folder / "tables.md").read_text()
    assert str(ROOT) not in text


def test_part_of_the_committed_reference_reproduces(tmp_path):
    """The balloon of first-look, all runs: deterministic families to 1e-6 on any platform."""
    folder = ROOT / "results" / "first-look"
    experiment = flyoff.api.select(
        flyoff.api.load(folder / "config.yaml"), ["balloon", "ekf", "ckf", "kalman", "nominal"]
    )
    again = flyoff.run(experiment, out=tmp_path / "out", jobs=1, figures=False).table
    stored = pd.read_csv(folder / "table.csv", keep_default_na=False, na_values=[""])
    here = stored[(stored.problem == "balloon") & stored.estimator.isin(["ekf", "ckf", "kalman"])]
    keep = here.quantity != "step"
    checked, differences = compare_tables(here[keep], again[again.quantity != "step"], True, set())
    assert not differences
    assert checked["relative 1e-06"] > 150


def test_not_a_results_folder(tmp_path):
    done = command(tmp_path)
    assert (done.returncode, done.stderr) == (
        2,
        f"{tmp_path}: holds no results (no manifest.json)\n",
    )
    (tmp_path / "manifest.json").write_text("{")
    assert command(tmp_path).stderr == f"{tmp_path / 'manifest.json'}: is not JSON\n"
