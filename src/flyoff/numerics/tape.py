"""Traced functions as a NumPy tape over the run axis.

A model function is called once with casadi symbols; the resulting expression graph becomes a list
of elementary operations. `Tape` holds that list as plain data (so it pickles and needs no casadi
afterwards) and runs it with NumPy ufuncs into reused buffers. Each operation works on the smallest
shape its operands need: what depends only on the step is computed once, what depends on the run
but not on the sigma point once a run.
"""

from __future__ import annotations

import math
from collections import OrderedDict
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property, partial
from typing import Any

import numpy as np

from flyoff.numerics.counts import Counts
from flyoff.numerics.spaces import Array

__all__ = ["Pattern", "Tape"]

# casadi instruction name -> ufunc name in NumPy; "special" ones are expanded in `_Plan`
_UNARY = {
    "NEG": "negative", "SQRT": "sqrt", "SIN": "sin", "COS": "cos", "TAN": "tan", "ASIN": "arcsin",
    "ACOS": "arccos", "ATAN": "arctan", "FABS": "absolute", "FLOOR": "floor", "CEIL": "ceil",
    "SIGN": "sign", "EXP": "exp", "LOG": "log", "SINH": "sinh", "COSH": "cosh", "TANH": "tanh",
    "ASINH": "arcsinh", "ACOSH": "arccosh", "ATANH": "arctanh", "EXPM1": "expm1",
    "LOG1P": "log1p", "INV": "reciprocal", "NOT": "logical_not", "SQ": "square",
}  # fmt: skip
_BINARY = {
    "ADD": "add", "SUB": "subtract", "MUL": "multiply", "DIV": "divide", "POW": "power",
    "CONSTPOW": "power", "FMIN": "minimum", "FMAX": "maximum", "ATAN2": "arctan2",
    "HYPOT": "hypot", "COPYSIGN": "copysign", "FMOD": "fmod", "REMAINDER": "remainder",
}  # fmt: skip
_COMPARE = {
    "LT": "less", "LE": "less_equal", "EQ": "equal", "NE": "not_equal",
    "AND": "logical_and", "OR": "logical_or",
}  # fmt: skip
_LOGICAL = {*_COMPARE, "NOT"}
_FREE = {"CONST", "INPUT", "SELECT_ZERO", "SELECT", *_COMPARE, "NOT", "NEG"}
_COUNTED_AS = {
    "ADD": "add", "SUB": "add", "FABS": "add", "SIGN": "add", "FLOOR": "add", "CEIL": "add",
    "FMIN": "add", "FMAX": "add", "COPYSIGN": "add", "TWICE": "add",
    "MUL": "mul", "SQ": "mul",
    "DIV": "div", "INV": "div", "FMOD": "div", "REMAINDER": "div",
    "SQRT": "sqrt", "HYPOT": "sqrt",
}  # fmt: skip


@dataclass(frozen=True)
class Pattern:
    """Shape of a traced matrix and where its nonzeros lie."""

    shape: tuple[int, int]
    entries: tuple[tuple[int, int], ...]

    @property
    def nonzeros(self) -> int:
        """Number of structural nonzeros."""
        return len(self.entries)

    @cached_property
    def columns(self) -> slice:
        """The span of columns that hold nonzeros."""
        places = [c for _, c in self.entries]
        return slice(min(places), max(places) + 1) if places else slice(0, 0)


@dataclass(frozen=True)
class _Op:
    """One value in single-assignment form."""

    name: str
    args: tuple[int, ...]
    const: float = 0.0


