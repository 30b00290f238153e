"""The catalogue is read off the code, and the documents keep in step with it."""

from __future__ import annotations

import json
import subprocess
import sys

import jsonschema
import pytest
import yaml

from flyoff.registry import discover
from flyoff.study.catalogue import KINDS, catalogue, experiment_schema, markdown
from tests.conftest import ROOT


@pytest.fixture(scope="module")
def items():
    # the package's own: other tests load users' files and skeletons into the same process
    own = {
        (kind, name)
        for kind in KINDS
        for name, cls in discover(kind).items()
        if cls.__module__.startswith("flyoff.") and not cls.__module__.endswith("_skeleton")
    }
    return [i for i in catalogue() if (i.kind, i.name) in own]


def command(*args):
    done = subprocess.run(
        [sys.executable, "-m", "flyoff.cli", "catalogue", *args], capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_every_thing_has_a_purpose_and_a_method_its_source(items):
    assert {i.kind for i in items} == set(KINDS)
    for item in items:
        assert 10 < len(item.purpose) < 140, item.name
        if item.kind in ("estimator", "point-rule", "problem"):
            assert item.cites, item.name


def test_defaults_units_and_rules(items):
    by_name = {(i.kind, i.name): {o.name: o for o in i.options} for i in items}
    sigma = by_name["problem", "coordinated-turn"]["range_sigma"]
    assert (sigma.default, sigma.unit, sigma.rule) == ("10", "m", "above 0")
    alpha = by_name["point-rule", "scaled"]["alpha"]
    assert (alpha.default, alpha.rule) == ("0.5", "above 0, at most 1")
    points = by_name["estimator", "sigma-point"]["points"]
    assert points.default == "{rule: scaled, alpha: 0.5, beta: 2, kappa: 0}"
    assert by_name["condition", "sensors.dropout"]["value"].default == "0"


def test_readme_names_everything(items):
    readme = (ROOT / "README.md").read_text()
    for item in items:
        if item.kind in ("estimator", "problem"):
            assert f"`{item.name}`" in readme, item.name
        if item.kind == "point-rule":
            assert f"rule: {item.name}" in readme
        if item.kind == "condition":
            section, key = item.name.split(".")
            assert section in readme
            assert key in readme
        for row in item.rows:
            assert f"`{row}`" in readme or row in ("mean", "median") or "inside" in row, row


def test_command(items):
    text = command()
    for item in items:
        assert item.name in text
    assert command("--markdown").strip().startswith("# Catalogue")
    assert json.loads(command("--schema"))["title"] == "flyoff experiment"
    assert "| `range_sigma` | `10` | m | above 0 |" in markdown()


@pytest.mark.parametrize("file", ["first-look.yaml"])
def test_shipped_experiments_fit_the_schema(file):
    data = yaml.safe_load((ROOT / "configs" / file).read_text())
    jsonschema.Draft202012Validator(experiment_schema()).validate(data)


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("estimators", "ekf", "family"), "linearized"),
        (("estimators", "ukf", "points", "alpha"), 3.0),
        (("problems", "attitude", "kind"), "body-atitude"),
        (("problems", "attitude", "parameters"), {"tilt_sgima": "1 deg"}),
        (("conditions", "rough-start", "prior"), {"eror_scale": 4}),
        (("runs",), 0),
        (("sweeps",), {}),
    ],
)
def test_the_schema_refuses_what_the_program_refuses(path, value):
    data = yaml.safe_load((ROOT / "configs" / "first-look.yaml").read_text())
    node = data
    for step in path[:-1]:
        node = node[step]
    node[path[-1]] = value
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.Draft202012Validator(experiment_schema()).validate(data)
