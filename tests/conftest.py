"""Shared pieces of the tests."""

from __future__ import annotations

from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]

SMALL = """\
format: 1
experiment: small
seed: 7
runs: {runs}
windows: {{early: [0 s, 10 s], late: [10 s, end]}}
divergence: {{error: {{position: 300 m}}, hold: 5 s, converge_by: 10 s}}
problems:
  balloon: {{kind: linear-tracking, parameters: {{steps: 30}}}}
  radar: {{kind: coordinated-turn, parameters: {{steps: 40}}}}
conditions:
  nominal: {{}}
  lossy: {{sensors: {{dropout: 30 %}}, only: [radar]}}
estimators:
  ekf: {{family: linearised}}
  ckf: {{family: sigma-point, points: {{rule: cubature}}}}
  pf: {{family: particle, particles: {particles}, only: [balloon]}}
  kalman: {{family: kalman, only: [balloon]}}
"""


@pytest.fixture
def small(tmp_path: Path):
    """Write a small experiment file: two problems, four estimators."""

    def write(runs: int = 70, particles: int = 100, name: str = "small.yaml") -> Path:
        file = tmp_path / name
        file.write_text(SMALL.format(runs=runs, particles=particles))
        return file

    return write
