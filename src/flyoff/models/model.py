"""Models: plain functions of named components, traced once into tapes.

Recipe
------
1. Write ``transition(x, u, w, p, dt)``: `x`, `u`, `w`, `p` have the declared blocks as attributes,
   each a tuple of scalars (a bare scalar if it has one component). Return the new state as a tuple
   of blocks in the declared order. `w` is the process noise of the step, ``w ~ N(0, W(dt))``.
2. Write ``noise_covariance(p, dt)``: W as a tuple of rows.
3. For each sensor write ``measure(x, u, p)`` and ``covariance(x, u, p)`` the same way.
4. Use NumPy functions (``np.sin``, ``np.where``) and `flyoff.numerics.algebra`. Not `math`, not
   ``if`` on a component, not assignment into arrays: `trace` says so in one line where it finds it.

`trace` calls each function with symbols, derives exact sparse Jacobians in tangent coordinates, and
calls it again on NumPy arrays at random points: values must agree to 1e-12 and Jacobians with
central differences, also at zero rates and zero norms.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from types import SimpleNamespace
from typing import Any, Literal

import numpy as np

from flyoff.numerics import algebra, counts, linalg
from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.tape import Pattern, Tape

__all__ = ["Model", "ModelSpec", "Sensor", "SensorSpec", "trace"]

Function = Callable[..., Any]
LOG_2PI = float(np.log(2 * np.pi))


class ModelError(ValueError):
    """A model function that cannot be traced, with the function's name and the rule."""


@dataclass(frozen=True)
class SensorSpec:
    """A sensor as its author writes it.

    Attributes
    ----------
    measure, covariance : functions of (x, u, p)
        Measurement blocks, and noise covariance as a tuple of rows.
    rate : float
        Hz; readings fall on the nearest prediction step.
    phase : float
        Seconds after the start until the first reading; None means one period.
    latency : float
        Seconds from the time stamp to arrival.
    """

    name: str
    space: StateSpace
    measure: Function
    covariance: Function
    rate: float
    phase: float | None = None
    latency: float = 0.0


@dataclass(frozen=True)
class ModelSpec:
    """A model as its author writes it; see the recipe at the top of this file."""

    space: StateSpace
    transition: Function
    noise: StateSpace
    noise_covariance: Function
    sensors: tuple[SensorSpec, ...]
    inputs: StateSpace = field(default_factory=StateSpace)
    parameters: Mapping[str, float] = field(default_factory=dict)
    noise_is: Literal["exact", "piecewise-constant"] = "exact"
    linear: bool = False


