"""The files to copy work as they stand: one file a problem, estimator, point rule or score."""

from __future__ import annotations

import subprocess
import sys

PROGRAM = """
import importlib, sys
from flyoff.registry import discover
kinds = ("estimator", "point-rule", "problem", "score")
before = {kind: set(discover(kind)) for kind in kinds}
for name in ("estimators", "estimators.point_rules", "problems", "scores"):
    importlib.import_module(f"flyoff.{name}._skeleton")
for kind in kinds:
    new = set(discover(kind)) - before[kind]
    assert len(new) == 1 and new.pop().startswith("my-"), kind
import flyoff
study = flyoff.run(sys.argv[1], out=sys.argv[2], jobs=1, figures=False)
t = study.table.set_index(["estimator", "quantity", "statistic"]).value
assert t["kalman", "temperature", "rmse-typical"] < 0.5 * t["mine", "temperature", "rmse-typical"]
assert 0 < t["kalman", "temperature", "calm"] < 1
points = flyoff.estimators.point_rules._skeleton.MyRule().points(3)
assert points.points.shape == (3, 8)
print("fine")
"""

EXPERIMENT = """
format: 1
experiment: skeletons
seed: 1
runs: 20
problems: {room: {kind: my-problem}}
estimators:
  mine: {family: my-family, inflation: 1.1}
  kalman: {family: kalman}
"""


def test_skeletons(tmp_path):
    file = tmp_path / "x.yaml"
    file.write_text(EXPERIMENT)
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM, str(file), str(tmp_path / "out")],
        capture_output=True, text=True,
    )  # fmt: skip
    assert done.stdout.strip().endswith("fine"), done.stdout + done.stderr
