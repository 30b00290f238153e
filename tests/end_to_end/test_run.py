"""A whole experiment, from the file to the table and the figures."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from PIL import Image

import flyoff
from flyoff.report.views import LEGEND, LEGEND_RECORDED, markdown, views
from flyoff.study.table import COLUMNS
from tests.conftest import ROOT


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    from tests.conftest import SMALL

    folder = tmp_path_factory.mktemp("run")
    file = folder / "small.yaml"
    file.write_text(SMALL.format(runs=70, particles=100))
    return flyoff.run(file, out=folder / "out", jobs=1)


def rows(table, **where):
    for key, value in where.items():
        table = table[table[key] == value]
    return table


def test_results_are_pandas_objects(study):
    assert isinstance(study.table, pd.DataFrame)
    assert isinstance(study.runs, pd.DataFrame)
    assert isinstance(study.manifest, pd.Series)
    assert list(study.table.columns) == COLUMNS
    assert study.manifest["seed"] == 7


def test_files(study):
    assert (study.folder / "config.yaml").read_bytes() == study.experiment.source
    back = pd.read_csv(study.folder / "table.csv", keep_default_na=False)
    assert list(back.columns) == COLUMNS
    assert len(back) == len(study.table)
    manifest = json.loads((study.folder / "manifest.json").read_text())
    text = json.dumps(manifest)
    assert str(study.folder) not in text
    assert manifest["problems"]["radar"]["kind"] == "coordinated-turn"


def test_every_cell_has_its_rows(study):
    cells = {("balloon", "nominal", e) for e in ("ekf", "ckf", "pf", "kalman")} | {
        ("radar", c, e) for c in ("nominal", "lossy") for e in ("ekf", "ckf")
    }
    got = set(zip(study.table.problem, study.table.condition, study.table.estimator, strict=True))
    assert got == cells
    for problem, condition, estimator in cells:
        part = rows(study.table, problem=problem, condition=condition, estimator=estimator)
        for statistic in (
            "rmse-typical", "rmse-median", "rmse", "p95", "rmse-run95", "max", "in-band",
            "inside-1s", "inside-3s", "failed", "diverged", "never-converged", "overconfident",
            "time", "time-ratio", "operations",
        ):  # fmt: skip
            assert (part.statistic == statistic).any(), statistic


def test_the_linear_problem_is_solved_exactly_by_all_gaussian_filters(study):
    values = rows(study.table, problem="balloon", quantity="position", statistic="rmse-typical")
    kalman = rows(values, estimator="kalman").value.to_numpy()
    for name in ("ekf", "ckf"):
        np.testing.assert_allclose(rows(values, estimator=name).value, kalman, rtol=1e-9)
    # a hundred particles are fewer than the problem needs: clearly worse, or something is wrong
    assert (rows(values, estimator="pf").value.to_numpy() > 1.02 * kalman).all()


def test_the_exact_filter_is_consistent(study):
    part = rows(study.table, problem="balloon", estimator="kalman", window="late")
    nees = rows(part, quantity="nees", statistic="mean").iloc[0]
    assert nees.low < 1 < nees.high or abs(nees.value - 1) < 0.1
    nis = rows(part, quantity="nis.fix", statistic="mean").iloc[0]
    assert abs(nis.value - 1) < 0.1
    for k, share in ((1, 0.6827), (2, 0.9545), (3, 0.9973)):
        inside = rows(part, quantity="nees", statistic=f"inside-{k}s").iloc[0]
        assert abs(inside.value - share) < 0.03


def test_table_agrees_with_the_runs(study):
    part = rows(study.runs, problem="radar", condition="nominal", estimator="ckf", window="late")
    assert list(part.run) == list(range(70))
    rms = part["position/rms"].to_numpy()
    row = rows(
        study.table, problem="radar", condition="nominal", estimator="ckf", window="late",
        quantity="position",
    ).set_index("statistic")  # fmt: skip
    assert row.loc["rmse", "value"] == pytest.approx(np.sqrt(np.mean(rms**2)), rel=1e-12)
    assert row.loc["rmse-typical", "value"] == pytest.approx(np.exp(np.mean(np.log(rms))))
    assert row.loc["max", "value"] == pytest.approx(part["position/max"].max())
    assert row.loc["rmse-typical", "low"] < row.loc["rmse-typical", "value"]
    assert row.loc["rmse-run95", "note"] == "open above: fewer than 72 runs"


def test_lost_readings_cost_accuracy_on_the_same_runs(study):
    part = rows(study.table, problem="radar", estimator="ckf", quantity="position")
    part = rows(part, statistic="rmse-typical", window="late").set_index("condition").value
    assert part["lossy"] > 1.05 * part["nominal"]


def test_a_run_from_the_file_again_computes_nothing(study):
    said = []
    again = flyoff.run(
        study.experiment, out=study.folder, jobs=1, figures=False,
        progress=lambda *what: said.append(what),
    )  # fmt: skip
    assert said == [("runs", said[0][2], said[0][2])]
    pd.testing.assert_frame_equal(again.table, study.table)


def test_figures_are_drawn_for_every_condition(study):
    names = sorted(f.name for f in (study.folder / "figures").iterdir())
    assert names == sorted(
        f"{what}-{condition}.png"
        for what in ("errors", "nees", "accuracy-cost")
        for condition in ("nominal", "lossy")
    )
    for file in (study.folder / "figures").iterdir():
        with Image.open(file) as picture:
            pixels = np.asarray(picture.convert("L"))
        assert min(pixels.shape) > 200
        assert (pixels < 100).mean() > 0.002, f"{file.name} is blank"


def test_readable_tables_mark_best_and_ties(study):
    balloon, _, radar, *_ = views(study)
    assert balloon.heads[2] == "position typical rms [m]"
    late = {row[1]: row[2] for row in balloon.rows if row[0] == "late"}
    assert late["ekf"].endswith("*")
    assert late["ckf"].endswith("~")
    assert late["kalman"].endswith("~")
    assert "[" in late["kalman"]
    assert not late["pf"].rstrip().endswith(("*", "~"))
    assert radar.notes == [LEGEND]
    text = markdown(study)
    assert "not flight clearance" in text
    assert "| estimator |" in text


def test_recorded_walk_shows_segments_and_no_interval(tmp_path):
    file = tmp_path / "walk.yaml"
    file.write_text(
        "format: 1\nexperiment: walk\nseed: 1\nruns: 4\n"
        "problems: {walk: {kind: foot-inertial, runs: 4}}\n"
        "estimators: {ekf: {family: linearised}}\n"
    )
    study = flyoff.run(file, out=tmp_path / "out", jobs=1, figures=False)
    part = rows(study.table, quantity="heel-horizontal", statistic="rmse")
    whole = rows(part, window="scored").iloc[0]
    segments = part[part.window != "scored"]
    assert list(segments.window) == [f"segment-{k}" for k in range(1, 7)]
    assert part.low.isna().all()
    assert part.high.isna().all()
    assert whole.value == pytest.approx(np.sqrt(np.mean(segments.value**2)))
    # a crude filter of this kind gives 0.17 and 0.22 m over 42 m (measured beforehand)
    assert 0.05 < whole.value < 0.2
    assert "under 20 segments no interval" in whole.note
    runs = study.runs[study.runs.window == "segment-2"]["heel-horizontal/rms"]
    assert segments.value.iloc[1] == pytest.approx(np.sqrt(np.mean(runs**2)))
    agreement = rows(study.table, quantity="attitude", statistic="rmse", window="scored").iloc[0]
    assert "never a gate" in agreement.note
    accuracy = next(iter(views(study)))
    assert accuracy.notes[0] == LEGEND_RECORDED
    assert not any(mark in cell for row in accuracy.rows for cell in row for mark in "*~")


def test_shipped_experiments_are_valid():
    from flyoff.study.config import load_experiment

    files = sorted((ROOT / "configs").glob("*.yaml"))
    assert files
    for file in files:
        assert load_experiment(file).estimators


def test_failed_runs_are_counted_with_their_reason(tmp_path):
    """Without redrawing, a second sensor update at one time loses definiteness in every run."""
    file = tmp_path / "x.yaml"
    file.write_text(
        "format: 1\nexperiment: x\nseed: 1\nruns: 5\n"
        "problems: {flight: {kind: body-attitude}}\n"
        "estimators:\n  ekf: {family: linearised}\n"
        "  stale: {family: sigma-point, points: {rule: cubature}, redraw: false}\n"
    )
    study = flyoff.run(file, out=tmp_path / "out", jobs=1)
    failed = rows(study.table, quantity="runs", statistic="failed").set_index("estimator")
    assert failed.loc["stale", "value"] == 1
    assert failed.loc["stale", "note"] == "5 of 5; 5 covariance not positive definite"
    assert failed.loc["ekf", "value"] == 0
    assert failed.loc["ekf", "high"] == pytest.approx(0.5218, abs=1e-4)  # 1 - 0.025^(1/5)
    typical = rows(study.table, estimator="stale", quantity="attitude", statistic="rmse-typical")
    assert typical.value.isna().all()
    assert typical.note.str.startswith("5 of 5 without a value").all()
    assert any("stale failed in 5 of 5" in note for view in views(study) for note in view.notes)