@dataclass(frozen=True, eq=False)
class Sensor:
    """A traced sensor. `r_scale` multiplies the noise covariance the filter assumes."""

    name: str
    space: StateSpace
    rate: float
    phase: float
    latency: float
    measure_tape: Tape
    linear_tape: Tape
    h_pattern: Pattern
    r_tape: Tape
    linear: bool
    r_scale: float = 1.0
    memo: dict[Any, Array] = field(default_factory=dict, repr=False)

    def project(self, h: Array, cov: Array) -> Array:
        """H P (m, d, M) for a symmetric P, over the columns that H touches."""
        touched = self.h_pattern.columns
        return linalg.product(h[:, touched], cov[touched])

    def spread(self, seen: Array, h: Array) -> Array:
        """(H P) H' (m, m, M)."""
        touched = self.h_pattern.columns
        return linalg.product_t(seen[:, touched], h[:, touched])

    @property
    def m(self) -> int:
        """Number of measurement components (tangent)."""
        return self.space.d

    def measure(self, x: Array, u: Array, p: Array) -> Array:
        """Noise-free measurement (ambient m, ..., M)."""
        return self.measure_tape(x, u, p)

    def linearise(self, x: Array, u: Array, p: Array) -> tuple[Array, Array]:
        """Measurement (m, M) and dense Jacobian (m, d, M) in tangent coordinates."""
        out = self.linear_tape(x, u, p)
        n = self.space.n
        return out[:n], out[n:].reshape(*self.h_pattern.shape, -1)

    def covariance(self, x: Array, u: Array, p: Array) -> Array:
        """Noise covariance (m, m, ..., M), or (m, m, 1) where it is common to all."""
        if not self.r_is_common:
            return self._covariance(x, u, p)
        key = (x.dtype, p.tobytes())
        if key not in self.memo:
            first = x.reshape(x.shape[0], -1)[:, :1]
            self.memo[key] = self._covariance(first, u[:, :1], p)
        return self.memo[key]

    def _covariance(self, x: Array, u: Array, p: Array) -> Array:
        r = self.r_tape(x, u, p)
        r = r.reshape(self.m, self.m, *r.shape[1:])
        return r if self.r_scale == 1.0 else r * r.dtype.type(self.r_scale)

    @cached_property
    def r_is_common(self) -> bool:
        """Whether the noise covariance depends on neither state nor input."""
        return not (self.r_tape.depends_on("x") or self.r_tape.depends_on("u"))

    def log_density(self, residual: Array, r: Array, missing: Array | None = None) -> Array:
        """Gaussian log density of residuals (m, N, M) under R (m, m, M) or (m, m, N, M).

        `missing` (m, M) marks absent components, which are left out.
        """
        if missing is not None:
            r, residual = mask_missing(r, residual, missing)
        if r.ndim == 3:
            r = r[:, :, None]
        low, _ = linalg.cholesky(r)
        m = residual.shape[0]
        y = linalg.solve_lower(low, residual.copy())
        count = m if missing is None else (m - missing.sum(0))
        log_det = sum(np.log(low[i, i]) for i in range(m))
        quad = np.einsum("inm,inm->nm", y, y)
        out: Array = -0.5 * quad - log_det - (0.5 * LOG_2PI) * np.asarray(count, residual.dtype)
        return out

    def sample(self, normals: Array, x: Array, u: Array, p: Array) -> Array:
        """A noisy measurement (ambient m, M) from standard normals (m, M)."""
        z = self.measure(x, u, p)
        low, _ = linalg.cholesky(self.covariance(x, u, p))
        return self.space.retract(z, np.einsum("ijm,jm->im", low, normals))


def mask_missing(r: Array, residual: Array, missing: Array) -> tuple[Array, Array]:
    """Neutralise missing components: zero residual, unit variance, no correlation."""
    keep = ~missing
    if residual.ndim == 3:
        residual = np.where(missing[:, None], residual.dtype.type(0), residual)
    else:
        residual = np.where(missing, residual.dtype.type(0), residual)
    both = keep[:, None] & keep[None]
    if r.ndim == 4:
        both = both[:, :, None]
    r = np.where(both, r, r.dtype.type(0))
    for i in range(r.shape[0]):
        r[i, i] = np.where(missing[i], r.dtype.type(1), r[i, i])
    return r, residual


