"""The rules of the house."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from tests.conftest import ROOT

SOURCES = sorted((ROOT / "src" / "flyoff").rglob("*.py"))


def test_layers():
    """Lower never imports higher; an estimator never sees a problem."""
    done = subprocess.run(
        [
            Path(sys.executable).with_name("lint-imports"),
            "--no-cache",
            "--config",
            ROOT / "pyproject.toml",
        ],
        capture_output=True, text=True, cwd=ROOT,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout


@pytest.mark.parametrize(
    "command", [["ruff", "check", "."], ["ruff", "format", "--check", "."], ["mypy"]]
)
def test_tools_are_clean(command):
    done = subprocess.run(
        [sys.executable, "-m", *command], capture_output=True, text=True, cwd=ROOT
    )
    assert done.returncode == 0, done.stdout[-3000:]


def test_help_loads_no_numerical_package():
    """`flyoff --help` answers in well under half a second because it imports next to nothing."""
    code = (
        "import sys, flyoff.cli\n"
        "heavy = {'numpy', 'scipy', 'casadi', 'pandas', 'matplotlib', 'pydantic', 'yaml'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.stdout.strip() == "[]", done.stdout + done.stderr


def test_a_mistake_is_answered_without_pandas_and_figures():
    code = (
        "import sys; from pathlib import Path; from flyoff import api\n"
        f"api.load({str(ROOT / 'configs' / 'first-look.yaml')!r})\n"
        "print(sorted({'pandas', 'matplotlib', 'seaborn'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.stdout.strip() == "[]", done.stdout + done.stderr


def test_top_level_holds_what_the_project_allows():
    done = subprocess.run(["git", "ls-files"], capture_output=True, text=True, cwd=ROOT)
    if done.returncode != 0:
        pytest.skip("not a git checkout")
    tops = {line.split("/")[0] for line in done.stdout.splitlines()}
    allowed = {
        "README.md", "DEVELOPERS.md", "pyproject.toml", "src", "benchmarks", "configs", "tests",
        "results", "LICENSE",
    }  # fmt: skip
    assert {t for t in tops if not t.startswith(".")} <= allowed


@pytest.mark.parametrize("file", SOURCES, ids=lambda f: f.stem)
def test_no_global_random_numbers(file):
    """Every draw comes from a keyed stream, or from a generator seeded on the spot."""
    text = file.read_text()
    assert not re.search(r"np\.random\.(seed|rand|randn|normal|uniform|standard_normal)\b", text)
    assert "default_rng()" not in text


def test_models_never_name_an_estimator():
    words = re.compile(r"\b(ekf|ukf|kalman filter|sigma.point|particle filter)\b", re.IGNORECASE)
    for file in SOURCES:
        if "models" in file.parts or file.name == "recordings.py":
            assert not words.search(file.read_text()), file
