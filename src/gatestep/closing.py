"""What is closed when its ``with`` block ends."""

from __future__ import annotations

from typing import Self


class Closing:
    """A context manager that calls ``close``."""

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Give back what is held."""
        raise NotImplementedError
