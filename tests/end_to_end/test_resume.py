"""Nothing is lost and nothing depends on how the work was split."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from tests.conftest import SMALL

FLYOFF = [sys.executable, "-m", "flyoff.cli"]


def run(*args: object, **kwargs: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*FLYOFF, "run", *map(str, args)], capture_output=True, text=True, timeout=300, **kwargs
    )


def without_cost(folder: Path) -> list[str]:
    lines = (folder / "table.csv").read_text().splitlines()
    return [line for line in lines if ",step,time" not in line]


@pytest.fixture(scope="module")
def reference(tmp_path_factory):
    folder = tmp_path_factory.mktemp("reference")
    file = folder / "experiment.yaml"
    file.write_text(SMALL.format(runs=130, particles=1000))
    done = run(file, "--out", folder / "out", "--jobs", 1)
    assert done.returncode == 0, done.stderr
    return file, without_cost(folder / "out")


def start(file: Path, out: Path) -> subprocess.Popen[str]:
    def listen() -> None:
        # a test run in the background may have been started with the signal ignored
        signal.signal(signal.SIGINT, signal.SIG_DFL)

    process = subprocess.Popen(
        [*FLYOFF, "run", str(file), "--out", str(out), "--jobs", "2"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, preexec_fn=listen,
    )  # fmt: skip
    deadline = time.monotonic() + 120
    while not any((out / "blocks").rglob("*.block")):
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.02)
    return process


def test_killed_in_mid_run_the_same_command_goes_on(reference, tmp_path):
    file, wanted = reference
    out = tmp_path / "killed"
    process = start(file, out)
    process.kill()
    process.communicate()
    assert not (out / "table.csv").exists()
    kept = {p.name: p.stat().st_mtime_ns for p in (out / "blocks").rglob("*.block")}
    assert kept
    # the workers end with their parent and leave the folder alone
    time.sleep(1.0)
    kept = {p.name: p.stat().st_mtime_ns for p in (out / "blocks").rglob("*.block")}
    done = run(file, "--out", out, "--jobs", 2)
    assert done.returncode == 0, done.stderr
    assert without_cost(out) == wanted
    now = {p.name: p.stat().st_mtime_ns for p in (out / "blocks").rglob("*.block")}
    assert {name: now[name] for name in kept} == kept, "stored blocks were computed again"
    assert not list((out / "blocks").rglob("*.part"))


def test_interrupted_it_says_how_to_go_on(reference, tmp_path):
    file, wanted = reference
    out = tmp_path / "interrupted"
    process = start(file, out)
    process.send_signal(signal.SIGINT)
    stdout, stderr = process.communicate(timeout=60)
    assert process.returncode == 1
    assert stderr.splitlines() == [
        "stopped; what is finished is stored: the same command goes on from there"
    ]
    assert "Traceback" not in stdout
    assert run(file, "--out", out).returncode == 0
    assert without_cost(out) == wanted


def test_a_damaged_block_is_found_and_computed_again(reference, tmp_path):
    file, wanted = reference
    out = tmp_path / "damaged"
    assert run(file, "--out", out).returncode == 0
    first, second = sorted((out / "blocks").rglob("*.block"))[:2]
    raw = bytearray(first.read_bytes())
    raw[len(raw) // 2] ^= 1
    first.write_bytes(raw)
    second.write_bytes(second.read_bytes()[:-7])
    done = run(file, "--out", out)
    assert done.returncode == 0
    assert "2 damaged block(s) were found and computed again" in done.stdout
    assert without_cost(out) == wanted


def test_two_runs_on_one_folder(small, tmp_path):
    from flyoff.study.store import Store

    out = tmp_path / "held"
    store = Store(out)
    store.create()
    with store.lock():
        done = run(small(), "--out", out)
    assert done.returncode == 1
    assert done.stderr.strip() == (
        f"{out}: another run is writing there; wait for it, or choose another folder with --out"
    )


def test_a_changed_file_never_mixes_with_old_blocks(small, tmp_path):
    out = tmp_path / "out"
    file = small(runs=20)
    assert run(file, "--out", out).returncode == 0
    first = without_cost(out)
    file.write_text(file.read_text().replace("seed: 7", "seed: 8"))
    assert run(file, "--out", out).returncode == 0
    assert without_cost(out) != first
    file.write_text(file.read_text().replace("seed: 8", "seed: 7"))
    assert run(file, "--out", out).returncode == 0
    assert without_cost(out) == first


def test_more_runs_keep_the_first_ones(small, tmp_path):
    import flyoff

    few = flyoff.run(small(runs=64), out=tmp_path / "out", jobs=1, figures=False)
    said = []
    more = flyoff.run(
        small(runs=70), out=tmp_path / "out", jobs=1, figures=False,
        progress=lambda what, done, total: said.append((what, done, total)),
    )  # fmt: skip
    assert said[0] == ("runs", 8, 16), "the stored chunks of 64 runs were not used"
    key = ["problem", "condition", "estimator", "window", "run"]
    both = few.runs.merge(more.runs, on=key, suffixes=("_few", "_more"))
    assert len(both) == len(few.runs)
    a, b = both["position/rms_few"].to_numpy(), both["position/rms_more"].to_numpy()
    assert ((a == b) | ((a != a) & (b != b))).all()


@pytest.mark.skipif(os.name != "posix", reason="signals")
def test_workers_end_with_a_killed_parent(reference, tmp_path):
    file, _ = reference
    process = start(file, tmp_path / "orphans")
    children = subprocess.run(
        ["ps", "-o", "pid=", "--ppid", str(process.pid)], capture_output=True, text=True
    ).stdout.split()
    assert children
    process.kill()
    process.communicate()
    deadline = time.monotonic() + 10
    while any(Path(f"/proc/{pid}").exists() for pid in children):
        assert time.monotonic() < deadline, "a worker outlived its parent"
        time.sleep(0.1)
