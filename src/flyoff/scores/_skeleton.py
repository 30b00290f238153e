"""Copy this file to add a score; it is not imported as it stands.

A score keeps numbers of every run; which table rows follow from them it says as data. The example
keeps the share of time that an error stays below a tenth of its own largest value.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from flyoff.filtering import Outcome
from flyoff.models.model import Model
from flyoff.numerics.spaces import Array
from flyoff.problems.contract import Quantity
from flyoff.registry import register
from flyoff.scores.accuracy import ErrorTrack
from flyoff.scores.contract import Context, Divergence, PlainScore, Statistic


@register("score", "my-score")
class MyScore(PlainScore):
    """One line: what it measures."""

    def __init__(self, context: Context) -> None:
        self.context = context
        # a track follows the time loop; ask for an existing one, or write your own class with
        # __init__(context) and observe(step)
        self.track = context.track(ErrorTrack)

    def per_run(self, outcome: Outcome) -> dict[str, Array]:
        """``window/quantity/calm``."""
        out = {}
        for name, size in self.track.magnitudes().items():
            for window in self.context.windows:
                part = size[window.slice]
                out[f"{window.name}/{name}/calm"] = np.mean(part < 0.1 * part.max(axis=0), axis=0)
        return out

    @staticmethod
    def statistics(
        quantities: Sequence[Quantity], model: Model, divergence: Divergence
    ) -> list[Statistic]:
        """One row a quantity: the mean over runs with a Student interval."""
        return [Statistic(q.name, "calm", f"{q.name}/calm", "mean") for q in quantities]
