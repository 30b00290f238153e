"""Competitive trials between nonlinear state estimators.

``flyoff.run("configs/first-look.yaml")`` runs an experiment and returns its results.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"
__all__ = ["UserError", "run"]

if TYPE_CHECKING:
    from flyoff.api import run
    from flyoff.errors import UserError


def __getattr__(name: str) -> Any:
    # loaded late: the command line must answer --help without the numerical packages
    if name == "run":
        from flyoff.api import run

        return run
    if name == "UserError":
        from flyoff.errors import UserError

        return UserError
    raise AttributeError(f"module `flyoff` has no attribute `{name}`")
