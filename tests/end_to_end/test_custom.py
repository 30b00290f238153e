"""A user's own estimators: one file, named in the config like any other."""

from __future__ import annotations

import math
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import flyoff
from flyoff.errors import UserError
from flyoff.study.custom import load_user_file
from tests.conftest import ROOT

CUSTOM = ROOT / "configs" / "custom"

PLAIN = '''
import numpy as np
from flyoff.estimators.one_run import OneRun
from flyoff.options import Positive, options
from flyoff.registry import register


@register("estimator", "{name}")
@options
class Plain(OneRun):
    """The Kalman filter, written for one run with plain matrices."""

    scale: Positive = 1.0

    def start(self, model, mean, cov):
        return [mean, cov]

    def predict(self, model, state, u, dt):
        x, p = state
        f = model.jacobian(x, u, dt)
        state[:] = model.step(x, u, dt), f @ p @ f.T + self.scale * model.noise(x, u, dt)
        return state

    def update(self, model, state, sensor, z, u):
        x, p = state
        {trouble}
        keep = ~np.isnan(z)
        h = sensor.jacobian(x, u)[keep]
        s = h @ p @ h.T + sensor.covariance(x, u)[np.ix_(keep, keep)]
        k = p @ h.T @ np.linalg.inv(s)
        y = sensor.residual(sensor.measure(x, u), z)[keep]
        return [model.retract(x, k @ y), p - k @ s @ k.T]

    def estimate(self, model, state):
        return state[0], state[1]
'''

BATCHED = """
from flyoff.estimators.linearised import Linearised
from flyoff.registry import register


@register("estimator", "breaks-late")
class BreaksLate(Linearised):
    def bind(self, model, streams, dtype=float):
        inner = super().bind(model, streams, dtype)

        class Filter:
            start, posterior, operations = inner.start, inner.posterior, inner.operations
            update = inner.update

            def predict(self, belief, u, dt):
                if belief.step == 20:
                    raise RuntimeError("twenty is enough")
                return inner.predict(belief, u, dt)

        return Filter()
"""

EXPERIMENT = """
format: 1
experiment: own
seed: 3
runs: 8
problems: {{balloon: {{kind: linear-tracking, parameters: {{steps: 30}}}}}}
estimators:
  kalman: {{family: kalman}}
  own: {{family: {family}}}
"""


def write(tmp_path: Path, code: str, family: str) -> tuple[Path, Path]:
    file, config = tmp_path / "own.py", tmp_path / "own.yaml"
    file.write_text(code)
    config.write_text(EXPERIMENT.format(family=family))
    return file, config


def failed(study, name="own"):
    t = study.table
    row = t[(t.estimator == name) & (t.statistic == "failed")].iloc[0]
    return row.value, row.note


def test_a_plain_kalman_filter_is_the_kalman_filter(tmp_path):
    file, config = write(tmp_path, PLAIN.format(name="plain-kf", trouble=""), "plain-kf")
    study = flyoff.run(config, out=tmp_path / "out", jobs=1, with_files=[file], figures=False)
    runs = study.runs[study.runs.window == "all"].set_index(["estimator", "run"])
    for key in ("position/rms", "nees/mean", "nis.fix/mean"):
        np.testing.assert_allclose(runs.loc["own", key], runs.loc["kalman", key], rtol=1e-9)
    assert (tmp_path / "out" / "own.py").read_bytes() == file.read_bytes()
    assert "own.py" in study.manifest["user files"]


def test_an_exception_ends_its_run_with_its_message(tmp_path):
    trouble = 'if abs(z[0] - x[0]) > 14: raise ValueError("too far off")'
    file, config = write(tmp_path, PLAIN.format(name="plain-fussy", trouble=trouble), "plain-fussy")
    study = flyoff.run(config, out=tmp_path / "out", jobs=1, with_files=[file], figures=False)
    share, note = failed(study)
    assert 0 < share < 1
    hits = round(8 * share)
    assert note == f"{hits} of 8; {hits} exception in the estimator (ValueError: too far off)"
    runs = study.runs[(study.runs.estimator == "own") & (study.runs.window == "all")]
    fine = runs[runs["runs/fault"] == 0].run
    both = study.runs[study.runs.window == "all"].set_index(["estimator", "run"])["position/rms"]
    np.testing.assert_allclose(both["own"][fine], both["kalman"][fine], rtol=1e-9)


@pytest.mark.parametrize(
    ("trouble", "message"),
    [
        ("return [x[:2], p]", "ValueError: mean must have shape (4,), got (2,)"),
        ("return [x, p[:2]]", "ValueError: covariance must have shape (4, 4), got (2, 4)"),
        ("return [x, -p]", ""),
        ("return None", "TypeError: 'NoneType' object is not subscriptable"),
    ],
)
def test_wrong_results_are_counted_failures(tmp_path, trouble, message):
    name = f"plain-{abs(hash(trouble)) % 10**8}"
    file, config = write(tmp_path, PLAIN.format(name=name, trouble=trouble), name)
    study = flyoff.run(config, out=tmp_path / "out", jobs=1, with_files=[file], figures=False)
    share, note = failed(study)
    assert share == 1
    assert message in note
    assert failed(study, "kalman")[0] == 0


