"""The file that a journal is written to: whole writes, and whether it is still there."""

from __future__ import annotations

import contextlib
import os
from pathlib import Path

_OPEN = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0)


class Out:
    """The file, opened so that no other is ever written over.

    Raises
    ------
    OSError
        If it exists, or its folder is not there or cannot be written.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self._file = os.open(path, _OPEN, 0o666)

    def write(self, data: bytes) -> None:
        """[writer] All of the bytes, or an ``OSError``."""
        left = memoryview(data)
        while left:
            left = left[os.write(self._file, left) :]

    def sync(self) -> None:
        """[writer] Have the disk itself take what was written."""
        os.fsync(self._file)

    def cut(self, size: int) -> None:
        """[writer] Take back what lies beyond ``size``."""
        os.ftruncate(self._file, size)
        os.lseek(self._file, size, os.SEEK_SET)

    def is_reachable(self) -> bool:
        """[writer] Whether anyone could still open the file, by whatever name."""
        return os.fstat(self._file).st_nlink > 0

    def is_in_place(self) -> bool:
        """[writer] Whether the path still leads to this file."""
        try:
            return self.is_reachable() and os.path.samestat(
                os.fstat(self._file), os.stat(self._path)
            )
        except OSError:
            return False

    def close(self) -> None:
        """[writer] Give the file back."""
        os.close(self._file)


def sync_folder(folder: Path) -> None:
    """Have the disk know the new file's name; not every system can."""
    with contextlib.suppress(OSError):
        file = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(file)
        finally:
            os.close(file)
