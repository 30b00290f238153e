"""Copy this file to add a problem; it is not imported as it stands.

1. Copy it to ``problems/my_problem.py`` (no leading underscore).
2. Rename the class and the name in ``@register``; the name is what ``kind:`` says in YAML.
3. Fields are the YAML parameters; give each a unit. Inside, everything is SI.
4. Write the model functions with NumPy and `flyoff.numerics.algebra` (recipe: `models/model.py`).
5. `record` draws everything from `streams`, by role.

The example: a thermometer in a room whose temperature drifts.
"""

from __future__ import annotations

from functools import cache
from typing import Annotated

import numpy as np

from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.options import Count, Positive, Unit, options
from flyoff.problems.contract import Expectation, Quantity, SimulatedProblem, block_error
from flyoff.recordings import Recording, draw_start, simulate
from flyoff.registry import register

SPACE = StateSpace(Vector("temperature", 1, "K", 10.0))
READING = StateSpace(Vector("reading", 1, "K"))


@register("problem", "my-problem")
@options
class MyProblem(SimulatedProblem):
    """One line: what is estimated from what."""

    drift: Positive = 0.01
    sigma: Positive = 0.5
    step: Annotated[Positive, Unit("s")] = 1.0
    steps: Count = 100

    def filter_model(self) -> Model:
        """What the filters know."""
        return _model(self.drift, self.sigma, 1 / self.step)

    @property
    def duration(self) -> float:
        """Seconds."""
        return self.steps * self.step

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """What is scored."""
        return (Quantity("temperature", "K", block_error(SPACE, "temperature")),)

    @property
    def expected(self) -> tuple[Expectation, ...]:
        """A hypothesis about the outcome, with its source."""
        return (Expectation("all Gaussian filters agree", "R. E. Kalman 1960: it is linear"),)

    def record(self, streams: Streams, error_scale: float) -> Recording:
        """Draw one batch."""
        runs = len(streams)
        times = np.arange(self.steps + 1) * self.step
        start = np.full((1, runs), 293.0)
        inputs = np.zeros((self.steps, 0, runs))
        truth, readings = simulate(self.filter_model(), times, start, inputs, streams)
        prior = draw_start(SPACE, start, np.array([[4.0]]), streams, error_scale)
        return Recording(times, truth, inputs, readings, prior, streams.runs)


@cache
def _model(drift: float, sigma: float, rate: float) -> Model:
    def move(x, u, w, p, dt):  # type: ignore[no-untyped-def]
        return x.temperature + w.temperature

    def noise(p, dt):  # type: ignore[no-untyped-def]
        return ((p.drift**2 * dt,),)

    def read(x, u, p):  # type: ignore[no-untyped-def]
        return x.temperature

    def read_noise(x, u, p):  # type: ignore[no-untyped-def]
        return ((p.sigma**2,),)

    return trace(
        ModelSpec(
            space=SPACE,
            transition=move,
            noise=SPACE,
            noise_covariance=noise,
            sensors=(SensorSpec("thermometer", READING, read, read_noise, rate),),
            parameters={"drift": drift, "sigma": sigma},
            linear=True,
        )
    )