def test_a_batched_filter_that_breaks_fails_its_batch_and_nothing_else(tmp_path):
    file, config = write(tmp_path, BATCHED, "breaks-late")
    study = flyoff.run(config, out=tmp_path / "out", jobs=1, with_files=[file], figures=False)
    assert failed(study) == (
        1.0,
        "8 of 8; 8 exception in the estimator (RuntimeError: twenty is enough)",
    )
    assert failed(study, "kalman")[0] == 0


def test_the_file_is_part_of_the_key(tmp_path):
    from flyoff.study.config import load_experiment
    from flyoff.study.plan import blocks, cells

    keys = []
    for k, scale in enumerate(("1.0", "2.0")):
        code = PLAIN.format(name=f"plain-key{k}", trouble="").replace("= 1.0", f"= {scale}")
        file, config = write(tmp_path, code, f"plain-key{k}")
        load_user_file(file)
        experiment = load_experiment(config)
        cell = next(c for c in cells(experiment) if c.estimator.name == "own")
        keys.append(blocks(experiment, cell)[0].key)
    assert keys[0] != keys[1]


def test_worked_examples_on_the_command_line(tmp_path):
    done = subprocess.run(
        [
            sys.executable, "-m", "flyoff.cli", "run", CUSTOM / "own-filters.yaml",
            "--with", CUSTOM / "complementary.py", "--with", CUSTOM / "alpha_beta.py",
            "--out", tmp_path / "out", "--only", "balloon", "--jobs", "2",
        ],
        capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert (tmp_path / "out" / "alpha_beta.py").exists()
    assert "alpha-beta" in done.stdout


def test_the_complementary_filter_converges_without_a_covariance(tmp_path):
    experiment = flyoff.api.load(
        CUSTOM / "own-filters.yaml", [CUSTOM / "complementary.py", CUSTOM / "alpha_beta.py"]
    )
    from dataclasses import replace

    experiment = flyoff.api.select(experiment, ["attitude"])
    few = tuple(replace(p, runs=3) for p in experiment.problems)
    study = flyoff.run(
        replace(experiment, problems=few), out=tmp_path / "out", jobs=1, figures=False
    )
    t = study.table[study.table.estimator == "complementary"].set_index(
        ["window", "quantity", "statistic"]
    )
    assert t.loc[("steady", "attitude", "rmse-median"), "value"] < 15
    nees = t.loc[("steady", "nees", "mean")]
    assert math.isnan(nees.value)
    assert nees.note.startswith("not assessable")
    assert math.isnan(t.loc[("steady", "nis.accelerometer", "mean"), "value"])


def test_kalata_gains():
    """P. Kalata 1984 (from memory): index 1 gives 0.75, 0.5; index 0.1 gives 0.36, 0.08."""
    load_user_file(CUSTOM / "alpha_beta.py")
    module = next(m for n, m in sys.modules.items() if n.startswith("flyoff_with_alpha_beta"))
    for index, alpha, beta in ((1, 0.75, 0.5), (0.1, 0.36, 0.08), (2, 0.854101966, 0.763932023)):
        assert module.gains(index) == pytest.approx((alpha, beta), abs=1e-8)


@pytest.mark.parametrize(
    ("code", "expected"),
    [
        ("x = 1 +", ":1: does not import: SyntaxError: invalid syntax"),
        ("a = 1\nb = a / 0\n", ":2: does not import: ZeroDivisionError: division by zero"),
        ("import nothing_of_the_kind", ":1: does not import: ModuleNotFoundError"),
    ],
)
def test_files_that_do_not_import(tmp_path, code, expected):
    file = tmp_path / "bad.py"
    file.write_text(code)
    with pytest.raises(UserError) as caught:
        load_user_file(file)
    assert str(caught.value).startswith(f"{file}{expected}")
    with pytest.raises(UserError, match="cannot be read"):
        load_user_file(tmp_path / "none.py")


def test_files_that_would_mislead(tmp_path):
    (tmp_path / "beside.py").write_text("K = 0.5\n")
    file = tmp_path / "own.py"
    file.write_text(f"import sys\nsys.path.insert(0, {str(tmp_path)!r})\nfrom beside import K\n")
    with pytest.raises(UserError, match="neither installed nor part of the file"):
        load_user_file(file)
    file.write_text("x = 1\n")
    with pytest.raises(UserError, match="registers nothing"):
        load_user_file(file)
    taken = PLAIN.format(name="linearised", trouble="")
    file.write_text(taken)
    with pytest.raises(UserError, match="`linearised` is already defined"):
        load_user_file(file)


def test_an_edited_file_takes_the_place_of_what_it_was(tmp_path):
    from flyoff.registry import lookup

    file = tmp_path / "own.py"
    for scale in ("1.0", "3.0"):
        code = PLAIN.format(name="plain-edited", trouble="").replace("= 1.0", f"= {scale}")
        file.write_text(code)
        load_user_file(file)
        assert lookup("estimator", "plain-edited")().scale == float(scale)
