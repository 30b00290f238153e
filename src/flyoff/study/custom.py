"""A user's own file with estimators, given by ``--with``: loaded by path, hashed, never by name.

A config never names code to import. The file's classes register themselves like any others; the
file's hash is in the key of every block it had a part in.
"""

from __future__ import annotations

import hashlib
import importlib.util
import sys
import sysconfig
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from flyoff.errors import UserError
from flyoff.registry import KINDS, discover, forget

__all__ = ["digest_of", "files_of", "is_custom", "load_user_file"]

_PREFIX = "flyoff_with_"
_loaded: dict[str, tuple[Path, str]] = {}


def load_user_file(path: Path) -> None:
    """Import a file by its path, once.

    Raises
    ------
    UserError
        If it cannot be read, does not import, or registers nothing.
    """
    try:
        content = path.read_bytes()
    except OSError as why:
        raise UserError(f"{path}: cannot be read ({why.strerror})") from None
    digest = hashlib.sha256(content).hexdigest()
    name = f"{_PREFIX}{path.stem}_{digest[:8]}"
    if name in _loaded:
        return
    for other, (old, _) in list(_loaded.items()):
        if old.resolve() == path.resolve():
            forget(other)  # an edited file takes the place of what it was
            del _loaded[other]
    known = {kind: set(discover(kind)) for kind in KINDS}
    before = set(sys.modules)
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise UserError(f"{path}: is not a Python file")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    try:
        spec.loader.exec_module(module)
    except UserError:
        raise
    except BaseException as why:
        del sys.modules[name]
        if isinstance(why, KeyboardInterrupt):
            raise
        forget(name)
        text = f"{type(why).__name__}: {why}".splitlines()[0]
        raise UserError(f"{path}{_line(why, path)}: does not import: {text}") from None
    for other in set(sys.modules) - before - {name}:
        file = getattr(sys.modules[other], "__file__", None)
        if file and not _installed(Path(file)):
            forget(name)
            raise UserError(
                f"{path}: imports {file}, which is neither installed nor part of the file: its "
                "changes would go unseen; put the code into one file or install it"
            )
    if all(set(discover(kind)) == known[kind] for kind in KINDS):
        raise UserError(f"{path}: registers nothing (an estimator needs @register)")
    _loaded[name] = (path, digest)


def _installed(file: Path) -> bool:
    roots = {Path(sys.prefix), Path(sys.base_prefix), *map(Path, sysconfig.get_paths().values())}
    here = file.resolve()
    package = Path(__file__).resolve().parents[1]
    return any(here.is_relative_to(r.resolve()) for r in (*roots, package))


def _line(why: BaseException, path: Path) -> str:
    if isinstance(why, SyntaxError) and why.lineno:
        return f":{why.lineno}"
    trace, line = why.__traceback__, ""
    while trace is not None:
        if Path(trace.tb_frame.f_code.co_filename).resolve() == path.resolve():
            line = f":{trace.tb_lineno}"
        trace = trace.tb_next
    return line


def files_of(things: Iterable[Any]) -> list[Path]:
    """The user's files that the classes of these objects come from."""
    modules = dict.fromkeys(type(thing).__module__ for thing in things)
    files = [_loaded[name][0] for name in modules if name in _loaded]
    for i, file in enumerate(files):
        if file.name in [f.name for f in files[:i]]:
            raise UserError(f"{file}: two files of that name are in use: rename one")
    return files


def is_custom(thing: Any) -> bool:
    """Whether an object's class comes from outside this package."""
    return not type(thing).__module__.startswith("flyoff.")


def digest_of(thing: Any) -> str:
    """Hash of the file an object's class comes from; empty for the package's own classes."""
    if not is_custom(thing):
        return ""
    name = type(thing).__module__
    if name in _loaded:
        return _loaded[name][1]
    file = getattr(sys.modules.get(name), "__file__", None)
    return hashlib.sha256(Path(file).read_bytes()).hexdigest() if file else name
