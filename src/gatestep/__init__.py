"""gatestep: a real-time model server for dynamic clamp."""

from __future__ import annotations

__version__ = "0.1.0"
