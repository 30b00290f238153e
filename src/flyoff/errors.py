"""The one kind of error that is printed without a traceback."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = ["UserError", "nearest"]


class UserError(Exception):
    """A mistake the user can correct: one clear line a problem, and an exit code.

    Parameters
    ----------
    *lines : str
        One message a line; several are reported at once.
    code : int
        2 for a mistake in what was asked (usage), 1 for a failure while doing it.
    """

    def __init__(self, *lines: str, code: int = 2) -> None:
        super().__init__("\n".join(lines))
        self.lines = lines
        self.code = code

    def __reduce__(self) -> tuple[object, ...]:
        return (_rebuild, (self.lines, self.code))


def _rebuild(lines: tuple[str, ...], code: int) -> UserError:
    return UserError(*lines, code=code)


def nearest(word: str, known: Iterable[str]) -> str:
    """Return `` (did you mean `x`?)`` for the nearest known name, or the list of names."""
    names = sorted(known)
    close = difflib.get_close_matches(word, names, n=1, cutoff=0.6)
    if close:
        return f" (did you mean `{close[0]}`?)"
    if names and len(names) <= 12:
        return f" (known: {', '.join(names)})"
    return ""
