"""How hot functions are compiled.

Without the GIL, with IEEE arithmetic and no fastmath, so nothing is contracted or
reordered and NaN stays NaN; and without numba's memory runtime, so a function that
would allocate or count references does not compile at all.

Machine code is kept on disk. numba by itself looks only at the file a function is
in to tell whether its code is stale; a hot function holds the code of everything it
calls, so here the whole package's sources are the stamp.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

from numba import njit

_COMMON = {"nogil": True, "error_model": "numpy", "_nrt": False}


def _source_stamp() -> str:
    """A digest of every module of the package."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.name.encode() + path.read_bytes())
    return digest.hexdigest()


_STAMP = _source_stamp()


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
        index._source_stamp = _STAMP
    return dispatcher


def inner(function: Callable[..., Any]) -> Any:
    """Compile a function that only compiled code calls; it is kept with its callers."""
    return njit(no_cpython_wrapper=True, no_cfunc_wrapper=True, **_COMMON)(function)
