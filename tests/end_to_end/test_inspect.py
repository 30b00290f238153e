"""One run opened up is the run that was counted."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from PIL import Image

import flyoff
from flyoff.checks.inspection import inspect_run
from flyoff.errors import UserError

ROUGH = """
format: 1
experiment: rough
seed: 5
runs: 70
divergence: {error: {attitude: 20 deg}, hold: 1 s, converge_by: 10 s}
problems: {flight: {kind: body-attitude}}
conditions:
  nominal: {}
  rough: {prior: {error_scale: 5}, sensors: {dropout: 20 %}}
estimators:
  ekf: {family: linearised}
  stale: {family: sigma-point, points: {rule: cubature}, redraw: false}
"""


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    top = tmp_path_factory.mktemp("inspect")
    (top / "x.yaml").write_text(ROUGH)
    return flyoff.run(top / "x.yaml", out=top / "out", jobs=2, figures=False)


def test_any_run_repeats_to_the_bit(study):
    runs = study.runs[(study.runs.condition == "rough") & (study.runs.estimator == "ekf")]
    runs = runs.set_index(["window", "run"])
    for run in (0, 33, 69):
        found = inspect_run(study.folder, "flight", "ekf", run, "rough").scores
        stored = runs.loc[("all", run)]
        for key in ("attitude/rms", "gyro-bias/max", "nees/mean", "nis.magnetometer/mean"):
            assert found[f"all/{key}"] == stored[key], key
        assert found["all/runs/never-converged"] == stored["runs/never-converged"]


def test_a_lost_run_on_the_command_line(study):
    runs = study.runs[(study.runs.condition == "rough") & (study.runs.estimator == "ekf")]
    lost = runs[runs["runs/never-converged"] == 1].run
    assert len(lost), "a start five times rougher than announced loses runs"
    run = int(lost.iloc[0])
    done = subprocess.run(
        [
            sys.executable, "-m", "flyoff.cli", "inspect", str(study.folder), "--problem", "flight",
            "--estimator", "ekf", "--condition", "rough", "--run", str(run),
        ],
        capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "never converged within the bound in time" in done.stdout
    table = pd.read_csv(study.folder / "inspect" / f"flight-rough-ekf-run{run}.csv")
    assert len(table) == 1000
    error = table[[f"error attitude[{k}] [rad]" for k in range(3)]].to_numpy()
    np.testing.assert_allclose(
        np.linalg.norm(error, axis=1), table["size attitude [rad]"], rtol=1e-6
    )
    lost_share = table["innovation accelerometer.specific_force[0] [m/s^2]"].isna().mean()
    assert lost_share == pytest.approx(0.2, abs=0.05)
    with Image.open(study.folder / "inspect" / f"flight-rough-ekf-run{run}.png") as picture:
        assert min(picture.size) > 500


def test_a_failed_run_says_why_and_when(study):
    found = inspect_run(study.folder, "flight", "stale", 3, "nominal")
    assert found.verdicts == ["failed at 0.04 s: covariance not positive definite"]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (
            ("fligth", "ekf", 0, None),
            "--problem fligth: not in the experiment (did you mean `flight`?)",
        ),
        (("flight", "efk", 0, None), "--estimator efk: not on `flight` (did you mean `ekf`?)"),
        (("flight", "ekf", 70, None), "--run 70: `flight` has runs 0 to 69"),
        (
            ("flight", "ekf", 0, "rouhg"),
            "--condition rouhg: not on `flight` (did you mean `rough`?)",
        ),
    ],
)  # fmt: skip
def test_mistakes(study, arguments, message):
    with pytest.raises(UserError) as caught:
        inspect_run(study.folder, *arguments)
    assert str(caught.value) == message
