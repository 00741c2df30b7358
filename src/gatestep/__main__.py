"""``python -m gatestep``."""

from __future__ import annotations

from .cli import main

main()