class Tape:
    """A traced function of named groups of scalars.

    Parameters
    ----------
    groups : dict of str to casadi SX column vectors
        Inputs, in call order.
    outputs : list of casadi SX scalars
    """

    _PLANS = 12

    def __init__(self, groups: dict[str, Any], outputs: Sequence[Any]) -> None:
        self.groups = {name: int(sym.numel()) for name, sym in groups.items()}
        self.ops, self.out = _single_assignment(list(groups.values()), list(outputs))
        self._plans: OrderedDict[Any, _Branching] = OrderedDict()

    def __getstate__(self) -> dict[str, Any]:
        return {"groups": self.groups, "ops": self.ops, "out": self.out}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._plans = OrderedDict()

    def counts(self) -> Counts:
        """Operations of one evaluation; selects, comparisons and sign changes are free."""
        tally = {"add": 0, "mul": 0, "div": 0, "sqrt": 0, "transcendental": 0}
        for op in self.ops:
            if op.name not in _FREE:
                tally[_COUNTED_AS.get(op.name, "transcendental")] += 1
        return Counts(**tally)

    def depends_on(self, group: str) -> bool:
        """Whether any output depends on an input group."""
        first = 0
        for name, size in self.groups.items():
            if name == group:
                break
            first += size
        wanted = set(range(first, first + self.groups[group]))
        seen: set[int] = set()
        stack = list(self.out)
        while stack:
            i = stack.pop()
            if i in seen:
                continue
            seen.add(i)
            op = self.ops[i]
            if op.name == "INPUT" and int(op.const) in wanted:
                return True
            stack.extend(op.args)
        return False

    def __call__(self, *inputs: Array) -> Array:
        """Evaluate.

        Parameters
        ----------
        *inputs : one array a group, (k, *batch); batches broadcast against each other

        Returns
        -------
        (outputs, *batch), a fresh array in the dtype of the first input
        """
        key = (inputs[0].dtype, *(x.shape for x in inputs))
        plan = self._plans.get(key)
        if plan is None:
            plan = _Branching(self, inputs)
            self._plans[key] = plan
            if len(self._plans) > self._PLANS:
                self._plans.popitem(last=False)
        return plan.run(inputs)


def _single_assignment(symbols: list[Any], outputs: list[Any]) -> tuple[list[_Op], list[int]]:
    import casadi as ca

    names = {getattr(ca, n): n[3:] for n in dir(ca) if n.startswith("OP_")}
    flat = ca.vertcat(*outputs) if outputs else ca.SX(0, 1)
    args = [s if s.numel() else ca.SX.sym("none", 0) for s in symbols]
    f = ca.Function("f", args, [ca.densify(ca.cse(flat))], {"allow_free": False})
    start = [0]
    for s in symbols:
        start.append(start[-1] + int(s.numel()))
    ops: list[_Op] = []
    index: dict[_Op, int] = {}
    register: dict[int, int] = {}
    out = [-1] * len(outputs)

    def emit(op: _Op) -> int:
        if op not in index:
            index[op] = len(ops)
            ops.append(op)
        return index[op]

    for k in range(f.n_instructions()):
        name = names[f.instruction_id(k)]
        ins, outs = f.instruction_input(k), f.instruction_output(k)
        if name == "OUTPUT":
            out[outs[1]] = register[ins[0]]
            continue
        if name == "INPUT":
            op = _Op("INPUT", (), float(start[ins[0]] + ins[1]))
        elif name == "CONST":
            op = _Op("CONST", (), float(f.instruction_constant(k)))
        elif name == "ASSIGN":
            register[outs[0]] = register[ins[0]]
            continue
        elif name == "IF_ELSE_ZERO":
            op = _Op("SELECT_ZERO", tuple(register[i] for i in ins))
        else:
            if name not in _UNARY and name not in _BINARY and name not in _COMPARE | {"TWICE": 0}:
                raise ValueError(f"operation {name} has no counterpart on the tape")
            op = _Op(name, tuple(register[i] for i in ins))
        register[outs[0]] = emit(op)
    zero = -1
    for i, v in enumerate(out):
        if v < 0:  # a structural zero
            zero = emit(_Op("CONST", (), 0.0)) if zero < 0 else zero
            out[i] = zero
    return _prune(_pair_sin_cos(_fuse_selects(ops)), out)


def _pair_sin_cos(ops: list[_Op]) -> list[_Op]:
    """Mark sine and cosine of one angle: in double both come from one tangent, 1.5-5 times faster.

    Marked once for the whole tape, so that every specialised form of it has the same bits.
    """
    kinds: dict[int, set[str]] = {}
    for op in ops:
        if op.name in ("SIN", "COS"):
            kinds.setdefault(op.args[0], set()).add(op.name)
    return [
        _Op(op.name + "_PAIR", op.args)
        if op.name in ("SIN", "COS") and len(kinds[op.args[0]]) == 2
        else op
        for op in ops
    ]


def _conditions(ops: list[_Op]) -> list[int]:
    """The comparisons that selects depend on."""
    roots: set[int] = set()
    for op in ops:
        if op.name in ("SELECT", "SELECT_ZERO"):
            c = op.args[0]
            roots.add(ops[c].args[0] if ops[c].name == "NOT" else c)
    return sorted(roots)


