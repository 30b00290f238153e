"""The score contract, as a numbered recipe.

1. A **score** is a class registered with ``@register("score", "name")``, made for one batch from a
   `Context`.
2. What it needs step by step is a **track**, asked for with ``context.track(TrackClass)``: several
   scores share one. ``observe(step)`` of a track takes in one step of the time loop.
3. ``per_run()`` returns arrays over runs, (M,) or (M, bins), by a key ``window/quantity/what``.
4. ``profiles()`` returns arrays (T, M) by name; the store keeps their sums over runs. ``traces()``
   returns arrays of the batch's first run, of which the store keeps that of run 0.
5. ``statistics(...)`` says, as data, which table rows follow from which keys by which reduction;
   the reductions live in `flyoff.evidence`. A score never looks at other runs.

A failed run gives NaN; reductions count it, they never drop it silently.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol, TypeVar

import numpy as np

from flyoff.filtering import Outcome
from flyoff.models.model import Model
from flyoff.numerics.spaces import Array
from flyoff.problems.contract import Alignment, Quantity
from flyoff.recordings import Recording

__all__ = [
    "Context",
    "Divergence",
    "PlainScore",
    "Score",
    "Statistic",
    "Window",
    "held",
    "window_steps",
]

T = TypeVar("T")


@dataclass(frozen=True)
class Window:
    """A stretch of time: steps `first` to `last`, both included."""

    name: str
    first: int
    last: int

    @property
    def slice(self) -> slice:
        """Rows of an array whose row 0 is step 1."""
        return slice(self.first - 1, self.last)


def window_steps(start: float, end: float, dt: float) -> tuple[int, int]:
    """First and last step, from one, of a window in seconds: a step belongs where it ends."""
    return math.floor(start / dt + 1e-9) + 1, math.floor(end / dt + 1e-9)


@dataclass(frozen=True)
class Divergence:
    """When a run counts as lost.

    Attributes
    ----------
    bounds : error bound by quantity name, SI
    hold : seconds an error must stay beyond (or within) its bound
    converge_by : seconds
    """

    bounds: Mapping[str, float] = field(default_factory=dict)
    hold: float = 1.0
    converge_by: float = 0.0


@dataclass(frozen=True)
class Context:
    """What a score may know of the batch it scores."""

    model: Model
    quantities: tuple[Quantity, ...]
    windows: tuple[Window, ...]
    divergence: Divergence
    recording: Recording
    alignment: Alignment | None = None
    truth_covariance: Array | None = None
    tracks: dict[type, Any] = field(default_factory=dict)

    def track(self, kind: type[T]) -> T:
        """The one track of this class in the batch, made when first asked for."""
        if kind not in self.tracks:
            self.tracks[kind] = kind(self)  # type: ignore[call-arg]
        found: T = self.tracks[kind]
        return found

    @property
    def steps(self) -> int:
        """Number of steps T."""
        return self.recording.steps

    @property
    def runs(self) -> int:
        """Number of runs M."""
        return len(self.recording.runs)


@dataclass(frozen=True)
class Statistic:
    """One kind of table row.

    Attributes
    ----------
    quantity, statistic : as in the table
    key : what follows ``window/`` in the per-run keys, or the name of a profile
    reduction : name of a reduction in `flyoff.evidence`
    unit, factor : of the value shown
    options : further arguments of the reduction
    """

    quantity: str
    statistic: str
    key: str
    reduction: str
    unit: str = "1"
    factor: float = 1.0
    options: Mapping[str, Any] = field(default_factory=dict)


class Score(Protocol):
    """A registered score class; see the recipe at the top of this file."""

    def __init__(self, context: Context) -> None: ...

    def per_run(self, outcome: Outcome) -> dict[str, Array]:
        """Arrays over runs by key."""
        ...

    def profiles(self) -> dict[str, Array]:
        """Arrays (T, M) by name."""
        ...

    def traces(self) -> dict[str, Array]:
        """Arrays of the first run."""
        ...

    @staticmethod
    def statistics(
        quantities: Sequence[Quantity], model: Model, divergence: Divergence
    ) -> list[Statistic]:
        """Which rows follow."""
        ...


class PlainScore:
    """Defaults of a score that keeps no profiles and no trace."""

    def profiles(self) -> dict[str, Array]:
        """None."""
        return {}

    def traces(self) -> dict[str, Array]:
        """None."""
        return {}


def held(mask: Array, steps: int) -> Array:
    """Where a condition (T, M) has been true for `steps` steps in a row, that one included."""
    run = np.zeros(mask.shape[1], dtype=np.int64)
    out = np.zeros_like(mask)
    for k in range(mask.shape[0]):
        run = np.where(mask[k], run + 1, 0)
        out[k] = run >= steps
    return out
