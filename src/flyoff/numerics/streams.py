"""Keyed random streams: every draw has a name, so it does not depend on batching or order.

A stream is keyed by (seed, purpose, problem label, run, role, replicate). The condition is not in
the key: two conditions see the same draws, which pairs them. An estimator's own noise is keyed by
the step as well, so a replay of late measurements repeats the same numbers.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence

import numpy as np

from flyoff.numerics.spaces import Array

__all__ = ["Streams"]

_MIX = (0x9E3779B97F4A7C15, 0xBF58476D1CE4E5B9, 0x94D049BB133111EB)
_MASK = (1 << 64) - 1


def _mix(word: int) -> int:
    """splitmix64 (G. Steele, D. Lea, C. Flood, OOPSLA 2014)."""
    word = (word + _MIX[0]) & _MASK
    word = ((word ^ (word >> 30)) * _MIX[1]) & _MASK
    word = ((word ^ (word >> 27)) * _MIX[2]) & _MASK
    return word ^ (word >> 31)


class Streams:
    """The streams of one batch of runs.

    Parameters
    ----------
    seed : int
    purpose : str
        `test`, `tuning` or `timing`: disjoint sets of numbers.
    label : str
        The problem's name in the experiment.
    runs : sequence of int
        Run numbers, in the order of the run axis.
    replicate : int
    """

    def __init__(
        self, seed: int, purpose: str, label: str, runs: Sequence[int], replicate: int = 0
    ) -> None:
        self.seed, self.purpose, self.label = seed, purpose, label
        self.runs = tuple(runs)
        self.replicate = replicate
        self._words: dict[str, list[tuple[int, int, int]]] = {}
        self._bits = np.random.SFC64(0)
        self._generator = np.random.Generator(self._bits)
        self._state = self._bits.state

    def __getstate__(self) -> dict[str, object]:
        return {
            "args": (self.seed, self.purpose, self.label, self.runs, self.replicate),
        }

    def __setstate__(self, state: dict[str, tuple[int, str, str, tuple[int, ...], int]]) -> None:
        self.__init__(*state["args"])  # type: ignore[misc]

    def __len__(self) -> int:
        return len(self.runs)

    def select(self, index: slice) -> Streams:
        """The same streams for a part of the runs."""
        return Streams(self.seed, self.purpose, self.label, self.runs[index], self.replicate)

    def padded(self) -> Streams:
        """The same streams with the last run repeated once."""
        return Streams(
            self.seed, self.purpose, self.label, (*self.runs, self.runs[-1]), self.replicate
        )

    def _keys(self, role: str) -> list[tuple[int, int, int]]:
        if role not in self._words:
            out = []
            for run in self.runs:
                key = repr((self.seed, self.purpose, self.label, run, role, self.replicate))
                h = hashlib.sha256(key.encode()).digest()
                out.append(tuple(int.from_bytes(h[8 * i : 8 * i + 8], "little") for i in range(3)))
            self._words[role] = out  # type: ignore[assignment]
        return self._words[role]

    def _at(self, words: tuple[int, int, int], step: int) -> np.random.Generator:
        """Generator of one key and step. SFC64 (C. Doty-Humphrey, PractRand) seeded directly."""
        tag = _mix(step + 1)
        inner = self._state["state"]["state"]
        for i in range(3):
            inner[i] = _mix(words[i] ^ tag)
        inner[3] = 1
        self._state["has_uint32"] = 0
        self._bits.state = self._state
        self._bits.random_raw(12, output=False)
        return self._generator

    def normal(self, role: str, shape: tuple[int, ...], step: int = 0) -> Array:
        """Standard normals (*shape, M), float64."""
        out = np.empty((len(self.runs), *(shape or (1,))))
        for words, row in zip(self._keys(role), out, strict=True):
            self._at(words, step).standard_normal(out=row)
        out = out if shape else out[:, 0]
        return np.ascontiguousarray(np.moveaxis(out, 0, -1))

    def uniform(self, role: str, shape: tuple[int, ...], step: int = 0) -> Array:
        """Uniforms on [0, 1), (*shape, M), float64."""
        out = np.empty((len(self.runs), *(shape or (1,))))
        for words, row in zip(self._keys(role), out, strict=True):
            self._at(words, step).random(out=row)
        out = out if shape else out[:, 0]
        return np.ascontiguousarray(np.moveaxis(out, 0, -1))