def _specialised(ops: list[_Op], out: list[int], truth: bool) -> tuple[list[_Op], list[int]]:
    """The tape where every condition holds (or fails) in all runs: the other branch is gone."""
    holds = dict.fromkeys(_conditions(ops), truth)
    place: dict[int, int] = {}
    new: list[_Op] = []

    def put(op: _Op) -> int:
        new.append(op)
        return len(new) - 1

    for i, op in enumerate(ops):
        if op.name in ("SELECT", "SELECT_ZERO"):
            c = op.args[0]
            value = holds[c] if c in holds else not holds[ops[c].args[0]]
            if op.name == "SELECT":
                place[i] = place[op.args[1] if value else op.args[2]]
            else:
                place[i] = place[op.args[1]] if value else put(_Op("CONST", (), 0.0))
        else:
            place[i] = put(_Op(op.name, tuple(place[a] for a in op.args), op.const))
    return _prune(new, [place[o] for o in out])


def _fuse_selects(ops: list[_Op]) -> list[_Op]:
    """Turn ``(c ? a : 0) + (!c ? b : 0)`` into one masked select ``c ? a : b``."""
    fused = list(ops)
    for i, op in enumerate(ops):
        if op.name != "ADD":
            continue
        x, y = ops[op.args[0]], ops[op.args[1]]
        if x.name != "SELECT_ZERO" or y.name != "SELECT_ZERO":
            continue
        cx, cy = x.args[0], y.args[0]
        if ops[cy].name == "NOT" and ops[cy].args[0] == cx:
            fused[i] = _Op("SELECT", (cx, x.args[1], y.args[1]))
        elif ops[cx].name == "NOT" and ops[cx].args[0] == cy:
            fused[i] = _Op("SELECT", (cy, y.args[1], x.args[1]))
    return fused


def _prune(ops: list[_Op], out: list[int]) -> tuple[list[_Op], list[int]]:
    used = set(out)
    for i in range(len(ops) - 1, -1, -1):
        if i in used:
            used.update(ops[i].args)
    order = sorted(used)
    place = {old: new for new, old in enumerate(order)}
    kept = [_Op(ops[i].name, tuple(place[a] for a in ops[i].args), ops[i].const) for i in order]
    return kept, [place[o] for o in out]


class _Branching:
    """The tape bound to one set of input shapes, with short forms for uniform branches.

    Series and closed forms meet in selects. Where a condition is the same in all runs, as it nearly
    always is, the form without the other branch gives the same bits with fewer operations.
    """

    def __init__(self, tape: Tape, inputs: Sequence[Array]) -> None:
        ops, out = tape.ops, tape.out
        dtype = inputs[0].dtype
        self.buffers: list[tuple[int, Array]] = []
        source: list[Array] = []
        for i, (x, (name, size)) in enumerate(zip(inputs, tape.groups.items(), strict=True)):
            if x.shape[:1] != (size,):
                raise ValueError(f"group `{name}` has {size} components, got shape {x.shape}")
            # a batch of one is common to all runs: work on scalars
            batch = () if math.prod(x.shape[1:]) == 1 else x.shape[1:]
            buffer = np.empty((size, *batch), dtype=dtype)
            if size:
                self.buffers.append((i, buffer))
            source.extend(buffer[k, ...] for k in range(size))
        shape = np.broadcast_shapes(*(x.shape[1:] for x in inputs))
        self.full = _Plan(ops, out, source, shape, dtype)
        self.conditions: _Plan | None = None
        roots = _conditions(ops)
        if roots:
            forms = {t: _specialised(ops, out, t) for t in (True, False)}
            if min(len(o) for o, _ in forms.values()) < 0.95 * len(ops):
                self.conditions = _Plan(*_prune(ops, roots), source, shape, dtype, bool)
                self.short = {t: _Plan(*f, source, shape, dtype) for t, f in forms.items()}

    def run(self, inputs: Sequence[Array]) -> Array:
        for i, buffer in self.buffers:
            x = inputs[i]
            buffer[...] = x if x.shape == buffer.shape else x.reshape(buffer.shape)
        if self.conditions is None:
            return self.full.run().copy()
        held = self.conditions.run()
        if held.all():
            return self.short[True].run().copy()
        if not held.any():
            return self.short[False].run().copy()
        return self.full.run().copy()


