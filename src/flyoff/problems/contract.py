"""The problem contract, as a numbered recipe.

1. A **problem** is a frozen options class (its fields are the YAML parameters, with units),
   registered with ``@register("problem", "kind")``. It never mentions how an estimator works.
2. ``filter_model()`` returns the traced model the filters get; ``truth`` may come from another.
3. ``record(streams, error_scale)`` returns the `Recording` of a batch: truth, inputs, readings and
   what filters are told at the start. All draws come from `streams`, by role. `error_scale` is how
   many times larger than the prior says the drawn initial errors are.
4. ``quantities`` are what is scored: a name, a unit, and how the size of the error is taken.
5. ``expected`` holds hypotheses about the outcome, with their source. If a converged run
   contradicts one, it stays listed as contradicted; the problem's parameters are not touched.
6. ``cautions`` and ``mismatches`` are sentences for the report: what the truth has that the filter
   model has not.
7. A recorded problem sets `segments`: then the unit of inference is the segment of time.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from flyoff.models.model import Model
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.streams import Streams
from flyoff.recordings import Recording

__all__ = [
    "Alignment",
    "Expectation",
    "Problem",
    "Quantity",
    "Segment",
    "SimulatedProblem",
    "block_error",
]

# (truth (n, M), estimate (n, M)) -> error components (c, M)
ErrorFunction = Callable[[Array, Array], Array]


@dataclass(frozen=True)
class Quantity:
    """Something scored.

    Attributes
    ----------
    error : function of (truth, estimate), each (n, M), to components (c, M) whose length is
        scored; None if the problem's alignment gives it after the run
    unit : SI unit of the error
    display : (unit, factor) for tables and figures
    agreement : the truth is not much better than the error: shown as agreement, never a gate
    """

    name: str
    unit: str
    error: ErrorFunction | None = None
    display: tuple[str, float] | None = None
    agreement: bool = False

    def magnitude(self, truth: Array, estimate: Array) -> Array:
        """Length of the error (M,)."""
        assert self.error is not None
        e = self.error(truth, estimate)
        out: Array = np.sqrt(np.einsum("cm,cm->m", e, e))
        return out

    @property
    def shown_unit(self) -> str:
        """Unit in tables and figures."""
        return self.display[0] if self.display else self.unit

    @property
    def shown_factor(self) -> float:
        """What an SI value is multiplied by to be shown."""
        return self.display[1] if self.display else 1.0


@dataclass(frozen=True)
class _BlockError:
    """Error of one block, in the tangent space at the estimate (pickles)."""

    space: StateSpace
    block: str

    def __call__(self, truth: Array, estimate: Array) -> Array:
        return self.space.local(estimate, truth)[self.space.tangent[self.block]]


def block_error(space: StateSpace, block: str) -> ErrorFunction:
    """Error of one block of the state, in tangent coordinates."""
    return _BlockError(space, block)


class Alignment(Protocol):
    """Errors that exist only after a whole run: where the frame itself is unobservable.

    `channels` picks what must be kept of every estimate; `errors` aligns and returns magnitudes.
    """

    rule: str

    def channels(self, estimate: Array) -> Array:
        """What to keep (c, M) of an estimate (n, M)."""
        ...

    def errors(self, recording: Recording, kept: Array) -> dict[str, Array]:
        """Error magnitude (T, M) by quantity name from the kept channels (T, c, M)."""
        ...


@dataclass(frozen=True)
class Expectation:
    """A hypothesis about the outcome, with its source."""

    claim: str
    source: str


@dataclass(frozen=True)
class Segment:
    """A stretch of a recorded data set: the unit of inference there."""

    name: str
    start: float
    end: float


class Problem(Protocol):
    """A registered options class; see the recipe at the top of this file."""

    def filter_model(self) -> Model:
        """The model the filters get."""
        ...

    def record(self, streams: Streams, error_scale: float) -> Recording:
        """The data of a batch of runs."""
        ...

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        """What is scored."""
        ...

    @property
    def duration(self) -> float:
        """Seconds."""
        ...

    @property
    def step(self) -> float:
        """Seconds between predictions."""
        ...

    @property
    def recorded(self) -> bool:
        """Whether truth and data come from a log instead of a simulation."""
        ...

    @property
    def segments(self) -> Sequence[Segment]:
        """Units of inference of a recorded problem; empty for a simulated one."""
        ...

    @property
    def alignment(self) -> Alignment | None:
        """How runs are aligned with the truth before scoring, if they must be."""
        ...

    @property
    def truth_covariance(self) -> Array | None:
        """Covariance (d, d) of the truth itself, added before NEES; None if it is exact."""
        ...

    @property
    def runs_by_default(self) -> int | None:
        """How many runs make sense where the data does not grow with them."""
        ...

    @property
    def expected(self) -> tuple[Expectation, ...]:
        """Hypotheses about the outcome."""
        ...

    @property
    def mismatches(self) -> tuple[str, ...]:
        """What the truth has that the filter model has not."""
        ...


class SimulatedProblem:
    """Defaults of a problem whose truth is simulated."""

    @property
    def recorded(self) -> bool:
        """Simulated, not read from a log."""
        return False

    @property
    def segments(self) -> tuple[Segment, ...]:
        """None: the unit of inference is the run."""
        return ()

    @property
    def alignment(self) -> None:
        """None: errors are taken as they come."""
        return None

    @property
    def truth_covariance(self) -> None:
        """None: the truth is exact."""
        return None

    @property
    def runs_by_default(self) -> None:
        """As many as the experiment asks for."""
        return None

    @property
    def mismatches(self) -> tuple[str, ...]:
        """None, unless the problem says so: truth and filter model are the same."""
        return ()
