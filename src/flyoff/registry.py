"""Name -> class for estimators, problems, point rules, conditions and scores.

A module registers its classes with a decorator; `discover` imports the modules of the package
that holds a kind, so adding an estimator means adding one file. Installed packages add theirs
through entry points of the group ``flyoff.<kind>``. Files whose name starts with an underscore
(the skeletons) are not imported.
"""

from __future__ import annotations

import importlib
import importlib.metadata
import pkgutil
from collections.abc import Callable
from typing import TypeVar

from flyoff.errors import UserError, nearest

__all__ = ["KINDS", "citation", "discover", "forget", "lookup", "register"]

# Where each kind lives. Dynamic imports: the registry itself depends on nothing above it.
_HOMES = {
    "estimator": "flyoff.estimators",
    "point-rule": "flyoff.estimators.point_rules",
    "problem": "flyoff.problems",
    "condition": "flyoff.problems",
    "score": "flyoff.scores",
}

KINDS = tuple(_HOMES)
_known: dict[str, dict[str, type]] = {kind: {} for kind in _HOMES}
_cited: dict[tuple[str, str], str] = {}
_discovered: set[str] = set()

T = TypeVar("T", bound=type)


def register(kind: str, name: str, cites: str = "") -> Callable[[T], T]:
    """Class decorator: make a class known under `name`, with the publication it follows.

    Raises
    ------
    ValueError
        If the name is taken by another class.
    """

    def add(cls: T) -> T:
        other = _known[kind].get(name)
        if other is not None and f"{other.__module__}.{other.__qualname__}" != (
            f"{cls.__module__}.{cls.__qualname__}"
        ):
            raise ValueError(f"{kind} `{name}` is already defined by {other.__module__}")
        _known[kind][name] = cls
        _cited[kind, name] = cites
        return cls

    return add


def discover(kind: str) -> dict[str, type]:
    """Import every module that may define `kind` and return name -> class, sorted by name."""
    if kind not in _discovered:
        _discovered.add(kind)
        home = _HOMES[kind]
        package = importlib.import_module(home)
        for info in pkgutil.walk_packages(package.__path__, home + "."):
            if not info.name.rsplit(".", 1)[1].startswith("_"):
                importlib.import_module(info.name)
        for entry in importlib.metadata.entry_points(group=f"flyoff.{kind}"):
            register(kind, entry.name)(entry.load())
    return dict(sorted(_known[kind].items()))


def forget(module: str) -> None:
    """Take out what a module has registered."""
    for table in _known.values():
        for name in [n for n, cls in table.items() if cls.__module__ == module]:
            del table[name]


def citation(kind: str, name: str) -> str:
    """The publication a registered class follows; empty if it names none."""
    return _cited.get((kind, name), "")


def lookup(kind: str, name: str) -> type:
    """Return the class registered under `name`.

    Raises
    ------
    UserError
        If there is none; the message names the nearest known one.
    """
    found = discover(kind).get(name)
    if found is None:
        raise UserError(f"unknown {kind} `{name}`{nearest(name, _known[kind])}")
    return found