@dataclass(frozen=True, eq=False)
class Model:
    """A traced model: tapes only, so it pickles.

    Attributes
    ----------
    space, inputs, noise : StateSpace
    parameters : (k, 1) array
    sensors : dict of str to Sensor, in declared order
    linear : bool
        Declared and verified: no Jacobian depends on the state.
    q_scale : float
        Multiplies the process-noise covariance the filter assumes.
    """

    space: StateSpace
    inputs: StateSpace
    noise: StateSpace
    noise_is: str
    parameters: Array
    parameter_names: tuple[str, ...]
    sensors: dict[str, Sensor]
    transition_tape: Tape
    mean_tape: Tape
    linear_tape: Tape
    f_pattern: Pattern
    g_tape: Tape
    g_pattern: Pattern
    along_tape: Tape
    by_direction: bool
    w_tape: Tape
    w_pattern: Pattern
    linear: bool
    q_scale: float = 1.0
    memo: dict[Any, Array] = field(default_factory=dict, repr=False)

    def assuming(self, q_scale: float = 1.0, r_scale: float = 1.0) -> Model:
        """The same model with scaled noise assumptions."""
        sensors = {
            name: replace(s, r_scale=s.r_scale * r_scale, memo={})
            for name, s in self.sensors.items()
        }
        return replace(self, q_scale=self.q_scale * q_scale, sensors=sensors, memo={})

    def _p(self, like: Array) -> Array:
        return self.parameters.astype(like.dtype, copy=False)

    def _dt(self, like: Array, dt: float) -> Array:
        return np.array([[dt]], dtype=like.dtype)

    def step(self, x: Array, u: Array, dt: float) -> Array:
        """Noise-free transition of points (n, ..., M); `u` is (k, M)."""
        return self.mean_tape(x, u, self._p(x), self._dt(x, dt))

    def step_noisy(self, x: Array, u: Array, w: Array, dt: float) -> Array:
        """Transition of points (n, ..., M) with process noise w (q, ..., M)."""
        return self.transition_tape(x, u, w, self._p(x), self._dt(x, dt))

    def linearise(self, x: Array, u: Array, dt: float) -> tuple[Array, Array, Array]:
        """Predicted mean (n, M), tangent Jacobian F (d, d, M), added noise Q (d, d, M or 1)."""
        n, d = self.space.n, self.space.d
        if self.by_direction:
            mean, fg = self._along(x, u, dt, d)
            q = self._q_from(fg[:, d:], dt) if not self.q_is_common else self.added_noise(x, u, dt)
            return mean, fg[:, :d], q
        out = self.linear_tape(x, u, self._p(x), self._dt(x, dt))
        return out[:n], out[n:].reshape(d, d, -1), self.added_noise(x, u, dt)

    def added_noise(self, x: Array, u: Array, dt: float) -> Array:
        """Tangent covariance G W G' (d, d, M or 1) that one step adds, at `x`."""
        if not self.q_is_common:
            return self._q_from(self._noise_input(x, u, dt), dt)
        key = ("q", dt, x.dtype)
        if key not in self.memo:
            self.memo[key] = self._q_from(self._noise_input(x[:, :1], u[:, :1], dt), dt)
        return self.memo[key]

    def _noise_input(self, x: Array, u: Array, dt: float) -> Array:
        """Tangent Jacobian G (d, q, M) with respect to the process noise."""
        if self.noise.d == 0:
            return np.zeros((self.space.d, 0, 1), dtype=x.dtype)
        if self.by_direction:
            return self._along(x, u, dt, 0)[1]
        g = self.g_tape(x, u, self._p(x), self._dt(x, dt))
        return g.reshape(self.space.d, self.noise.d, -1)

    def _q_from(self, g: Array, dt: float) -> Array:
        size = self.noise.d
        if size == 0:
            return np.zeros((self.space.d, self.space.d, 1), dtype=g.dtype)
        w = self.w_tape(self._p(g), self._dt(g, dt)).reshape(size, size, 1)
        q = linalg.symmetrise(linalg.product_t(linalg.product(g, w), g))
        return q if self.q_scale == 1.0 else q * q.dtype.type(self.q_scale)

    def _along(self, x: Array, u: Array, dt: float, d: int) -> tuple[Array, Array]:
        """Mean and derivatives along the first `d` tangent directions and all noise directions.

        The directional derivative of the traced transition, with the directions as an array axis:
        what depends on the point alone is worked out once, not once a direction.
        """
        space, n, q = self.space, self.space.n, self.noise.n
        runs = x.shape[1]
        vx = np.zeros((n, d + q, runs), dtype=x.dtype)
        vw = np.zeros((q, d + q, 1), dtype=x.dtype)
        for b in space.blocks if d else ():
            a, t = space.ambient[b.name], space.tangent[b.name]
            if b.ambient == b.tangent:
                for i in range(b.ambient):
                    vx[a.start + i, t.start + i] = 1
            else:
                w, i, j, k = 0.5 * x[a]
                vx[a, t.start] = (-i, w, k, -j)
                vx[a, t.start + 1] = (-j, -k, w, i)
                vx[a, t.start + 2] = (-k, j, -i, w)
        for i in range(q):
            vw[i, d + i] = 1
        out = self.along_tape(
            x[:, None], u[:, None], self._p(x)[:, None], self._dt(x, dt)[:, None], vx, vw
        )
        mean, dy = out[:n, 0], out[n:]
        if space.flat:
            return mean, dy
        moved = np.empty((space.d, *dy.shape[1:]), dtype=x.dtype)
        for b in space.blocks:
            a, t = space.ambient[b.name], space.tangent[b.name]
            if b.ambient == b.tangent:
                moved[t] = dy[a]
            else:
                turn = algebra.quat_mul(algebra.quat_conj(tuple(mean[a])), tuple(dy[a]))
                for i in range(3):
                    np.multiply(turn[i + 1], 2, out=moved[t.start + i])
        return mean, moved

    @cached_property
    def q_is_common(self) -> bool:
        """Whether the added noise depends on neither state nor input."""
        return not (self.g_tape.depends_on("x") or self.g_tape.depends_on("u"))

    def noise_counts(self) -> Counts:
        """Operations of `added_noise` with the traced sparsity; nothing where it is common."""
        if self.q_is_common:
            return Counts(add=self.space.d)
        nz, d = self.g_pattern.nonzeros, self.space.d
        return (
            self.g_tape.counts()
            + counts.sparse_product(nz, d, 1) * (self.w_pattern.nonzeros / max(self.noise.d, 1))
            + counts.sparse_product(nz, d, d)
            + Counts(add=d * d)
        )

    def noise_factor(self, dt: float, dtype: Any) -> Array:
        """Lower factor of W(dt) (q, q, 1); zero rows are allowed (noise-free directions)."""
        key = ("w", dt, np.dtype(dtype))
        if key in self.memo:
            return self.memo[key]
        like = np.empty(0, dtype)
        q = self.noise.d
        w = self.w_tape(self._p(like), self._dt(like, dt)).reshape(q, q, 1)
        w = w * w.dtype.type(self.q_scale)
        self.memo[key] = _semidefinite_factor(w)
        return self.memo[key]

    def measure(self, sensor: Sensor, x: Array, u: Array) -> Array:
        """Noise-free measurement of points (n, ..., M)."""
        return sensor.measure(x, u, self._p(x))


