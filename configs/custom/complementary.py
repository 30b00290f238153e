"""A complementary attitude filter on rotations, for one run, without a covariance.

Gyro integration corrected towards the directions of gravity and of the magnetic field, with bias
estimation: R. Mahony, T. Hamel, J.-M. Pflimlin, "Nonlinear complementary filters on the special
orthogonal group", IEEE Trans. Automat. Contr. 53(5):1203-1218, 2008, eq. 48 (explicit form).
"""

from __future__ import annotations

import numpy as np

from flyoff.estimators.one_run import OneRun
from flyoff.options import NonNegative, options
from flyoff.registry import register


@register("estimator", "complementary")
@options
class Complementary(OneRun):
    """Complementary attitude filter with gyro-bias estimation; keeps no covariance."""

    gravity_gain: NonNegative = 0.6
    field_gain: NonNegative = 6.0
    bias_gain: NonNegative = 0.1

    def suits(self, model):
        """Attitude problems with a gyro as input."""
        blocks = model.space.ambient
        fits = "attitude" in blocks and "gyro_bias" in blocks
        return None if fits else "it needs the blocks `attitude` and `gyro_bias`"

    def start(self, model, mean, cov):
        """The first estimate; its covariance is not used."""
        return mean

    def predict(self, model, x, u, dt):
        """Integrate the gyro."""
        return model.step(x, u, dt)

    def update(self, model, x, sensor, z, u):
        """Turn towards the measured direction and let the bias follow."""
        if np.isnan(z).any():
            return x
        seen = z / np.linalg.norm(z)
        expected = sensor.measure(x, u)
        expected = expected / np.linalg.norm(expected)
        gain = self.gravity_gain if sensor.name == "accelerometer" else self.field_gain
        turn = np.cross(seen, expected) * gain / sensor.rate  # gains are per second
        delta = np.zeros(model.space.d)
        delta[model.space.tangent["attitude"]] = turn
        delta[model.space.tangent["gyro_bias"]] = -self.bias_gain * turn
        return model.retract(x, delta)

    def estimate(self, model, x):
        """Mean only."""
        return x, None
