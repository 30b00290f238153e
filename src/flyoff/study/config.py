"""Experiment files: read, validated, resolved; every mistake with its line, all at once."""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, TypeAdapter, ValidationError

from flyoff.errors import UserError, nearest
from flyoff.options import Count, Positive, Unit, convert, suffix_units
from flyoff.registry import discover
from flyoff.scores.contract import Divergence, window_steps
from flyoff.study.yaml_tree import Path_, Tree, read_yaml

__all__ = ["Entry", "Experiment", "ProblemEntry", "load_experiment", "select"]

NAME_PATTERN = r"^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$"
_LATER = {
    "airframe", "sweeps", "requirements", "weights", "tuning", "replicates", "precision",
    "parameterisation", "scenario",
}  # fmt: skip

Name = Annotated[str, Field(pattern=NAME_PATTERN)]
Seconds = Annotated[Positive, Unit("s")]
Only = list[Name]


def _nominal() -> dict[str, dict[str, Any]]:
    return {"nominal": {}}


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class DivergenceSpec(_Section):
    """When a run counts as lost."""

    error: dict[str, Any] = Field(default_factory=dict)
    hold: Seconds = 1.0
    converge_by: Annotated[float, Unit("s"), Field(ge=0)] = 0.0


class FilteringSpec(_Section):
    """What the time loop does, the same for every candidate."""

    late: Literal["apply", "drop", "replay"] = "replay"


class ProblemSpec(_Section):
    """A problem of an experiment."""

    kind: str
    parameters: dict[str, Any] = Field(default_factory=dict)
    runs: Count | None = None
    windows: dict[Name, list[str | int | float]] | None = None
    divergence: DivergenceSpec | None = None


class ExperimentFile(_Section):
    """The keys of an experiment file."""

    format: Literal[1]
    experiment: Name
    purpose: str = ""
    seed: Annotated[int, Field(strict=True, ge=0, le=2**63 - 1)]
    runs: Count
    windows: dict[Name, list[str | int | float]] = Field(default_factory=dict)
    divergence: DivergenceSpec = DivergenceSpec()
    filtering: FilteringSpec = FilteringSpec()
    problems: dict[Name, ProblemSpec] = Field(min_length=1)
    conditions: dict[Name, dict[str, Any]] = Field(default_factory=_nominal)
    estimators: dict[Name, dict[str, Any]] = Field(min_length=1)


@dataclasses.dataclass(frozen=True)
class Entry:
    """An estimator or a condition of an experiment: its name, what it is, where it applies."""

    name: str
    what: Any
    only: tuple[str, ...] = ()

    def applies(self, problem: str) -> bool:
        """Whether it is used on a problem."""
        return not self.only or problem in self.only


@dataclasses.dataclass(frozen=True)
class ProblemEntry:
    """A resolved problem: windows in seconds (`end` is the duration), bounds in SI."""

    name: str
    kind: str
    problem: Any
    runs: int
    windows: tuple[tuple[str, float, float], ...]
    divergence: Divergence


@dataclasses.dataclass(frozen=True)
class Experiment:
    """A resolved experiment."""

    name: str
    purpose: str
    seed: int
    runs: int
    late: Literal["apply", "drop", "replay"]
    problems: tuple[ProblemEntry, ...]
    conditions: tuple[Entry, ...]
    estimators: tuple[Entry, ...]
    source: bytes
    file: str
    only: tuple[str, ...] = ()


def load_experiment(path: Path) -> Experiment:
    """Read and resolve an experiment file.

    Raises
    ------
    UserError
        One line a mistake, each with file and line, all at once.
    """
    tree = read_yaml(path)
    if not isinstance(tree.data, dict):
        raise UserError(f"{tree.file}:1: must be a mapping of keys (format, experiment, ...)")
    check = _Check(tree)
    spec = check.model(ExperimentFile, tree.data, ())
    raw: dict[str, Any] = tree.data
    problems = _problems(check, raw, spec)
    conditions = _conditions(check, raw, problems)
    estimators = _estimators(check, raw, problems)
    if spec is not None and not check.errors:
        _every_problem_is_used(check, problems, conditions, estimators)
        _suits(check, problems, estimators)
    check.stop()
    assert spec is not None
    return Experiment(
        spec.experiment,
        spec.purpose,
        spec.seed,
        spec.runs,
        spec.filtering.late,
        tuple(problems.values()),
        conditions,
        estimators,
        path.read_bytes(),
        tree.file,
    )