def _semidefinite_factor(w: Array) -> Array:
    """Lower factor of a positive semidefinite W (q, q, 1): a zero pivot gives a zero column."""
    low = np.zeros_like(w)
    rest = w.copy()
    sd = np.sqrt(np.maximum(w[range(len(w)), range(len(w))], 0))
    for j in range(w.shape[0]):
        pivot = float(rest[j, j, 0])
        column = rest[j:, j]
        # zero beside the component's own variance, not beside the largest of all
        slack = 1e-12 * float(sd[j, 0]) ** 2
        if pivot <= slack:
            if pivot < -slack or (np.abs(column) > 1e-6 * sd[j] * sd[j:]).any():
                raise ModelError("the process-noise covariance W is not positive semidefinite")
            continue
        low[j:, j] = column / np.sqrt(pivot)
        rest[j:, j:] -= low[j:, j][:, None] * low[j:, j]
    return low


# -- tracing ---------------------------------------------------------------------------------------


def trace(spec: ModelSpec) -> Model:
    """Trace a model into tapes and verify it.

    Raises
    ------
    ValueError
        Naming the function and the rule, where a function cannot be traced, disagrees with its
        tape, or gives NaN.
    """
    import casadi as ca

    ca.GlobalOptions.setNumpyMode(-1)
    space, noise, inputs = spec.space, spec.noise, spec.inputs
    k = len(spec.parameters)
    sx, su, sw = _symbols("x", space.n), _symbols("u", inputs.n), _symbols("w", noise.n)
    sp, sdt = _symbols("p", k), _symbols("dt", 1)
    p = SimpleNamespace(**dict(zip(spec.parameters, sp, strict=True)))
    x, u, w = space.unpack(sx), inputs.unpack(su), noise.unpack(sw)
    vx, vu, vw, vp, vdt = (_column(v) for v in (sx, su, sw, sp, sdt))

    new = _call(spec.transition, space, x, u, w, p, sdt[0])
    flat_w = _matrix(spec.noise_covariance, noise.d, p, sdt[0])
    zero = ca.SX.zeros(noise.n, 1)
    mean = _substituted(new, vw, zero)
    tangent = _symbols("delta", space.d)
    near = _near(space, sx, tangent)

    def derivative(out: StateSpace, at: list[Any], moved: list[Any], by: list[Any]) -> Any:
        """Jacobian (out.d, len(by)) of local(at, moved) at by = 0."""
        jac = ca.jacobian(_column(_first_order_local(out, at, moved)), _column(by))
        if by:
            jac = ca.substitute(jac, _column(by), ca.SX.zeros(len(by), 1))
        return ca.sparsify(jac)

    shifted = _call(spec.transition, space, space.unpack(near), u, w, p, sdt[0])
    f = derivative(space, mean, _substituted(shifted, vw, zero), tangent)
    g = derivative(space, mean, new, sw)
    f_pattern, f_values = _entries(f)
    g_pattern, g_values = _entries(g)
    w_pattern, w_values = _entries(flat_w)

    step_groups = {"x": vx, "u": vu, "p": vp, "dt": vdt}
    ways = _symbols("vx", space.n), _symbols("vw", noise.n)
    along = ca.jtimes(_column(new), ca.vertcat(vx, vw), ca.vertcat(*map(_column, ways)))
    along = ca.substitute(along, vw, zero) if noise.n else along
    along_groups = {**step_groups, "vx": _column(ways[0]), "vw": _column(ways[1])}
    along_tape = Tape(along_groups, [*mean, *(along[i] for i in range(space.n))])
    mean_tape = Tape(step_groups, mean)
    linear_tape = Tape(step_groups, [*mean, *f_values])
    g_tape = Tape(step_groups, g_values)
    common = not (g_tape.depends_on("x") or g_tape.depends_on("u"))
    entrywise = len(linear_tape.ops) + (0 if common else len(g_tape.ops))
    sensors = {}
    for s in spec.sensors:
        z = _call(s.measure, s.space, x, u, p)
        r = _matrix(s.covariance, s.space.d, x, u, p)
        z_near = _call(s.measure, s.space, space.unpack(near), u, p)
        h = derivative(s.space, z, z_near, tangent)
        h_pattern, h_values = _entries(h)
        r_values = _entries(r)[1]
        groups = {"x": vx, "u": vu, "p": vp}
        linear = Tape(groups, h_values)
        sensors[s.name] = Sensor(
            name=s.name,
            space=s.space,
            rate=s.rate,
            phase=1 / s.rate if s.phase is None else s.phase,
            latency=s.latency,
            measure_tape=Tape(groups, z),
            linear_tape=Tape(groups, [*z, *h_values]),
            h_pattern=h_pattern,
            r_tape=Tape(groups, r_values),
            linear=s.space.flat and not linear.depends_on("x"),
        )
    jac_only = Tape(step_groups, f_values)
    model = Model(
        space=space,
        inputs=inputs,
        noise=noise,
        noise_is=spec.noise_is,
        parameters=np.array(list(spec.parameters.values()), dtype=float).reshape(-1, 1),
        parameter_names=tuple(spec.parameters),
        sensors=sensors,
        transition_tape=Tape({"x": vx, "u": vu, "w": vw, "p": vp, "dt": vdt}, new),
        mean_tape=mean_tape,
        linear_tape=linear_tape,
        f_pattern=f_pattern,
        g_tape=g_tape,
        g_pattern=g_pattern,
        w_tape=Tape({"p": vp, "dt": vdt}, w_values),
        w_pattern=w_pattern,
        along_tape=along_tape,
        # an operation on all directions costs about two on single entries
        by_direction=2 * len(along_tape.ops) < entrywise,
        linear=spec.linear,
    )
    if spec.linear:
        curved = [s.name for s in sensors.values() if not s.linear]
        if not space.flat:
            raise ModelError(f"declared linear, but {space!r} holds an angle or a rotation")
        if jac_only.depends_on("x") or curved:
            what = f"sensor `{curved[0]}`" if curved else f"`{spec.transition.__name__}`"
            raise ModelError(f"declared linear, but the Jacobian of {what} depends on the state")
    with np.errstate(all="ignore"):
        _verify(spec, model)
    return model


