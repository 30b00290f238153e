"""Constant velocity on a line with position fixes: q = 0.1, R = 1, the model of two test files."""

from __future__ import annotations

from flyoff.models.model import Model, ModelSpec, SensorSpec, trace
from flyoff.numerics.discretise import white_acceleration
from flyoff.numerics.spaces import StateSpace, Vector

SPACE = StateSpace(Vector("position", 1, "m"), Vector("velocity", 1, "m/s"))
FIX = StateSpace(Vector("fix", 1, "m"))


def move(x, u, w, p, dt):
    return x.position + dt * x.velocity + w.position, x.velocity + w.velocity


def noise(p, dt):
    return white_acceleration(0.1, dt)


def see(x, u, p):
    return x.position


def fix_noise(x, u, p):
    return ((1.0,),)


def constant_velocity() -> Model:
    """The traced model."""
    return trace(
        ModelSpec(
            space=SPACE,
            transition=move,
            noise=SPACE,
            noise_covariance=noise,
            sensors=(SensorSpec("fix", FIX, see, fix_noise, 1.0),),
            linear=True,
        )
    )