def select(experiment: Experiment, only: Sequence[str]) -> Experiment:
    """Keep the named problems, conditions and estimators; kinds that are not named stay whole.

    Raises
    ------
    UserError
        For a name that the experiment does not have.
    """
    kept: dict[str, Any] = {}
    known: set[str] = set()
    for kind in ("problems", "conditions", "estimators"):
        entries = getattr(experiment, kind)
        known |= {e.name for e in entries}
        chosen = tuple(e for e in entries if e.name in only)
        kept[kind] = chosen or entries
    for name in only:
        if name not in known:
            raise UserError(
                f"--only {name}: no problem, condition or estimator of that name"
                f"{nearest(name, known)}"
            )
    part = dataclasses.replace(experiment, **kept, only=tuple(only))
    used = tuple(
        p
        for p in part.problems
        if any(c.applies(p.name) for c in part.conditions)
        and any(e.applies(p.name) for e in part.estimators)
    )
    if not used:
        raise UserError(f"--only {' '.join(only)}: no cell of the experiment is left")
    return dataclasses.replace(part, problems=used)


class _Check:
    """Collects mistakes with their lines."""

    def __init__(self, tree: Tree) -> None:
        self.tree = tree
        self.errors: dict[str, int] = {}

    def error(self, path: Path_, text: str) -> None:
        line = self.tree.line(path)
        field = ".".join(map(str, path))
        self.errors.setdefault(
            f"{self.tree.file}:{line}: {field + ': ' if field else ''}{text}", line
        )

    def stop(self) -> None:
        if self.errors:
            raise UserError(*sorted(self.errors, key=lambda e: self.errors[e]))

    def model(self, cls: Any, data: Any, path: Path_) -> Any:
        """Validate `data` as a pydantic class; None if there was a mistake."""
        data, renamed = _plain_units(cls, data)
        try:
            return TypeAdapter(cls).validate_python(data, context={"from_file": True})
        except ValidationError as why:
            for e in why.errors(include_url=False):
                self._translate(cls, e, path, renamed)
        except UserError as why:
            self.error(path, str(why))
        return None

    def _translate(self, cls: Any, e: Any, path: Path_, renamed: Mapping[str, str]) -> None:
        at: Path_ = path
        for step in e["loc"]:
            step = renamed.get(step, step) if at == path else step
            known = (*at, step) in self.tree.lines
            missing = e["type"] in ("missing", "missing_argument") and step == e["loc"][-1]
            if known or missing:
                at = (*at, step)
        key = str(e["loc"][-1]) if e["loc"] else ""
        kind, ctx, got = e["type"], e.get("ctx", {}), e.get("input")
        if kind in ("extra_forbidden", "unexpected_keyword_argument"):
            if key in _LATER:
                self.error(at, "is not available in this version: remove it")
            else:
                self.error(at, f"unknown key{nearest(key, _keys(cls, e['loc']))}")
        elif kind in ("missing", "missing_argument"):
            self.error(at, "is required")
        elif kind == "union_tag_invalid":
            tags = re.findall(r"'([^']+)'", str(ctx.get("expected_tags", "")))
            tag = ctx.get("discriminator", "").strip("'")
            self.error(
                (*at, tag), f"unknown {tag} `{ctx.get('tag')}`{nearest(ctx.get('tag', ''), tags)}"
            )
        elif kind == "union_tag_not_found":
            self.error(at, f"needs {ctx.get('discriminator')}, the name of a rule")
        elif kind == "literal_error":
            names = re.findall(r"'([^']*)'", str(ctx.get("expected", ""))) or [str(ctx["expected"])]
            hint = nearest(str(got), names) if isinstance(got, str) else ""
            self.error(
                at, f"must be {_choice(names)}, got {_show(got)}{hint if 'mean' in hint else ''}"
            )
        else:
            # what the file says, not what it was converted to
            written = self.tree.at(at)
            got = got if isinstance(written, dict | list) else written
            self.error(at, f"{_rule(kind, ctx, e['msg'])}, got {_show(got)}")