def _symbols(name: str, n: int) -> list[Any]:
    import casadi as ca

    return [ca.SX.sym(f"{name}{i}") for i in range(n)]


def _column(scalars: list[Any]) -> Any:
    import casadi as ca

    return ca.vertcat(*scalars) if scalars else ca.SX(0, 1)


_RULE = (
    "use NumPy functions and flyoff.numerics.algebra on its arguments "
    "(np.where for a branch; not math, float(), if, max, or assignment into arrays)"
)


def _call(function: Function, space: StateSpace, *args: Any) -> list[Any]:
    name = getattr(function, "__name__", repr(function))
    try:
        flat = space.pack(function(*args), f"`{name}`")
    except ValueError:
        raise
    except Exception as why:
        raise ModelError(f"`{name}` cannot be traced ({_first_line(why)}): {_RULE}") from why
    return _scalars(flat, name)


def _matrix(function: Function, d: int, *args: Any) -> Any:
    import casadi as ca

    name = getattr(function, "__name__", repr(function))
    try:
        rows = function(*args)
    except Exception as why:
        raise ModelError(f"`{name}` cannot be traced ({_first_line(why)}): {_RULE}") from why
    plain = isinstance(rows, tuple | list) and all(isinstance(r, tuple | list) for r in rows)
    if not plain or len(rows) != d or any(len(r) != d for r in rows):
        raise ModelError(f"`{name}` must return {d} rows of {d} entries")
    return ca.vertcat(*(ca.horzcat(*_scalars(list(r), name)) for r in rows)) if d else ca.SX(0, 0)