class _Plan:
    """A list of operations bound to buffers; `source` holds the input rows."""

    def __init__(
        self,
        ops: list[_Op],
        out: list[int],
        source: list[Array],
        batch: tuple[int, ...],
        dtype: Any,
        kind: Any = None,
    ) -> None:
        self.batch = batch
        self.result = np.empty((len(out), *batch), dtype=kind or dtype)
        last_use = {i: i for i in range(len(ops))}
        for i, op in enumerate(ops):
            for a in op.args:
                last_use[a] = i
        keep = set(out)
        pairs = _sin_cos_pairs(ops)
        place: dict[int, Array] = {}
        done: set[int] = set()
        free: dict[tuple[Any, ...], list[Array]] = {}
        self.steps: list[tuple[Any, tuple[Any, ...]]] = []
        target: dict[int, int] = {}
        for row, i in enumerate(out):
            if ops[i].name not in ("INPUT", "CONST"):
                target.setdefault(i, row)

        def take(shape: tuple[int, ...], kind: Any) -> Array:
            stack = free.setdefault((shape, np.dtype(kind)), [])
            return stack.pop() if stack else np.empty(shape, dtype=kind)

        def give(i: int, at: int) -> None:
            if last_use[i] == at and i not in keep and ops[i].name not in ("INPUT", "CONST"):
                free[place[i].shape, place[i].dtype].append(place[i])

        for i, op in enumerate(ops):
            if op.name == "INPUT":
                place[i] = source[int(op.const)]
                continue
            if op.name == "CONST":
                place[i] = np.array(op.const, dtype=dtype)
                continue
            args = [place[a] for a in op.args]
            shape = np.broadcast_shapes(*(a.shape for a in args))
            if i in done:
                for a in set(op.args):
                    give(a, i)
                continue
            if i in target and shape == self.batch:
                place[i] = self.result[target[i], ...]
            else:
                place[i] = take(shape, bool if op.name in _LOGICAL else dtype)
            dest = place[i]
            if i in pairs:
                other = pairs[i]
                if other is None:
                    spare = take(shape, dtype)
                else:
                    fits = other in target and shape == self.batch
                    spare = self.result[target[other], ...] if fits else take(shape, dtype)
                    place[other] = spare
                    done.add(other)
                sine = op.name == "SIN_PAIR"
                work = take(shape, dtype)
                self._sin_cos(
                    args[0], dest if sine else spare, spare if sine else dest, work, dtype
                )
                free[work.shape, work.dtype].append(work)
                if other is None:
                    free[spare.shape, spare.dtype].append(spare)
            else:
                self._emit(op.name, args, dest, dtype)
            for a in set(op.args):
                give(a, i)
        for row, i in enumerate(out):
            if ops[i].name == "CONST":
                self.result[row] = ops[i].const
            elif ops[i].name == "INPUT" or target[i] != row or place[i].shape != self.batch:
                self.steps.append((np.copyto, (self.result[row, ...], place[i])))

    def _emit(self, name: str, args: list[Array], dest: Array, dtype: Any) -> None:
        add = self.steps.append
        if name == "SELECT":
            add((np.copyto, (dest, args[2])))
            add((_copy_where, (dest, args[1], args[0])))
        elif name == "SELECT_ZERO":
            add((np.copyto, (dest, np.zeros((), dtype))))
            add((_copy_where, (dest, args[1], args[0])))
        elif name == "TWICE":
            add((np.add, (args[0], args[0], dest)))
        else:
            ufunc = getattr(np, _UNARY.get(name) or _BINARY.get(name) or _COMPARE[name])
            if ufunc in (np.maximum, np.minimum):
                ufunc = partial(ufunc, out=dest)  # these two refuse a positional output
                add((ufunc, tuple(args)))
            else:
                add((ufunc, (*args, dest)))

    def _sin_cos(self, x: Array, s: Array, c: Array, t: Array, dtype: Any) -> None:
        if dtype != np.float64:
            self.steps += [(np.sin, (x, s)), (np.cos, (x, c))]
            return
        one, half = np.array(1, dtype), np.array(0.5, dtype)
        self.steps += [
            (np.multiply, (x, half, t)),
            (np.tan, (t, t)),
            (np.multiply, (t, t, c)),
            (np.add, (c, one, s)),  # 1 + t^2
            (np.subtract, (one, c, c)),
            (np.divide, (c, s, c)),
            (np.divide, (t, s, s)),
            (np.add, (s, s, s)),
        ]

    def run(self) -> Array:
        """Evaluate into the plan's own result, which the next run overwrites."""
        for function, args in self.steps:
            function(*args)
        return self.result


def _copy_where(dest: Array, value: Array, mask: Array) -> None:
    np.copyto(dest, value, where=mask)


def _sin_cos_pairs(ops: list[_Op]) -> dict[int, int | None]:
    """The partner of every paired sine and cosine; None where it has been pruned."""
    seen = {(op.name, op.args[0]): i for i, op in enumerate(ops) if op.name.endswith("_PAIR")}
    return {
        i: seen.get(("COS_PAIR" if name == "SIN_PAIR" else "SIN_PAIR", arg))
        for (name, arg), i in seen.items()
    }
