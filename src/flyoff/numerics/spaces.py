"""State and measurement spaces: ordered named blocks with a tangent space.

Arrays are component first, runs last: an ambient element is (n, ..., M), a tangent vector
(d, ..., M). A rotation block stores a unit quaternion (scalar first, body to NED); its tangent
vector is the rotation-vector error in the body frame, R = R_hat Exp(delta).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from types import SimpleNamespace
from typing import Any

import numpy as np

from flyoff.numerics import algebra

__all__ = ["Angle", "Array", "Block", "Rotation", "StateSpace", "Vector", "right_jacobian"]

Array = np.ndarray[Any, Any]


@dataclass(frozen=True)
class Block:
    """One named part of a space. `scale` is a typical size, used to probe models."""

    name: str
    unit: str = "1"
    scale: float = 1.0

    ambient: int = 1
    tangent: int = 1


def Vector(name: str, size: int, unit: str = "1", scale: float = 1.0) -> Block:
    """A Euclidean block of `size` components with a unit."""
    return Block(name, unit, scale, size, size)


@dataclass(frozen=True)
class _AngleBlock(Block):
    pass


@dataclass(frozen=True)
class _RotationBlock(Block):
    pass


def Angle(name: str) -> Block:
    """One angle in radians: differences wrap to [-pi, pi]."""
    return _AngleBlock(name, "rad", 1.0, 1, 1)


def Rotation(name: str) -> Block:
    """A rotation: unit quaternion, three tangent components in radians."""
    return _RotationBlock(name, "rad", 1.0, 4, 3)


class StateSpace:
    """An ordered product of blocks.

    Attributes
    ----------
    n, d : int
        Ambient and tangent size.
    ambient, tangent : dict of str to slice
        Where each block lies.
    """

    def __init__(self, *blocks: Block) -> None:
        self.blocks = blocks
        self.ambient: dict[str, slice] = {}
        self.tangent: dict[str, slice] = {}
        i = j = 0
        for b in blocks:
            if b.name in self.ambient:
                raise ValueError(f"block `{b.name}` is named twice")
            self.ambient[b.name] = slice(i, i + b.ambient)
            self.tangent[b.name] = slice(j, j + b.tangent)
            i, j = i + b.ambient, j + b.tangent
        self.n, self.d = i, j
        self._rotations = [
            (self.ambient[b.name], self.tangent[b.name])
            for b in blocks
            if isinstance(b, _RotationBlock)
        ]
        self._angles = [
            (self.ambient[b.name], self.tangent[b.name])
            for b in blocks
            if isinstance(b, _AngleBlock)
        ]
        self._vectors = [
            (self.ambient[b.name], self.tangent[b.name])
            for b in blocks
            if not isinstance(b, _AngleBlock | _RotationBlock)
        ]
        self.flat = not self._rotations and not self._angles
        self.has_rotation = bool(self._rotations)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, StateSpace) and self.blocks == other.blocks

    def __hash__(self) -> int:
        return hash(self.blocks)

    def __repr__(self) -> str:
        return f"StateSpace({', '.join(b.name for b in self.blocks)})"

    def components(self) -> list[tuple[str, str]]:
        """Name and unit of each tangent component."""
        out = []
        for b in self.blocks:
            for k in range(b.tangent):
                out.append((b.name if b.tangent == 1 else f"{b.name}[{k}]", b.unit))
        return out

    # -- symbols -------------------------------------------------------------------------------
    def unpack(self, scalars: Sequence[Any] | Array) -> SimpleNamespace:
        """Blocks by name: a tuple of scalars, or the bare scalar of a one-component block."""
        out = {}
        for b in self.blocks:
            part = tuple(scalars[self.ambient[b.name]])
            out[b.name] = part[0] if b.ambient == 1 else part
        return SimpleNamespace(**out)

    def pack(self, blocks: Any, where: str) -> list[Any]:
        """Flatten what a model function returned, block by block, in the declared order.

        Raises
        ------
        ValueError
            If the number of blocks or of components in a block is wrong; the message says which.
        """
        if len(self.blocks) == 1 and not (
            isinstance(blocks, tuple) and len(blocks) == 1 and isinstance(blocks[0], tuple)
        ):
            blocks = (blocks,)
        if not isinstance(blocks, tuple):
            raise ValueError(f"{where} must return a tuple, one entry a block ({self!r})")
        if len(blocks) != len(self.blocks):
            raise ValueError(f"{where} returned {len(blocks)} blocks, {self!r} has another number")
        flat: list[Any] = []
        for b, value in zip(self.blocks, blocks, strict=True):
            part = value if isinstance(value, tuple) else (value,)
            if len(part) != b.ambient:
                raise ValueError(
                    f"{where}: block `{b.name}` has {b.ambient} components, got {len(part)}"
                )
            flat.extend(part)
        return flat

    # -- the manifold --------------------------------------------------------------------------
    def retract(self, x: Array, delta: Array) -> Array:
        """Move from `x` (n, ..., M) by the tangent vector `delta` (d, ..., M), broadcasting."""
        if self.flat:
            return x + delta
        if not self._rotations:
            out = x + delta
            for a, _ in self._angles:
                out[a] = _wrap(out[a])
            return out
        shape = np.broadcast_shapes(x.shape[1:], delta.shape[1:])
        out = np.empty((self.n, *shape), dtype=np.result_type(x, delta))
        for a, t in self._vectors:
            np.add(x[a], delta[t], out=out[a])
        for a, t in self._angles:
            out[a] = _wrap(x[a] + delta[t])
        for a, t in self._rotations:
            q = algebra.quat_mul(tuple(x[a]), algebra.quat_exp(tuple(delta[t])))
            # one Newton step to unit length: rounding must not add up over a long flight
            s = 1.5 - 0.5 * algebra.dot(q, q)
            for k in range(4):
                np.multiply(q[k], s, out=out[a.start + k])
        return out

    def local(self, x: Array, y: Array) -> Array:
        """Tangent vector (d, ..., M) at `x` that leads to `y`, angles the shortest way."""
        if self.flat:
            return y - x
        if not self._rotations:
            out = y - x
            for _, t in self._angles:
                out[t] = _wrap(out[t])
            return out
        shape = np.broadcast_shapes(x.shape[1:], y.shape[1:])
        out = np.empty((self.d, *shape), dtype=np.result_type(x, y))
        for a, t in self._vectors:
            np.subtract(y[a], x[a], out=out[t])
        for a, t in self._angles:
            out[t] = _wrap(y[a] - x[a])
        for a, t in self._rotations:
            v = algebra.quat_log(algebra.quat_mul(algebra.quat_conj(tuple(x[a])), tuple(y[a])))
            for k in range(3):
                out[t.start + k] = v[k]
        return out

    def mean(
        self, points: Array, weights: Array, about: Array, passes: int = 1
    ) -> tuple[Array, Array]:
        """Weighted mean on the manifold, taken in the tangent space of a reference point.

        One pass is exact for vectors, and for angles within half a turn of the reference. On
        rotations its error is of fourth order in the spread where the reference is the image of
        the centre; a reference far from the mean wants more passes. Their number is fixed, so that
        bits do not depend on how runs are batched.

        Parameters
        ----------
        points : (n, J, M)
        weights : (J,) or (J, M), summing to one
        about : (n, M), a reference within half a turn of the points

        Returns
        -------
        mean : (n, M)
        deviations : (d, J, M), local(mean, points)
        """
        spec = "j,djm->dm" if weights.ndim == 1 else "jm,djm->dm"
        mean = about
        for _ in range(1 if self.flat else passes):
            dev = self.local(mean[:, None], points)
            step = np.einsum(spec, weights, dev)
            mean = self.retract(mean, step)
        if not self.has_rotation and not self._angles:
            dev -= step[:, None]
            return mean, dev
        return mean, self.local(mean[:, None], points)

    def reset(self, covariance: Array, delta: Array) -> Array:
        """Carry a covariance (d, d, M) from the frame at x to the frame at retract(x, delta).

        The error after the correction is Log(Exp(-delta_hat) Exp(delta)), whose derivative at
        delta = delta_hat is the right Jacobian of SO(3) (F. L. Markley, "Attitude error
        representations for Kalman filtering", J. Guid. Control Dyn. 26(2):311-317, 2003;
        J. Sola et al., "A micro Lie theory for state estimation in robotics", 2018, eq. 143).
        """
        if not self._rotations:
            return covariance
        out = covariance.copy()
        for _, t in self._rotations:
            jac = right_jacobian(delta[t])
            out[t] = np.einsum("ikm,kjm->ijm", jac, out[t])
            out[:, t] = np.einsum("ikm,jkm->ijm", out[:, t], jac)
        return out

    def indices(self, names: Sequence[str]) -> list[int]:
        """Tangent indices of the named blocks."""
        out: list[int] = []
        for name in names:
            out.extend(range(*self.tangent[name].indices(self.d)))
        return out


def _wrap(a: Array) -> Array:
    """Angle wrapped to [-pi, pi], as `algebra.wrap` with one operation less."""
    turns = np.rint(a * (0.5 / np.pi))
    turns *= 2 * np.pi
    return np.subtract(a, turns, out=turns)


def right_jacobian(v: Array) -> Array:
    """Right Jacobian of SO(3) at the rotation vectors `v` (3, M): (3, 3, M)."""
    s = algebra.dot(tuple(v), tuple(v))
    near = s < 0.01
    far = np.where(near, 1.0, s)
    angle = np.sqrt(far)
    # (1 - cos t)/t^2 and (t - sin t)/t^3
    a = np.where(near, 0.5 - s / 24 * (1 - s / 30 * (1 - s / 56)), (1 - np.cos(angle)) / far)
    b = np.where(
        near,
        1 / 6 - s / 120 * (1 - s / 42 * (1 - s / 72)),
        (angle - np.sin(angle)) / (far * angle),
    )
    x, y, z = v
    zero = np.zeros_like(x)
    skew = np.array([[zero, -z, y], [z, zero, -x], [-y, x, zero]])
    square = np.array(
        [
            [-(y * y + z * z), x * y, x * z],
            [x * y, -(x * x + z * z), y * z],
            [x * z, y * z, -(x * x + y * y)],
        ]
    )
    out: Array = -a * skew + b * square
    for k in range(3):
        out[k, k] += 1
    return out
