"""Copy this file to add an estimator family; it is not imported as it stands.

1. Copy it to ``estimators/my_family.py`` (no leading underscore).
2. Rename the class and the name in ``@register``; the name is what ``family:`` says in YAML.
3. Turn the fields into your options: each has a type, limits, a default; they are the YAML keys.
4. Fill in the filter's methods. `contract.py` says what each promises.

The example is a filter that predicts and never corrects: it runs, and it is useless.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from flyoff.estimators.contract import Gaussian, Innovation
from flyoff.estimators.gaussian_update import correct, missing_components
from flyoff.estimators.linearised import GaussianBelief, gaussian_start
from flyoff.models.model import Model, Sensor
from flyoff.models.priors import Prior
from flyoff.numerics import linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array
from flyoff.numerics.streams import Streams
from flyoff.options import Positive, options
from flyoff.registry import register


@register("estimator", "my-family")
@options
class MyFamily:
    """One line: what it is (author, year).

    Attributes
    ----------
    inflation : factor on the predicted covariance
    """

    inflation: Positive = 1.0

    def suits(self, model: Model) -> str | None:
        """None, or why it cannot run on the model."""
        return None

    def batch(self, model: Model) -> int:
        """Runs evaluated at once."""
        return 512

    def bind(self, model: Model, streams: Streams, dtype: Any = np.float64) -> _MyFilter:
        """A filter for the runs of `streams`."""
        return _MyFilter(self, model, np.dtype(dtype))


class _MyFilter:
    def __init__(self, choice: MyFamily, model: Model, dtype: np.dtype) -> None:
        self.choice, self.model, self.dtype = choice, model, dtype

    def start(self, prior: Prior) -> GaussianBelief:
        return gaussian_start(prior, self.dtype)

    def predict(self, belief: GaussianBelief, u: Array, dt: float) -> GaussianBelief:
        mean, f, q = self.model.linearise(belief.mean, u, dt)
        cov = linalg.product_t(linalg.product(f, belief.cov), f) + q
        cov = self.dtype.type(self.choice.inflation) * linalg.symmetrise(cov)
        return GaussianBelief(belief.step + 1, belief.fault, mean, cov)

    def update(
        self, belief: GaussianBelief, sensor: Sensor, z: Array, u: Array
    ) -> tuple[GaussianBelief, Innovation]:
        p = self.model.parameters.astype(self.dtype, copy=False)
        predicted, h = sensor.linearise(belief.mean, u, p)
        missing = missing_components(z, belief.mean.shape[1])
        cross = sensor.project(h, belief.cov)
        s = sensor.spread(cross, h) + sensor.covariance(belief.mean, u, p)
        c = correct(cross, s, sensor.space.local(predicted, z), missing)
        # here the correction c.delta, c.gain, c.half would be used
        return belief, c.innovation

    def posterior(self, belief: GaussianBelief) -> Gaussian:
        return Gaussian(belief.mean, belief.cov)

    def operations(self, readings: Mapping[str, float]) -> Counts:
        return self.model.linear_tape.counts()
