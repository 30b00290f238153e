"""EKF and UKF on coordinated-turn against a strong loop over filterpy, 200 runs x 200 steps."""

from __future__ import annotations

import numpy as np

from benchmarks import filterpy_loop
from benchmarks.side_by_side import HEADER, Result, compare
from flyoff.estimators.linearised import Linearised
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.numerics.streams import Streams
from flyoff.problems.coordinated_turn import CoordinatedTurn

# what the rows must reach; printed, and checked by hand: never a timed test
WANTED = {"ekf": 40.0, "ukf": 100.0}
RUNS, RIVAL_RUNS = 200, 3


def run() -> list[Result]:
    problem = CoordinatedTurn()
    streams = Streams(1, "timing", "benchmark", range(RUNS))
    recording = problem.record(streams, 1.0)
    model = problem.filter_model()
    sensor = model.sensors["radar"]
    readings = recording.readings[0].values
    start, cov = recording.prior.moments()
    q = model.added_noise(start, recording.inputs[0], 1.0)[:, :, 0]
    r = sensor.covariance(start, recording.inputs[0], model.parameters)[:, :, 0]
    rows = [filterpy_loop.run_ekf, filterpy_loop.run_ukf]
    results = []
    for name, estimator, rival in zip(WANTED, (Linearised(), SigmaPoint()), rows, strict=True):
        bound = estimator.bind(model, streams)

        def ours(bound=bound):
            with np.errstate(all="ignore"):
                belief = bound.start(recording.prior)
                for k in range(recording.steps):
                    u = recording.inputs[k]
                    belief = bound.predict(belief, u, 1.0)
                    belief, _ = bound.update(belief, sensor, readings[k], u)
            return belief.mean

        def theirs(rival=rival):
            few = np.moveaxis(readings[:, :, :RIVAL_RUNS], -1, 0)
            return rival(start[:, :RIVAL_RUNS].T, cov[:, :, 0], few, q, r, 1.0)

        # the same answer, or the race means nothing
        gap = np.abs(ours()[:, :RIVAL_RUNS].T - theirs()) / (1 + np.abs(theirs()))
        assert gap.max() < 1e-6, f"{name} and the rival differ by {gap.max():.1e}"
        steps = recording.steps
        results.append(
            compare(
                f"coordinated-turn {name}, {RUNS} runs", ours, RUNS * steps, theirs,
                RIVAL_RUNS * steps,
            )
        )  # fmt: skip
    return results


def main() -> None:
    print(HEADER)
    for result, wanted in zip(run(), WANTED.values(), strict=True):
        print(f"{result.line()}   (wanted: at least {wanted:.0f}x)")
