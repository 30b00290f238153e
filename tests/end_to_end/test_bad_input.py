"""What a user can get wrong: clear lines with file and line, the right exit code, no traceback."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from flyoff.errors import UserError
from flyoff.study.config import load_experiment

PLANTED = """\
format: 1
experiment: planted
seed: 1
runs: 0
problems:
  radar: {kind: coordinated-turm}
  flight: {kind: body-attitude, parameters: {tilt_sigma: 10}}
conditions:
  noisy: {filter: {R_scal: 4}}
estimators:
  ukf: {family: sigma-point, points: {rule: scaled, alpha: 3.0}}
  pf: {family: particle, particles: many}
"""


def command(*args: object) -> subprocess.CompletedProcess[str]:
    done = subprocess.run(
        [sys.executable, "-m", "flyoff.cli", *map(str, args)],
        capture_output=True, text=True, timeout=120,
    )  # fmt: skip
    assert "Traceback" not in done.stderr + done.stdout
    return done


def messages(tmp_path: Path, text: str) -> list[str]:
    file = tmp_path / "x.yaml"
    file.write_text(text)
    with pytest.raises(UserError) as caught:
        load_experiment(file)
    assert caught.value.code == 2
    return [line.removeprefix(f"{file}:") for line in caught.value.lines]


def test_six_planted_errors_give_six_lines_at_once(tmp_path):
    file = tmp_path / "planted.yaml"
    file.write_text(PLANTED)
    done = command("run", file)
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.splitlines() == [
        f"{file}:4: runs: must be at least 1, got 0",
        f"{file}:6: problems.radar.kind: unknown problem `coordinated-turm` "
        "(did you mean `coordinated-turn`?)",
        f"{file}:7: problems.flight.parameters.tilt_sigma: needs a unit, as in `10 rad`, got 10",
        f"{file}:9: conditions.noisy.filter.R_scal: unknown key (did you mean `R_scale`?)",
        f"{file}:11: estimators.ukf.points.alpha: must be at most 1, got 3.0",
        f"{file}:12: estimators.pf.particles: must be a whole number, got many",
    ]


GOOD = """\
format: 1
experiment: good
seed: 1
runs: 4
problems: {radar: {kind: coordinated-turn}}
estimators: {ekf: {family: linearised}}
"""


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ("format: 1", "format: 2", ["1: format: must be 1, got 2"]),
        ("format: 1\n", "", ["1: format: is required"]),
        ("seed: 1", "seed: -1", ["3: seed: must be at least 0, got -1"]),
        ("seed: 1", "seed: 1.5", ["3: seed: must be a whole number, got 1.5"]),
        ("runs: 4", "runs: true", ["4: runs: must be a whole number, got true"]),
        ("runs: 4", "runs: on", ["4: runs: must be a whole number, got on"]),
        (
            "seed: 1", "sede: 1",
            ["1: seed: is required", "3: sede: unknown key (did you mean `seed`?)"],
        ),
        (
            "experiment: good", "experiment: ../out",
            [
                "2: experiment: must be a name of letters, digits, `.`, `_`, `-`, at most 64, got "
                "../out"
            ],
        ),
        (
            "runs: 4", "runs: 4\nweights: {accuracy: 1}",
            ["5: weights: is not available in this version: remove it"],
        ),
        (
            "{family: linearised}", "{family: linearized}",
            ["6: estimators.ekf.family: unknown family `linearized` (did you mean `linearised`?)"],
        ),
        (
            "{family: linearised}", "{family: linearised, form: joesph}",
            [
                "6: estimators.ekf.form: must be joseph or short, got joesph "
                "(did you mean `joseph`?)"
            ],
        ),
        (
            "{family: linearised}", "{family: linearised, only: [rader]}",
            ["6: estimators.ekf.only: no problem `rader` (did you mean `radar`?)"],
        ),
        (
            "{family: linearised}", "{family: kalman}",
            [
                "6: estimators.ekf: cannot run on `radar`: the model is not linear; name its "
                "problems under `only`"
            ],
        ),
        (
            "{family: linearised}",
            "{family: sigma-point, points: {rule: symmetric, kappa: -5}}",
            [
                "6: estimators.ekf: cannot run on `radar`: `kappa` must be above -5 for 5 error "
                "states, got -5; name its problems under `only`"
            ],
        ),
        (
            "{family: linearised}", "{family: sigma-point, points: {rule: cubatur}}",
            ["6: estimators.ekf.points.rule: unknown rule `cubatur` (did you mean `cubature`?)"],
        ),
        (
            "{family: linearised}", "{family: sigma-point, points: {alpha: 0.1}}",
            ["6: estimators.ekf.points: needs 'rule', the name of a rule"],
        ),
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {range_sigma: 10 deg}}",
            [
                "5: problems.radar.parameters.range_sigma: must have a unit of length (m, km, cm, "
                "mm), got 10 deg"
            ],
        ),
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {range_sigma: -1 m}}",
            ["5: problems.radar.parameters.range_sigma: must be greater than 0, got -1 m"],
        ),
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {steps: .inf}}",
            ["5: problems.radar.parameters.steps: must be a whole number, got .inf"],
        ),
        (
            "runs: 4", "runs: 4\nwindows: {w: [5 s, 2 s]}",
            [
                "5: windows.w: must start before it ends and within the 200 s of `radar`, "
                "got 5 s to 2 s"
            ],
        ),
        (
            "runs: 4", "runs: 4\nwindows: {w: [5, end]}",
            ["5: windows.w: needs a unit, as in `5 s`, got 5"],
        ),
        (
            "runs: 4", "runs: 4\ndivergence: {error: {positon: 5 m}}",
            ["5: divergence.error.positon: no problem scores `positon` (did you mean `position`?)"],
        ),
        (
            "runs: 4", "runs: 4\ndivergence: {error: {position: 5}}",
            ["5: divergence.error.position: needs a unit, as in `5 m`, got 5"],
        ),
        (
            "runs: 4", "runs: 4\nfiltering: {late: replya}",
            [
                "5: filtering.late: must be apply, drop or replay, got replya "
                "(did you mean `replay`?)"
            ],
        ),
    ],
)  # fmt: skip
def test_message(tmp_path, old, new, expected):
    assert old in GOOD
    assert messages(tmp_path, GOOD.replace(old, new)) == expected


def test_both_ways_to_write_a_unit(tmp_path):
    def problem(parameters: str):
        file = tmp_path / "x.yaml"
        kind = f"{{kind: coordinated-turn, parameters: {{{parameters}}}}}"
        file.write_text(GOOD.replace("{kind: coordinated-turn}", kind))
        return load_experiment(file).problems[0].problem

    assert problem("range_sigma: 0.02 km").range_sigma == 20.0
    assert problem("range_sigma_m: 20").range_sigma == 20.0
    assert problem("turn_rate_deg_s: -3") == problem("turn_rate: -3 deg/s") == problem("")


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a: [1, 2", "1: not YAML: expected ',' or ']', but got '<stream end>'"),
        ("a: &x 1\nb: *x\n", "2: aliases (`*x`) are not allowed"),
        ("a: 1\na: 2\n", "2: a: given twice"),
        ("a: 1\n---\nb: 2\n", "2: more than one document"),
        (
            "a: !!python/object:os.system 1\n",
            "1: tags (`tag:yaml.org,2002:python/object:os.system`)",
        ),
        ("[" * 40 + "]" * 40, "1: nested deeper than 32 levels"),
        ("- 1\n", "1: must be a mapping of keys (format, experiment, ...)"),
        ("", "1: must be a mapping of keys (format, experiment, ...)"),
    ],
)
def test_not_an_experiment(tmp_path, text, expected):
    (line,) = messages(tmp_path, text)
    assert line.startswith(expected)


def test_files_that_cannot_be_read(tmp_path):
    done = command("run", tmp_path / "none.yaml")
    assert (done.returncode, done.stderr) == (2, f"{tmp_path / 'none.yaml'}: no such file\n")
    done = command("run", tmp_path)
    assert done.returncode == 2
    assert done.stderr.count("\n") == 1
    (tmp_path / "latin").write_bytes(b"a: \xff\n")
    done = command("run", tmp_path / "latin")
    assert done.stderr == f"{tmp_path / 'latin'}:1: is not UTF-8 text\n"
    (tmp_path / "big.yaml").write_text("# " + "x" * 1_000_001)
    done = command("run", tmp_path / "big.yaml")
    assert done.stderr == f"{tmp_path / 'big.yaml'}: larger than 1 MB\n"


def test_a_results_folder_that_cannot_be_written(tmp_path, small):
    blocker = tmp_path / "file"
    blocker.write_text("")
    done = command("run", small(), "--out", blocker / "sub")
    assert done.returncode == 1
    assert done.stderr.startswith(f"{blocker / 'sub'}: results cannot be written there (")
    assert done.stderr.count("\n") == 1


def test_usage(small):
    done = command("run", small(), "--only", "ekff")
    assert done.returncode == 2
    assert done.stderr == (
        "--only ekff: no problem, condition or estimator of that name (did you mean `ekf`?)\n"
    )
    assert command("run").returncode == 2
    assert command("rnu").returncode == 2
    assert command("run", small(), "--jobs", "0").returncode == 2


def test_plan_runs_nothing(small, tmp_path):
    out = tmp_path / "out"
    done = command("run", small(), "--plan", "--out", out)
    assert done.returncode == 0, done.stderr
    assert not out.exists()
    assert "8 cells" in done.stdout
    assert "nothing has been run or stored" in done.stdout


def test_sizes_that_cannot_fit_are_refused_before_anything_is_allocated(tmp_path):
    file = tmp_path / "x.yaml"
    big = "{kind: coordinated-turn, parameters: {steps: 1000000}}"
    file.write_text(
        GOOD.replace("{kind: coordinated-turn}", big).replace("runs: 4", "runs: 1000000")
    )
    for more in ((), ("--plan",)):
        done = command("run", file, "--out", tmp_path / "out", "--jobs", 8, *more)
        assert done.returncode == 2
        assert done.stderr.startswith(f"{file}: `ekf` on `radar` needs about ")
        assert "GB: take fewer steps, runs or particles" in done.stderr
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ("runs: 4", "runs: 100000000000", "4: runs: must be at most 1000000, got 100000000000"),
        (
            "{family: linearised}", "{family: particle, particles: 1000000000000}",
            "6: estimators.ekf.particles: must be at most 1000000, got 1000000000000",
        ),
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {steps: 1000000000}}",
            "5: problems.radar.parameters.steps: must be at most 1000000, got 1000000000",
        ),
        ("runs: 4", "runs: " + "9" * 5000, "4: runs: must be a whole number, got 999999"),
    ],
)  # fmt: skip
def test_absurd_numbers(tmp_path, old, new, line):
    (got,) = messages(tmp_path, GOOD.replace(old, new))
    assert got.startswith(line)


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {range_sigma_m: 5, range_sigma_km: 5}}",
            "5: problems.radar.parameters.range_sigma_km: unknown key",
        ),
        (
            "{family: linearised}}", "{family: linearised, only: [b]}, }\nruns: 4",
            "6: estimators.ekf.only: no problem `b`",
        ),
        ("runs: 4", "runs: 4\nconditions: {}", "6: problems.radar: no condition applies to it"),
        (
            "runs: 4", "runs: 4\nwindows: {w: [0.4 s, 0.6 s]}",
            "5: windows.w: holds no step of `radar` (1 s each)",
        ),
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {range_sigma: 1e999 m}}",
            "5: problems.radar.parameters.range_sigma: must be a finite number, got 1e999 m",
        ),
        (
            "{kind: coordinated-turn}",
            "{kind: coordinated-turn, parameters: {range_sigma: null}}",
            "5: problems.radar.parameters.range_sigma: must be a number with a unit of length, "
            "got nothing",
        ),
        (
            "{family: linearised}",
            "{family: sigma-point, points: {rule: scaled, alpha: 1e-300}}",
            "6: estimators.ekf: cannot run on `radar`: ",
        ),
    ],
)  # fmt: skip
def test_what_a_second_reader_found(tmp_path, old, new, line):
    text = GOOD.replace(old, new)
    if text.count("runs: 4") > 1:
        text = text[: text.rindex("runs: 4")]
    assert messages(tmp_path, text)[0].startswith(line)


def test_only_that_leaves_nothing(small):
    done = command("run", small(), "--only", "radar", "--only", "kalman")
    assert done.returncode == 2
    assert done.stderr == "--only radar kalman: no cell of the experiment is left\n"


def test_a_device_is_not_read():
    done = command("run", "/dev/zero")
    assert (done.returncode, done.stderr) == (2, "/dev/zero: is not a file\n")
