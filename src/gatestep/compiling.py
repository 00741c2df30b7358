"""How hot functions are compiled.

Without the GIL, with IEEE arithmetic and no fastmath, so nothing is contracted or
reordered and NaN stays NaN; and without numba's memory runtime, so a function that
would allocate or count references does not compile at all.

Machine code is kept on disk. numba by itself looks only at the file a function is
in to tell whether its code is stale; a hot function holds the code of everything it
calls, so here its module and all that the module imports of the package are the stamp.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

from numba import njit

_COMMON = {"nogil": True, "error_model": "numpy", "_nrt": False}


_HOME = Path(__file__).parent
_IMPORTS = re.compile(r"^from \.(\w+) import", re.MULTILINE)


def _needed(name: str, found: set[str]) -> set[str]:
    """A module of the package and, through their imports, all that it needs."""
    path = _HOME / f"{name}.py"
    if name not in found and path.exists():
        found.add(name)
        for imported in _IMPORTS.findall(path.read_text(encoding="utf-8")):
            _needed(imported, found)
    return found


@cache
def _stamp(file: str) -> str:
    """A digest of a source file and all that it needs: of every module, from outside."""
    path = Path(file)
    inside = path.parent == _HOME
    names = _needed(path.stem, set()) if inside else {p.stem for p in _HOME.glob("*.py")}
    digest = hashlib.sha256(path.read_bytes())
    for needed in sorted(names):
        digest.update(needed.encode() + (_HOME / f"{needed}.py").read_bytes())
    return digest.hexdigest()


def compiled(function: Callable[..., Any]) -> Any:
    """Compile a function that Python may call; its machine code is kept on disk."""
    return _kept(function)


def merged(function: Callable[..., Any]) -> Any:
    """The same for a small function whose code is to stand in the body of each caller.

    A call between compiled functions passes every array as seven values on the
    stack, which costs more than a small function itself.
    """
    return _kept(function, forceinline=True)


def _kept(function: Callable[..., Any], **options: Any) -> Any:
    dispatcher = njit(cache=True, **options, **_COMMON)(function)
    index = getattr(getattr(dispatcher, "_cache", None), "_cache_file", None)
    if index is not None:
        index._source_stamp = _stamp(function.__code__.co_filename)
    return dispatcher


def inner(function: Callable[..., Any]) -> Any:
    """Compile a function that only compiled code calls; it is kept with its callers."""
    return njit(no_cpython_wrapper=True, no_cfunc_wrapper=True, **_COMMON)(function)
