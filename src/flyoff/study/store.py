"""The store: one file a chunk of runs, written atomically with its checksum, found by a key.

The key is a hash of everything the content depends on and of nothing else: the resolved problem,
condition, estimator, filtering options, windows and divergence limits, run range, seed, the source
below this layer, data files, and the versions and processor features that decide bits.
"""

from __future__ import annotations

import contextlib
import dataclasses
import hashlib
import importlib.metadata
import io
import json
import os
import platform
import sys
import tempfile
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np

from flyoff.errors import UserError
from flyoff.numerics.spaces import Array

__all__ = ["Store", "canonical", "content_key", "environment", "source_digest"]

CHUNK = 64  # runs a chunk
_MAGIC = b"flyoff-block-1\n"
# layers whose source decides what a block contains
_BELOW = (
    "errors.py", "registry.py", "options.py", "numerics", "models", "problems", "recordings.py",
    "estimators", "filtering.py", "scores",
)  # fmt: skip


def canonical(value: Any) -> Any:
    """Plain JSON data of options, dataclasses, tuples and numbers, with class names."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        fields = {f.name: canonical(getattr(value, f.name)) for f in dataclasses.fields(value)}
        return {"is": type(value).__name__, **fields}
    if isinstance(value, dict):
        return {str(k): canonical(v) for k, v in sorted(value.items())}
    if isinstance(value, tuple | list):
        return [canonical(v) for v in value]
    if isinstance(value, np.generic):
        return value.item()
    return value


@cache
def source_digest() -> str:
    """Hash of the package's source and data below this layer."""
    root = Path(__file__).resolve().parents[1]
    digest = hashlib.sha256()
    for part in _BELOW:
        top = root / part
        files = [top] if top.is_file() else sorted(top.rglob("*"))
        for file in files:
            if file.is_file() and file.suffix in (".py", ".npz"):
                digest.update(file.relative_to(root).as_posix().encode() + b"\0")
                digest.update(hashlib.sha256(file.read_bytes()).digest())
    return digest.hexdigest()


@cache
def environment() -> dict[str, str]:
    """What decides bits besides the source: versions, architecture, processor features."""
    try:  # no public name for it
        from numpy._core._multiarray_umath import __cpu_features__ as features
    except ImportError:
        features = {}
    on = "+".join(sorted(name for name, has in features.items() if has))
    return {
        "python": platform.python_version(),
        **{p: importlib.metadata.version(p) for p in ("numpy", "scipy", "casadi")},
        "architecture": platform.machine(),
        "system": sys.platform,
        "processor features": hashlib.sha256(on.encode()).hexdigest()[:16],
    }


def content_key(**parts: Any) -> str:
    """Key of a block: sha256 of the canonical JSON of its parts, the source and the environment."""
    whole = {**parts, "source": source_digest(), "environment": environment()}
    text = json.dumps(canonical(whole), sort_keys=True, separators=(",", ":"), allow_nan=True)
    return hashlib.sha256(text.encode()).hexdigest()


class Store:
    """Blocks of one results folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder / "blocks"

    def create(self) -> None:
        """Make the folder.

        Raises
        ------
        UserError
            If it cannot be written.
        """
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            with tempfile.NamedTemporaryFile(dir=self.folder):
                pass
        except OSError as why:
            raise UserError(
                f"{self.folder.parent}: results cannot be written there ({why.strerror}); "
                "choose another folder with --out",
                code=1,
            ) from None

    def path(self, key: str) -> Path:
        """File of a key."""
        return self.folder / key[:2] / f"{key}.block"

    def write(self, key: str, arrays: dict[str, Array]) -> None:
        """Write a block so that it is there whole or not at all."""
        buffer = io.BytesIO()
        np.savez_compressed(buffer, **arrays)  # type: ignore[arg-type]
        payload = buffer.getvalue()
        head = _MAGIC + hashlib.sha256(payload).hexdigest().encode() + b"\n"
        target = self.path(key)
        try:
            target.parent.mkdir(parents=True, exist_ok=True)
            handle, name = tempfile.mkstemp(dir=target.parent, suffix=".part")
            try:
                with os.fdopen(handle, "wb") as file:
                    file.write(head + payload)
                    file.flush()
                    os.fsync(file.fileno())
                os.replace(name, target)
            except BaseException:
                with contextlib.suppress(OSError):
                    os.unlink(name)
                raise
        except OSError as why:
            raise UserError(
                f"{target.parent}: a block could not be written ({why.strerror}); what is stored "
                "is kept, run the same command again",
                code=1,
            ) from None

    def read(self, key: str) -> dict[str, Array] | None:
        """The arrays of a block, or None if it is missing or damaged."""
        try:
            raw = self.path(key).read_bytes()
        except OSError:
            return None
        head = len(_MAGIC) + 65
        payload = raw[head:]
        if raw[:head] != _MAGIC + hashlib.sha256(payload).hexdigest().encode() + b"\n":
            return None
        with np.load(io.BytesIO(payload), allow_pickle=False) as data:
            return {name: data[name] for name in data.files}

    def state(self, key: str) -> str:
        """`missing`, `damaged` or `good`."""
        if not self.path(key).exists():
            return "missing"
        return "good" if self.read(key) is not None else "damaged"

    def sweep(self) -> None:
        """Remove what a killed process left half written."""
        for part in self.folder.rglob("*.part"):
            with contextlib.suppress(OSError):
                part.unlink()

    @contextlib.contextmanager
    def lock(self) -> Iterator[None]:
        """Hold the folder: two processes on one experiment would do the work twice.

        Raises
        ------
        UserError
            If another process holds it. The lock ends with its process, however that ends.
        """
        try:
            file = open(self.folder / "lock", "a+b")  # noqa: SIM115 - held for the whole run
        except OSError as why:
            raise UserError(
                f"{self.folder / 'lock'}: cannot be opened ({why.strerror})", code=1
            ) from None
        try:
            try:
                import fcntl

                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except ImportError:  # not POSIX
                import msvcrt

                msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
        except OSError:
            file.close()
            raise UserError(
                f"{self.folder.parent}: another run is writing there; wait for it, or choose "
                "another folder with --out",
                code=1,
            ) from None
        try:
            yield
        finally:
            file.close()
