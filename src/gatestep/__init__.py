"""gatestep: a real-time model server for dynamic clamp.

What a script needs is here: :class:`Control`, :class:`Server`, :class:`SimRig` and
:func:`open_journal`. They are imported when first used, so that importing the package
costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .config import load_rig as load_rig
    from .control import Control as Control
    from .journalfile import open_journal as open_journal
    from .library import load_model as load_model
    from .server import Server as Server
    from .simrig import SimRig as SimRig

__version__ = "0.1.0"

_HOMES = {
    "Control": "control",
    "Server": "server",
    "SimRig": "simrig",
    "load_model": "library",
    "load_rig": "config",
    "open_journal": "journalfile",
}
__all__ = [
    "Control", "Server", "SimRig", "__version__", "load_model", "load_rig", "open_journal",
]  # fmt: skip


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f".{_HOMES[name]}", __name__), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
