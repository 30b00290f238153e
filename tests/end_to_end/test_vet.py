"""`flyoff vet` on families and on a user's file."""

from __future__ import annotations

import subprocess
import sys

import pytest

from flyoff import api
from flyoff.errors import UserError
from tests.conftest import ROOT

CUSTOM = ROOT / "configs" / "custom"

TRANSPOSED = '''
from flyoff.estimators.linearised import Linearised
from flyoff.registry import register


@register("estimator", "forgets-wraps")
class ForgetsWraps(Linearised):
    """Takes bearings as plain numbers."""

    def bind(self, model, streams, dtype=float):
        import dataclasses
        from flyoff.numerics.spaces import StateSpace, Vector

        inner = super().bind(model, streams, dtype)

        class Filter:
            start, predict = inner.start, inner.predict
            posterior, operations = inner.posterior, inner.operations

            def update(self, belief, sensor, z, u):
                plain = StateSpace(*(Vector(b.name, b.ambient) for b in sensor.space.blocks))
                return inner.update(belief, dataclasses.replace(sensor, space=plain), z, u)

        return Filter()
'''


def command(*args):
    return subprocess.run(
        [sys.executable, "-m", "flyoff.cli", "vet", *map(str, args)], capture_output=True, text=True
    )


@pytest.mark.parametrize("name", ["alpha_beta.py", "complementary.py"])
def test_worked_examples_keep_their_promises(name):
    done = command(CUSTOM / name)
    assert done.returncode == 0, done.stdout
    assert done.stdout.splitlines()[-1] == "no promise broken"
    assert done.stdout.count(" kept ") >= 6


def test_a_broken_filter_is_named_by_the_promise(tmp_path):
    file = tmp_path / "own.py"
    file.write_text(TRANSPOSED)
    done = command(file)
    assert done.returncode == 1
    lines = [line for line in done.stdout.splitlines() if " broken " in line]
    assert any("whole-turns" in line for line in lines), done.stdout


def test_a_family_by_name():
    verdicts = api.vet("kalman")["kalman"]
    assert {v.outcome for v in verdicts} <= {"kept", "not applicable"}
    assert sum(v.outcome == "kept" for v in verdicts) >= 15
    with pytest.raises(UserError, match="did you mean `kalman`"):
        api.vet("kalmann")


def test_a_file_without_an_estimator(tmp_path):
    file = tmp_path / "empty.py"
    file.write_text("x = 1\n")
    with pytest.raises(UserError, match="registers nothing"):
        api.vet(file)
