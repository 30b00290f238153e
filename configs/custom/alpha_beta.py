"""An alpha-beta tracker with gains from the tracking index, for one run, without a covariance.

P. Kalata, "The tracking index: a generalized parameter for alpha-beta and alpha-beta-gamma target
trackers", IEEE Trans. Aerosp. Electron. Syst. 20(2):174-182, 1984 (formulas from memory).
"""

from __future__ import annotations

import math

import numpy as np

from flyoff.estimators.one_run import OneRun
from flyoff.options import Positive, options
from flyoff.registry import register


def gains(index: float) -> tuple[float, float]:
    """Steady-state alpha and beta of a tracking index."""
    r = (4 + index - math.sqrt(8 * index + index**2)) / 4
    alpha = 1 - r * r
    return alpha, 2 * (2 - alpha) - 4 * math.sqrt(1 - alpha)


@register("estimator", "alpha-beta")
@options
class AlphaBeta(OneRun):
    """Fixed-gain tracker of position and velocity from position fixes; keeps no covariance."""

    index: Positive = 0.035

    def suits(self, model):
        """Position and velocity of equal size, fixes of the position."""
        size = {b.name: b.ambient for b in model.space.blocks}
        fits = size.get("position") is not None and size == {
            "position": size.get("position"),
            "velocity": size.get("position"),
        }
        return None if fits and "fix" in model.sensors else "it needs position fixes only"

    def start(self, model, mean, cov):
        """State and the step length, which the correction needs."""
        return {"x": mean, "dt": 1.0}

    def predict(self, model, state, u, dt):
        """Straight on."""
        state["x"] = model.step(state["x"], u, dt)
        state["dt"] = dt
        return state

    def update(self, model, state, sensor, z, u):
        """Correct each axis whose fix arrived."""
        alpha, beta = gains(self.index)
        residual = sensor.residual(sensor.measure(state["x"], u), z)
        residual = np.where(np.isnan(residual), 0.0, residual)
        delta = np.concatenate([alpha * residual, beta / state["dt"] * residual])
        state["x"] = model.retract(state["x"], delta)
        return state

    def estimate(self, model, state):
        """Mean only."""
        return state["x"], None