def _scalars(flat: list[Any], name: str) -> list[Any]:
    import casadi as ca

    out = []
    for e in flat:
        s = ca.SX(e)
        if _has_nan(s):
            raise ModelError(f"`{name}` turned a component into NaN while traced: {_RULE}")
        out.append(s)
    return out


def _has_nan(expression: Any) -> bool:
    """Whether a constant in the expression is not finite: what `math` and `float` leave behind."""
    import casadi as ca

    f = ca.Function("f", [ca.vertcat(*ca.symvar(expression))], [expression])
    return any(
        f.instruction_id(k) == ca.OP_CONST and not np.isfinite(f.instruction_constant(k))
        for k in range(f.n_instructions())
    )


def _first_line(why: Exception) -> str:
    text = str(why).strip().splitlines()
    return text[-1].strip() if text else type(why).__name__


def _substituted(values: list[Any], old: Any, new: Any) -> list[Any]:
    import casadi as ca

    return [ca.substitute(e, old, new) for e in values] if old.numel() else values


def _near(space: StateSpace, scalars: list[Any], delta: list[Any]) -> list[Any]:
    """First-order retraction: x + delta, and q (1, delta/2) for a rotation."""
    out: list[Any] = []
    for b in space.blocks:
        x, d = scalars[space.ambient[b.name]], delta[space.tangent[b.name]]
        if b.ambient == b.tangent:
            out.extend(a + e for a, e in zip(x, d, strict=True))
        else:
            out.extend(algebra.quat_mul(tuple(x), (1.0, d[0] / 2, d[1] / 2, d[2] / 2)))
    return out


def _first_order_local(space: StateSpace, at: list[Any], moved: list[Any]) -> list[Any]:
    """First-order inverse of the retraction: y - x, and 2 vec(conj(p) q) for a rotation."""
    out: list[Any] = []
    for b in space.blocks:
        x, y = at[space.ambient[b.name]], moved[space.ambient[b.name]]
        if b.ambient == b.tangent:
            out.extend(c - a for a, c in zip(x, y, strict=True))
        else:
            q = algebra.quat_mul(algebra.quat_conj(tuple(x)), tuple(y))
            out.extend(2 * c for c in q[1:])
    return out


def _entries(matrix: Any) -> tuple[Pattern, list[Any]]:
    """Where a symbolic matrix is nonzero, and all its entries row by row."""
    import casadi as ca

    matrix = ca.sparsify(ca.simplify(matrix)) if matrix.numel() else matrix
    rows, cols = matrix.sparsity().get_triplet()
    shape = (int(matrix.shape[0]), int(matrix.shape[1]))
    entries = [matrix[i, j] for i in range(shape[0]) for j in range(shape[1])]
    return Pattern(shape, tuple(zip(rows, cols, strict=True))), entries


# -- verification ----------------------------------------------------------------------------------

_POINTS = 16


