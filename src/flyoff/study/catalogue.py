"""What can be named in an experiment file, read off the code: for people and for editors."""

from __future__ import annotations

import dataclasses
import inspect
import math
from typing import Any

from pydantic import TypeAdapter

from flyoff.options import Unit, suffix_units
from flyoff.problems.linear_tracking import LinearTracking
from flyoff.registry import citation, discover
from flyoff.scores.contract import Divergence
from flyoff.study.config import NAME_PATTERN, ExperimentFile

__all__ = ["KINDS", "Item", "Option", "catalogue", "experiment_schema", "markdown"]

KINDS = {
    "estimator": "Estimators",
    "point-rule": "Point rules",
    "problem": "Problems",
    "condition": "Conditions",
    "score": "Scores",
}


@dataclasses.dataclass(frozen=True)
class Option:
    """One option: its name, default and unit as shown, and the rule its value must keep."""

    name: str
    default: str
    unit: str
    rule: str


@dataclasses.dataclass(frozen=True)
class Item:
    """One registered thing."""

    kind: str
    name: str
    purpose: str
    cites: str
    options: tuple[Option, ...]
    rows: tuple[str, ...] = ()


def catalogue() -> list[Item]:
    """Everything registered, by kind and name."""
    out = []
    for kind in KINDS:
        for name, cls in discover(kind).items():
            purpose = (inspect.getdoc(cls) or "").split("\n\n")[0].replace("\n", " ")
            rows = _rows(cls) if kind == "score" else ()
            out.append(Item(kind, name, purpose, citation(kind, name), _options(cls), rows))
    return out


def _rows(cls: Any) -> tuple[str, ...]:
    """The statistics a score makes, seen on the linear problem."""
    problem = LinearTracking()
    limits = Divergence({"position": 1.0})
    found = cls.statistics(problem.quantities, problem.filter_model(), limits)
    return tuple(dict.fromkeys(s.statistic for s in found))


def _options(cls: Any) -> tuple[Option, ...]:
    fields = getattr(cls, "__pydantic_fields__", {})
    out = []
    for name, info in fields.items():
        if name == "rule":
            continue
        unit = next((m.unit for m in info.metadata if isinstance(m, Unit)), "")
        out.append(
            Option(name, _shown(info.default), "" if unit == "1" else unit, _rule(info.metadata))
        )
    return tuple(out)


def _shown(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float):
        return f"{value:.6g}"
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        parts = (f"{f.name}: {_shown(getattr(value, f.name))}" for f in dataclasses.fields(value))
        return "{" + ", ".join(parts) + "}"
    return str(value)


def _rule(metadata: list[Any]) -> str:
    words = {"gt": "above", "ge": "at least", "lt": "below", "le": "at most"}
    out = []
    for m in metadata:
        for name, word in words.items():
            bound = getattr(m, name, None)
            if bound is not None and math.isfinite(bound):
                out.append(f"{word} {bound:g}")
    return ", ".join(dict.fromkeys(out))


def markdown() -> str:
    """The catalogue as Markdown."""
    lines = ["# Catalogue", ""]
    items = catalogue()
    for kind, title in KINDS.items():
        lines += [f"## {title}", ""]
        for item in items:
            if item.kind != kind:
                continue
            lines += [f"### `{item.name}`", "", item.purpose]
            if item.cites:
                lines += ["", f"Source: {item.cites}."]
            if item.options:
                lines += ["", "| option | default | unit | rule |", "| --- | --- | --- | --- |"]
                lines += [
                    f"| `{o.name}` | `{o.default}` | {o.unit} | {o.rule} |" for o in item.options
                ]
            if item.rows:
                lines += ["", "Rows: " + ", ".join(f"`{r}`" for r in item.rows) + "."]
            lines.append("")
    return "\n".join(lines)


def experiment_schema() -> dict[str, Any]:
    """JSON Schema of experiment files, for editors that complete and check YAML."""
    schema: dict[str, Any] = ExperimentFile.model_json_schema()
    schema["$schema"] = "https://json-schema.org/draft/2020-12/schema"
    schema["title"] = "flyoff experiment"
    defs = schema.setdefault("$defs", {})
    problems = []
    for name, cls in discover("problem").items():
        parameters = _class_schema(cls, defs)
        fits = {"kind": {"const": name}, "parameters": parameters}
        problems.append({"properties": fits, "required": ["kind"]})
    problem = defs["ProblemSpec"]
    problem["properties"]["kind"] = {"enum": list(discover("problem"))}
    problem["oneOf"] = problems
    families = []
    for name, cls in discover("estimator").items():
        own = _class_schema(cls, defs)
        own["properties"] = {
            "family": {"const": name},
            "only": {"type": "array", "items": {"type": "string"}},
            **own.get("properties", {}),
        }
        own["required"] = ["family", *own.get("required", [])]
        families.append(own)
    schema["properties"]["estimators"] = _named({"oneOf": families})
    sections: dict[str, dict[str, Any]] = {}
    for name, cls in discover("condition").items():
        section, key = name.split(".", 1)
        value = _class_schema(cls, defs)["properties"]["value"]
        inside = sections.setdefault(
            section, {"type": "object", "properties": {}, "additionalProperties": False}
        )
        inside["properties"][key] = value
    only: dict[str, Any] = {"type": "array", "items": {"type": "string"}}
    schema["properties"]["conditions"] = _named(
        {
            "type": "object",
            "properties": {**sections, "only": only},
            "additionalProperties": False,
        }
    )
    return schema


def _named(entry: dict[str, Any]) -> dict[str, Any]:
    """A mapping from names of the user's choice to entries."""
    return {
        "type": "object",
        "patternProperties": {NAME_PATTERN: entry},
        "additionalProperties": False,
        "minProperties": 1,
    }


def _class_schema(cls: Any, defs: dict[str, Any]) -> dict[str, Any]:
    schema: dict[str, Any] = TypeAdapter(cls).json_schema()
    defs.update(schema.pop("$defs", {}))
    with_units = [n for n, p in schema.get("properties", {}).items() if "unit" in p]
    if with_units:
        suffixes = "|".join(sorted(suffix_units()))
        pattern = f"^({'|'.join(with_units)})_({suffixes})$"
        schema["patternProperties"] = {pattern: {"type": "number"}}
    return schema
