"""Names, discovery, entry points."""

from __future__ import annotations

import importlib.metadata

import pytest

from flyoff import registry
from flyoff.errors import UserError, nearest


@pytest.fixture(autouse=True)
def everything_known():
    """Modules register once: find them all before a test swaps the tables."""
    for kind in ("estimator", "point-rule", "problem", "condition", "score"):
        registry.discover(kind)


class Outside:
    """An estimator of an installed package."""


class FakeEntry:
    name = "from-outside"

    @staticmethod
    def load():
        return Outside


def test_installed_packages_add_theirs_by_entry_points(monkeypatch):
    asked = []

    def entry_points(group):
        if group.startswith("flyoff."):
            asked.append(group)
        return [FakeEntry] if group == "flyoff.estimator" else []

    monkeypatch.setattr(importlib.metadata, "entry_points", entry_points)
    monkeypatch.setattr(registry, "_discovered", set())
    monkeypatch.setattr(registry, "_known", {k: dict(v) for k, v in registry._known.items()})
    assert registry.discover("estimator")["from-outside"] is Outside
    assert registry.lookup("estimator", "from-outside") is Outside
    assert "flyoff.estimator" in asked


def test_a_name_belongs_to_one_class(monkeypatch):
    monkeypatch.setattr(registry, "_known", {k: dict(v) for k, v in registry._known.items()})
    registry.register("estimator", "mine-alone")(Outside)
    registry.register("estimator", "mine-alone")(Outside)  # the same again is fine
    with pytest.raises(ValueError, match="`mine-alone` is already defined by"):
        registry.register("estimator", "mine-alone")(FakeEntry)


def test_unknown_names_suggest_the_nearest():
    with pytest.raises(UserError) as caught:
        registry.lookup("estimator", "linearized")
    assert str(caught.value) == "unknown estimator `linearized` (did you mean `linearised`?)"
    assert nearest("zzz", ["a", "b"]) == " (known: a, b)"
    assert nearest("zzz", map(str, range(100))) == ""


def test_skeletons_are_not_discovered():
    assert all(
        not cls.__module__.endswith("_skeleton") or name.startswith("my-")
        for kind in ("estimator", "problem", "score", "point-rule")
        for name, cls in registry.discover(kind).items()
    )
    assert registry.citation("estimator", "kalman").startswith("R. E. Kalman")
    assert registry.citation("estimator", "nobody") == ""
