"""Waves from files: one number a line, or one column of a table, in pA."""

from __future__ import annotations

import hashlib
import re
from dataclasses import dataclass
from math import isfinite
from pathlib import Path

import numpy as np
import numpy.typing as npt

from .errors import FileError
from .specs import MAX_CURRENT_PA

MAX_WAVE_BYTES = 400_000_000
_BETWEEN = re.compile(r"[,;\t]")


@dataclass(frozen=True)
class Wave:
    """A wave, in pA, and the SHA-256 of the file that it is from."""

    values: npt.NDArray[np.float64]
    sha256: str


def read_wave(path: Path, column: int = 1) -> Wave:
    """Read a wave from a text file.

    Empty lines and those that begin with ``#`` are passed over, and one line of
    headings. Columns are separated by a comma, a semicolon or a tab; the decimal
    mark is a point.

    Parameters
    ----------
    path : Path
        The file.
    column : int
        Which column, from 1.

    Raises
    ------
    FileError
        If it cannot be read, holds no numbers, or one that is no current: with its line.
    """
    content = _content(path)
    values: list[float] = []
    heading = False
    for number, line in enumerate(content.decode("utf-8", "replace").splitlines(), 1):
        text = line.strip()
        if not text or text.startswith("#"):
            continue
        cells = _BETWEEN.split(text)
        if len(cells) < column:
            raise FileError(f"{path}: line {number} has no column {column}")
        value = _number(cells[column - 1])
        if value is None and not (values or heading):
            heading = True
            continue
        values.append(_current(value, f"{path}: line {number}", cells[column - 1].strip()))
    if not values:
        raise FileError(f"{path}: holds no numbers; give one current in pA a line")
    return Wave(np.array(values), hashlib.sha256(content).hexdigest())


def _number(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None


def _current(value: float | None, where: str, found: str) -> float:
    """The value, if it is a current that may be."""
    if value is None:
        raise FileError(f"{where}: {found[:40]!r} is not a number")
    if not (isfinite(value) and abs(value) <= MAX_CURRENT_PA):
        raise FileError(
            f"{where}: {value:g} is not a current in pA within "
            f"-{MAX_CURRENT_PA:g} to {MAX_CURRENT_PA:g}"
        )
    return value


def _content(path: Path) -> bytes:
    try:
        if not path.is_file():
            raise FileError(f"{path}: no such file")
        if path.stat().st_size > MAX_WAVE_BYTES:
            raise FileError(f"{path}: over {MAX_WAVE_BYTES:,} bytes, too large for a wave")
        return path.read_bytes()
    except OSError as fault:
        raise FileError(f"{path}: cannot be read: {fault.strerror or fault}") from None
