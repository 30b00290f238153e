"""Conditions: named, composable changes to sensors, prior or filter assumptions.

Each change is a class registered with ``@register("condition", "section.key")``; a condition in an
experiment file is any set of them. The recording's streams do not know the condition, so runs under
two conditions are paired; a change draws only from its own role ``faults:<name>``.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Annotated, Any, Protocol

import numpy as np
from pydantic import Field

from flyoff.models.model import Model
from flyoff.numerics.streams import Streams
from flyoff.options import Fraction, Positive, Unit, options
from flyoff.recordings import Recording
from flyoff.registry import register

__all__ = ["Change", "apply_to_model", "apply_to_recording", "initial_error_scale"]


class Change(Protocol):
    """One change; the default of every hook is to change nothing."""

    def model(self, model: Model) -> Model:
        """What the filters assume."""
        ...

    def error_scale(self) -> float:
        """How many times larger the drawn initial errors are."""
        ...

    def recording(self, recording: Recording, streams: Streams) -> Recording:
        """What the sensors deliver."""
        ...


class _NoChange:
    def model(self, model: Model) -> Model:
        return model

    def error_scale(self) -> float:
        return 1.0

    def recording(self, recording: Recording, streams: Streams) -> Recording:
        return recording


@register("condition", "filter.Q_scale")
@options
class AssumedProcessNoise(_NoChange):
    """Process-noise covariance the filters assume, times this factor."""

    value: Positive = 1.0

    def model(self, model: Model) -> Model:
        """Scale W."""
        return model.assuming(q_scale=self.value)


@register("condition", "filter.R_scale")
@options
class AssumedMeasurementNoise(_NoChange):
    """Measurement-noise covariance the filters assume, times this factor."""

    value: Positive = 1.0

    def model(self, model: Model) -> Model:
        """Scale R of every sensor."""
        return model.assuming(r_scale=self.value)


@register("condition", "prior.error_scale")
@options
class InitialErrorScale(_NoChange):
    """Drawn initial errors larger than the prior says, by this factor."""

    value: Annotated[float, Field(ge=0, le=100, strict=True)] = 1.0

    def error_scale(self) -> float:
        """The factor."""
        return self.value


@register("condition", "sensors.dropout")
@options
class Dropout(_NoChange):
    """Share of whole readings lost at random, each sensor on its own."""

    value: Annotated[Fraction, Unit("1")] = 0.0

    def recording(self, recording: Recording, streams: Streams) -> Recording:
        """Turn lost readings into NaN."""
        readings = []
        for r in recording.readings:
            u = streams.uniform(f"faults:dropout:{r.sensor}", (len(r.steps),))
            values = r.values.copy()
            lost = np.broadcast_to((u < self.value)[:, None], values.shape)
            values[lost] = np.nan
            readings.append(replace(r, values=values))
        return replace(recording, readings=tuple(readings))


def apply_to_model(changes: tuple[Any, ...], model: Model) -> Model:
    """All changes to the filter model, in order."""
    for change in changes:
        model = change.model(model)
    return model


def initial_error_scale(changes: tuple[Any, ...]) -> float:
    """Product of all initial error scales."""
    return float(np.prod([change.error_scale() for change in changes]))


def apply_to_recording(
    changes: tuple[Any, ...], recording: Recording, streams: Streams
) -> Recording:
    """All changes to the readings, in order."""
    for change in changes:
        recording = change.recording(recording, streams)
    return recording
