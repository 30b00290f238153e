"""YAML as a tree with positions: safe, 1.2 core scalars, everything refused before it can hurt.

Scalars follow the YAML 1.2 core schema: only true/false are booleans, `1e-3` is a number, `on` and
`no` are text. Aliases, duplicate keys, several documents, depth over 32 and files over 1 MB are
refused.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import yaml

from flyoff.errors import UserError

__all__ = ["Tree", "read_yaml"]

MAX_BYTES = 1_000_000
MAX_DEPTH = 32
_INT = re.compile(r"[-+]?[0-9]{1,18}\Z")
_FLOAT = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?\Z")
_SPECIAL = {"": None, "~": None, "null": None, "true": True, "false": False}

Path_ = tuple[str | int, ...]


@dataclass(frozen=True)
class Tree:
    """Plain data and the line of every key and item."""

    file: str
    data: Any
    lines: dict[Path_, int]

    def line(self, path: Path_) -> int:
        """Line of a path, or of the nearest parent that exists."""
        while path and path not in self.lines:
            path = path[:-1]
        return self.lines.get(path, 1)

    def at(self, path: Path_) -> Any:
        """What stands at a path; None where nothing does."""
        node = self.data
        for step in path:
            try:
                node = node[step]
            except (KeyError, IndexError, TypeError):
                return None
        return node


def read_yaml(path: Path) -> Tree:
    """Read a file.

    Raises
    ------
    UserError
        One line: file, line, what is wrong.
    """
    name = str(path)
    try:
        if path.exists() and not path.is_file():
            raise UserError(f"{name}: is not a file")
        with path.open("rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise UserError(f"{name}: no such file") from None
    except OSError as why:
        raise UserError(f"{name}: cannot be read ({why.strerror})") from None
    if len(raw) > MAX_BYTES:
        raise UserError(f"{name}: larger than {MAX_BYTES // 1_000_000} MB")
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as why:
        line = raw[: why.start].count(b"\n") + 1
        raise UserError(f"{name}:{line}: is not UTF-8 text") from None
    try:
        _refuse(name, text)
        node = yaml.compose(text, Loader=yaml.SafeLoader)
    except yaml.MarkedYAMLError as why:
        mark = why.problem_mark or why.context_mark
        line = mark.line + 1 if mark else 1
        raise UserError(f"{name}:{line}: not YAML: {why.problem or why.context}") from None
    except yaml.YAMLError as why:
        raise UserError(f"{name}: not YAML: {str(why).splitlines()[0]}") from None
    lines: dict[Path_, int] = {}
    problems: list[str] = []
    data = None if node is None else _build(name, node, (), lines, problems)
    if problems:
        raise UserError(*problems)
    return Tree(name, data, lines)


def _refuse(name: str, text: str) -> None:
    """Refuse by the event stream, before anything is composed."""
    depth = documents = 0
    for event in yaml.parse(text, Loader=yaml.SafeLoader):
        line = event.start_mark.line + 1 if event.start_mark else 1
        if isinstance(event, yaml.AliasEvent):
            raise UserError(f"{name}:{line}: aliases (`*{event.anchor}`) are not allowed")
        if isinstance(event, yaml.DocumentStartEvent):
            documents += 1
            if documents > 1:
                raise UserError(f"{name}:{line}: more than one document")
        if isinstance(event, yaml.CollectionStartEvent):
            depth += 1
            if depth > MAX_DEPTH:
                raise UserError(f"{name}:{line}: nested deeper than {MAX_DEPTH} levels")
        if isinstance(event, yaml.CollectionEndEvent):
            depth -= 1


def _build(
    name: str, node: yaml.Node, path: Path_, lines: dict[Path_, int], problems: list[str]
) -> Any:
    line = node.start_mark.line + 1
    lines.setdefault(path, line)
    if node.tag.startswith("!") or (
        node.tag.startswith("tag:yaml.org,2002:python") or "!!" in node.tag
    ):
        problems.append(f"{name}:{line}: tags (`{node.tag}`) are not allowed")
        return None
    if isinstance(node, yaml.MappingNode):
        out: dict[str, Any] = {}
        for key_node, value_node in node.value:
            at = key_node.start_mark.line + 1
            if not isinstance(key_node, yaml.ScalarNode):
                problems.append(f"{name}:{at}: a key must be text")
                continue
            key = key_node.value
            if key in out:
                problems.append(f"{name}:{at}: {'.'.join(map(str, (*path, key)))}: given twice")
                continue
            lines[(*path, key)] = at
            out[key] = _build(name, value_node, (*path, key), lines, problems)
        return out
    if isinstance(node, yaml.SequenceNode):
        return [
            _build(name, item, (*path, i), lines, problems) for i, item in enumerate(node.value)
        ]
    assert isinstance(node, yaml.ScalarNode)
    return _scalar(node)


def _scalar(node: yaml.ScalarNode) -> Any:
    text = node.value
    if node.style is not None:
        return text
    if text in _SPECIAL:
        return _SPECIAL[text]
    if _INT.match(text):
        return int(text)
    if _FLOAT.match(text) and len(text) <= 64:
        return float(text)
    return text