def _verify(spec: ModelSpec, model: Model) -> None:
    """Compare every traced function with a NumPy call, and Jacobians with central differences."""
    rng = np.random.default_rng(20260901)
    x = _probe(spec.space, rng)
    u = _probe(spec.inputs, rng)
    w = _probe(spec.noise, rng)
    # the last points sit at zero rate, zero norm, zero input
    for v in (x, u, w):
        v[:, -2:] = 0
    for b in spec.space.blocks:
        if b.ambient != b.tangent:
            x[spec.space.ambient[b.name].start, -2:] = 1
    p = SimpleNamespace(**spec.parameters)
    dt = np.full((1, 1), 0.1)
    names = (spec.space.unpack(x), spec.inputs.unpack(u), spec.noise.unpack(w))
    got = model.transition_tape(x, u, w, model.parameters, dt)
    _compare(spec.transition, spec.space, got, *names, p, 0.1)
    mean, f, _ = model.linearise(x, u, 0.1)

    def moved(delta: Array) -> Array:
        return spec.space.local(mean, model.step(spec.space.retract(x, delta), u, 0.1))

    _check_jacobian(spec.transition, spec.space, f, moved)
    w_got = model.w_tape(model.parameters, dt)
    _compare_matrix(spec.noise_covariance, w_got, p, 0.1)
    for s in spec.sensors:
        sensor = model.sensors[s.name]
        z, h = sensor.linearise(x, u, model.parameters)
        # a range or bearing has no value at zero norm: only the ordinary points count there
        fine: Array = np.all(np.isfinite(h), axis=(0, 1))
        fine[:-2] = True
        _compare(s.measure, s.space, z[:, fine], *(_cut(v, fine) for v in names[:2]), p)

        def seen(delta: Array, s: SensorSpec = s, sensor: Sensor = sensor, z: Array = z) -> Array:
            return s.space.local(z, model.measure(sensor, spec.space.retract(x, delta), u))

        _check_jacobian(s.measure, spec.space, h, seen, fine)
        r_got = sensor.r_tape(x, u, model.parameters)
        _compare_matrix(s.covariance, r_got[:, fine], *(_cut(v, fine) for v in names[:2]), p)


def _probe(space: StateSpace, rng: np.random.Generator) -> Array:
    out = rng.standard_normal((space.n, _POINTS))
    for b in space.blocks:
        a = space.ambient[b.name]
        if b.ambient != b.tangent:
            out[a] /= np.linalg.norm(out[a], axis=0)
        else:
            out[a] *= b.scale
    return out


def _cut(blocks: SimpleNamespace, mask: Array) -> SimpleNamespace:
    def cut(v: Any) -> Any:
        return tuple(e[mask] for e in v) if isinstance(v, tuple) else v[mask]

    return SimpleNamespace(**{k: cut(v) for k, v in vars(blocks).items()})


def _compare_matrix(function: Function, got: Array, *args: Any) -> None:
    rows = function(*args)
    _agree(getattr(function, "__name__", repr(function)), got, [e for r in rows for e in r])


def _compare(function: Function, space: StateSpace, got: Array, *args: Any) -> None:
    name = getattr(function, "__name__", repr(function))
    _agree(name, got, space.pack(function(*args), f"`{name}`"))


def _agree(name: str, got: Array, flat: list[Any]) -> None:
    want = np.array([np.broadcast_to(np.asarray(e, dtype=float), got.shape[1:]) for e in flat])
    if np.isnan(want).any() or np.isnan(got).any():
        raise ModelError(f"`{name}` gives NaN at a probing point: {_RULE}")
    worst = np.max(np.abs(want - got) / (1 + np.abs(want)), initial=0)
    if worst > 1e-12:
        raise ModelError(
            f"`{name}` differs by {worst:.1e} between NumPy and its traced form "
            f"(a branch on a value, or a hidden state?): {_RULE}"
        )


def _check_jacobian(
    function: Function,
    space: StateSpace,
    jac: Array,
    moved: Callable[[Array], Array],
    fine: Array | None = None,
) -> None:
    name = getattr(function, "__name__", repr(function))
    fine = np.ones(_POINTS, dtype=bool) if fine is None else fine
    if not np.isfinite(jac[..., fine]).all():
        raise ModelError(f"the Jacobian of `{name}` is not finite at a probing point: {_RULE}")
    scale = np.concatenate([np.full(b.tangent, b.scale) for b in space.blocks])
    for j in range(space.d):
        h = 1e-5 * scale[j]
        delta = np.zeros((space.d, _POINTS))
        delta[j] = h
        ahead, back = moved(delta), moved(-delta)
        error = np.abs((ahead - back) / (2 * h) - jac[:, j])
        # a kink (np.maximum) may lie at the zero points: there one side is enough
        for side in (ahead, -back):
            error[:, -2:] = np.minimum(error[:, -2:], np.abs(side / h - jac[:, j])[:, -2:])
        size = np.abs(jac[..., fine]).max(initial=0) * scale.max() / scale[j] + 1
        worst = error[:, fine].max(initial=0) / size
        if not worst < 1e-4:
            raise ModelError(
                f"the Jacobian of `{name}` with respect to {space.components()[j][0]} differs "
                f"from central differences by {worst:.1e}: {_RULE}"
            )
