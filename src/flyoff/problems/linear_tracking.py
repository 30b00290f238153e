"""Linear tracking of a drifting balloon by position fixes: the exact answer is known.

Nearly constant velocity with correlated white acceleration (full Q), correlated initial errors and
fixes of which single components are missing at random. The Kalman filter is exact, so every other
filter can be held against it.
"""

from __future__ import annotations

from functools import cache
from typing import Annotated

import numpy as np
from pydantic import Field

from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.numerics import discretise
from flyoff.numerics.spaces import StateSpace, Vector
from flyoff.numerics.streams import Streams
from flyoff.options import Count, Fraction, Positive, Unit, options
from flyoff.problems.contract import Expectation, Quantity, SimulatedProblem, block_error
from flyoff.recordings import Recording, draw_start, simulate
from flyoff.registry import register

__all__ = ["LinearTracking"]

SPACE = StateSpace(Vector("position", 2, "m", 100.0), Vector("velocity", 2, "m/s", 5.0))
FIX = StateSpace(Vector("fix", 2, "m"))
_START = np.array([0.0, 0.0, 3.0, -1.0])


@register(
    "problem",
    "linear-tracking",
    cites=(
        "Y. Bar-Shalom, X. R. Li, T. Kirubarajan, 'Estimation with Applications to "
        "Tracking and Navigation', Wiley 2001, ch. 6"
    ),
)
@options
class LinearTracking(SimulatedProblem):
    """A drifting balloon, position fixes with missing components; the Kalman filter is exact."""

    acceleration_density: Annotated[Positive, Unit("m^2/s^3")] = 0.02
    acceleration_correlation: Annotated[float, Field(strict=True, gt=-1, lt=1)] = 0.4
    fix_sigma: Annotated[Positive, Unit("m")] = 4.0
    fix_correlation: Annotated[float, Field(strict=True, gt=-1, lt=1)] = 0.3
    missing: Annotated[Fraction, Unit("1")] = 0.2
    position_sigma: Annotated[Positive, Unit("m")] = 20.0
    velocity_sigma: Annotated[Positive, Unit("m/s")] = 2.0
    start_correlation: Annotated[float, Field(strict=True, gt=-1, lt=1)] = 0.5
    step: Annotated[Positive, Unit("s")] = 1.0
    steps: Count = 100

    def filter_model(self) -> Model:
        """Linear, and the same as the truth model."""
        return _model(
            self.acceleration_density,
            self.acceleration_correlation,
            self.fix_sigma,
            self.fix_correlation,
            1 / self.step,
        )

    @property
    def duration(self) -> float:
        """Seconds."""
        return self.steps * self.step

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """Position and velocity."""
        return (
            Quantity("position", "m", block_error(SPACE, "position")),
            Quantity("velocity", "m/s", block_error(SPACE, "velocity")),
        )

    @property
    def expected(self) -> tuple[Expectation, ...]:
        """Every Gaussian filter is the Kalman filter here."""
        return (
            Expectation(
                "linearised, sigma-point and Kalman filters agree to rounding; a particle filter "
                "comes close from above",
                "R. E. Kalman, J. Basic Eng. 82:35-45, 1960: the filter is exact",
            ),
        )

    def start_covariance(self) -> np.ndarray:
        """P0 (4, 4): position and velocity of each axis are correlated."""
        sd = np.array([self.position_sigma] * 2 + [self.velocity_sigma] * 2)
        corr = np.eye(4)
        corr[0, 2] = corr[2, 0] = corr[1, 3] = corr[3, 1] = self.start_correlation
        return corr * np.outer(sd, sd)

    def record(self, streams: Streams, error_scale: float) -> Recording:
        """Draw one batch."""
        model = self.filter_model()
        runs = len(streams)
        times = np.arange(self.steps + 1) * self.step
        prior = draw_start(SPACE, _START[:, None], self.start_covariance(), streams, error_scale)
        start = np.repeat(_START[:, None], runs, axis=1)
        inputs = np.zeros((self.steps, 0, runs))
        truth, readings = simulate(model, times, start, inputs, streams)
        (fix,) = readings
        lost = streams.uniform("missing:fix", fix.values.shape[:2]) < self.missing
        fix.values[lost] = np.nan
        return Recording(times, truth, inputs, readings, prior, streams.runs)


@cache
def _model(q: float, rho: float, sigma: float, rho_fix: float, rate: float) -> Model:
    def move(x, u, w, p, dt):  # type: ignore[no-untyped-def]
        (px, py), (vx, vy) = x.position, x.velocity
        (a, b), (c, d) = w.position, w.velocity
        return ((px + vx * dt + a, py + vy * dt + b), (vx + c, vy + d))

    def noise(p, dt):  # type: ignore[no-untyped-def]
        (a, b), (_, c) = discretise.white_acceleration(p.q, dt)
        r = p.rho
        return (
            (a, r * a, b, r * b),
            (r * a, a, r * b, b),
            (b, r * b, c, r * c),
            (r * b, b, r * c, c),
        )

    def see(x, u, p):  # type: ignore[no-untyped-def]
        return x.position

    def fix_noise(x, u, p):  # type: ignore[no-untyped-def]
        v = p.sigma**2
        return ((v, p.rho_fix * v), (p.rho_fix * v, v))

    return trace(
        ModelSpec(
            space=SPACE,
            transition=move,
            noise=SPACE,
            noise_covariance=noise,
            sensors=(SensorSpec("fix", FIX, see, fix_noise, rate),),
            parameters={"q": q, "rho": rho, "sigma": sigma, "rho_fix": rho_fix},
            linear=True,
        )
    )