def _rule(kind: str, ctx: Mapping[str, Any], message: str) -> str:
    rules = {
        "greater_than": "must be greater than {gt:.10g}",
        "greater_than_equal": "must be at least {ge:.10g}",
        "less_than": "must be less than {lt:.10g}",
        "less_than_equal": "must be at most {le:.10g}",
        "too_short": "must not be empty",
        "finite_number": "must be a finite number",
        "string_pattern_mismatch": "must be a name of letters, digits, `.`, `_`, `-`, at most 64",
    }
    if kind in rules:
        return rules[kind].format(**ctx)
    if kind.startswith("int"):
        return "must be a whole number"
    if kind.startswith("float"):
        return "must be a number"
    if kind.startswith("bool"):
        return "must be true or false"
    if kind.startswith("string"):
        return "must be text"
    if kind.startswith(("dict", "model", "dataclass")):
        return "must be a mapping of keys"
    if kind.startswith(("list", "tuple")):
        return "must be a list"
    return message[0].lower() + message[1:]


def _show(value: Any) -> str:
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "a mapping"
    if isinstance(value, list):
        return "a list"
    text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _choice(names: list[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1]


def _keys(cls: Any, loc: tuple[Any, ...]) -> set[str]:
    """Keys known at the place of an unknown one."""
    if isinstance(cls, type) and issubclass(cls, BaseModel):
        here: Any = cls
        for step in loc[:-1]:
            fields = getattr(here, "model_fields", {})
            if step in fields:
                here = _section_of(fields[step].annotation)
        fields = getattr(here, "model_fields", {})
        return set(fields)
    rules = discover("point-rule")
    for step in loc[:-1]:
        if step in rules:
            cls = rules[step]
    return {f.name for f in dataclasses.fields(cls)}


def _section_of(annotation: Any) -> Any:
    for part in (annotation, *getattr(annotation, "__args__", ())):
        if isinstance(part, type) and issubclass(part, BaseModel):
            return part
    return annotation


def _plain_units(cls: Any, data: Any) -> tuple[Any, dict[str, str]]:
    """Turn ``range_sigma_m: 10`` into ``range_sigma: 10 m``; the second value maps names back."""
    if not isinstance(data, dict) or not dataclasses.is_dataclass(cls):
        return data, {}
    fields = {f.name for f in dataclasses.fields(cls)}
    out: dict[str, Any] = {}
    renamed: dict[str, str] = {}
    suffixes = suffix_units()
    for key, value in data.items():
        for token, unit in suffixes.items():
            name = key[: -len(token) - 1] if key.endswith("_" + token) else ""
            if key not in fields and name in fields and name not in data and name not in out:
                out[name] = f"{value} {unit}" if not isinstance(value, bool) else value
                renamed[name] = key
                break
        else:
            out[key] = value
    return out, renamed


# -- sections --------------------------------------------------------------------------------------


def _mapping(raw: Any, key: str) -> dict[str, Any]:
    value = raw.get(key)
    return value if isinstance(value, dict) else {}


def _problems(
    check: _Check, raw: dict[str, Any], spec: ExperimentFile | None
) -> dict[str, ProblemEntry]:
    kinds = discover("problem")
    found: dict[str, ProblemEntry] = {}
    names: set[str] = set()
    for name, entry in _mapping(raw, "problems").items():
        path: Path_ = ("problems", name)
        if not isinstance(entry, dict):
            continue
        kind = entry.get("kind")
        if not isinstance(kind, str):
            continue
        if kind not in kinds:
            check.error((*path, "kind"), f"unknown problem `{kind}`{nearest(kind, kinds)}")
            continue
        problem = check.model(kinds[kind], entry.get("parameters") or {}, (*path, "parameters"))
        if problem is None:
            continue
        names |= {q.name for q in problem.quantities}
        if spec is None or name not in spec.problems:
            continue
        own = spec.problems[name]
        windows = _windows(check, problem, own.windows, spec.windows, path)
        own_limits = own.divergence is not None
        limits = own.divergence if own.divergence is not None else spec.divergence
        where: Path_ = (*path, "divergence") if own_limits else ("divergence",)
        divergence = _divergence(check, problem, limits, where, strict=own_limits)
        runs = own.runs or problem.runs_by_default or spec.runs
        found[name] = ProblemEntry(name, kind, problem, runs, windows, divergence)
    for quantity in _mapping(_mapping(raw, "divergence"), "error"):
        if names and quantity not in names:
            check.error(
                ("divergence", "error", quantity),
                f"no problem scores `{quantity}`{nearest(quantity, names)}",
            )
    return found


def _seconds(check: _Check, value: Any, path: Path_, end: float) -> float | None:
    if value == "end":
        return end
    if isinstance(value, str):
        try:
            return convert(value, "s")
        except ValueError as why:
            check.error(path, f"{why} or `end`, got {value}")
            return None
    if value == 0:
        return 0.0
    check.error(path, f"needs a unit, as in `{value} s`, got {value}")
    return None


def _windows(
    check: _Check, problem: Any, own: Any, common: Any, path: Path_
) -> tuple[tuple[str, float, float], ...]:
    if problem.segments:
        return tuple((s.name, s.start, s.end) for s in problem.segments)
    chosen = own if own is not None else common
    where: Path_ = (*path, "windows") if own is not None else ("windows",)
    end = problem.duration
    if not chosen:
        return (("all", 0.0, end),)
    out = []
    for name, pair in chosen.items():
        if len(pair) != 2:
            check.error((*where, name), f"must be [start, end], got {len(pair)} values")
            continue
        ends = [_seconds(check, v, (*where, name), end) for v in pair]
        if None in ends:
            continue
        a, b = ends
        assert a is not None
        assert b is not None
        b = min(b, end)
        if not 0 <= a < b:
            check.error(
                (*where, name),
                f"must start before it ends and within the {end:g} s of `{path[-1]}`, "
                f"got {_show(pair[0])} to {_show(pair[1])}",
            )
            continue
        step = problem.step
        first, last = window_steps(a, b, step)
        if last < first:
            check.error((*where, name), f"holds no step of `{path[-1]}` ({step:g} s each)")
            continue
        out.append((name, a, b))
    return tuple(out)


def _divergence(
    check: _Check, problem: Any, spec: DivergenceSpec, path: Path_, strict: bool
) -> Divergence:
    bounds = {}
    quantities = {q.name: q for q in problem.quantities}
    for name, text in spec.error.items():
        if name not in quantities:
            if strict:
                check.error(
                    (*path, "error", name),
                    f"the problem does not score `{name}`{nearest(name, quantities)}",
                )
            continue
        unit = quantities[name].unit
        if not isinstance(text, str):
            check.error((*path, "error", name), f"needs a unit, as in `{text} {unit}`, got {text}")
            continue
        try:
            bound = convert(text, unit)
        except ValueError as why:
            check.error((*path, "error", name), f"{why}, got {text}")
            continue
        if bound <= 0:
            check.error((*path, "error", name), f"must be greater than 0, got {text}")
        bounds[name] = bound
    return Divergence(bounds, spec.hold, min(spec.converge_by, problem.duration))


def _only(check: _Check, entry: dict[str, Any], path: Path_, problems: Any) -> tuple[str, ...]:
    only = entry.get("only", [])
    if not isinstance(only, list) or not all(isinstance(o, str) for o in only):
        check.error((*path, "only"), f"must be a list of problem names, got {_show(only)}")
        return ()
    for name in only:
        if problems and name not in problems:
            check.error((*path, "only"), f"no problem `{name}`{nearest(name, problems)}")
    return tuple(only)


def _conditions(check: _Check, raw: dict[str, Any], problems: Any) -> tuple[Entry, ...]:
    known = discover("condition")
    sections = {k.split(".")[0] for k in known} | {"only"}
    out = []
    given = _mapping(raw, "conditions") if "conditions" in raw else {"nominal": {}}
    declared = _mapping(raw, "problems")
    for name, entry in given.items():
        path: Path_ = ("conditions", name)
        if not isinstance(entry, dict):
            continue
        changes = []
        for section, body in entry.items():
            if section == "only":
                continue
            if section not in sections:
                check.error((*path, section), f"unknown key{nearest(section, sections)}")
                continue
            if not isinstance(body, dict):
                check.error((*path, section), f"must be a mapping of keys, got {_show(body)}")
                continue
            for key, value in body.items():
                full = f"{section}.{key}"
                if full not in known:
                    keys = [k.split(".", 1)[1] for k in known if k.startswith(section + ".")]
                    check.error((*path, section, key), f"unknown key{nearest(key, keys)}")
                    continue
                change = _change(check, known[full], value, (*path, section, key))
                if change is not None:
                    changes.append((full, change))
        changes.sort(key=lambda pair: pair[0])
        out.append(Entry(name, tuple(c for _, c in changes), _only(check, entry, path, declared)))
    return tuple(out)


def _change(check: _Check, cls: Any, value: Any, path: Path_) -> Any:
    try:
        return TypeAdapter(cls).validate_python({"value": value}, context={"from_file": True})
    except ValidationError as why:
        e = why.errors(include_url=False)[0]
        check.error(path, f"{_rule(e['type'], e.get('ctx', {}), e['msg'])}, got {_show(value)}")
        return None


def _estimators(check: _Check, raw: dict[str, Any], problems: Any) -> tuple[Entry, ...]:
    families = discover("estimator")
    declared = _mapping(raw, "problems")
    out = []
    for name, entry in _mapping(raw, "estimators").items():
        path: Path_ = ("estimators", name)
        if not isinstance(entry, dict):
            continue
        only = _only(check, entry, path, declared)
        family = entry.get("family")
        if family is None:
            check.error((*path, "family"), f"is required{nearest('', families)}")
            continue
        if not isinstance(family, str) or family not in families:
            check.error(
                (*path, "family"), f"unknown family `{family}`{nearest(str(family), families)}"
            )
            continue
        options = {k: v for k, v in entry.items() if k not in ("family", "only")}
        chosen = check.model(families[family], options, path)
        if chosen is not None:
            out.append(Entry(name, chosen, only))
    return tuple(out)


def _every_problem_is_used(
    check: _Check,
    problems: dict[str, ProblemEntry],
    conditions: Iterable[Entry],
    estimators: Iterable[Entry],
) -> None:
    for name in problems:
        for kind, entries in (("condition", conditions), ("estimator", estimators)):
            if not any(e.applies(name) for e in entries):
                check.error(("problems", name), f"no {kind} applies to it")


def _suits(check: _Check, problems: dict[str, ProblemEntry], estimators: Iterable[Entry]) -> None:
    for entry in problems.values():
        try:
            model = entry.problem.filter_model()
        except Exception as error:
            check.error(("problems", entry.name), f"its parameters give no model ({error})")
            continue
        for estimator in estimators:
            if not estimator.applies(entry.name):
                continue
            try:
                why = estimator.what.suits(model)
                rule = getattr(estimator.what, "points", None)
                if why is None and rule is not None:
                    rule.points(model.space.d)
            except UserError as error:
                why = str(error)
            except Exception as error:
                why = f"{type(error).__name__}: {error}"
            if why is not None:
                check.error(
                    ("estimators", estimator.name),
                    f"cannot run on `{entry.name}`: {why}; name its problems under `only`",
                )
