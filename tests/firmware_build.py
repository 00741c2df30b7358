"""The device library built for tests, and its functions through ctypes."""

from __future__ import annotations

import ctypes
import functools
import os
import shlex
import shutil
import subprocess
import tempfile
from collections.abc import Sequence
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
BRIDGE = ROOT / "firmware_bridge"
SOURCES = sorted((BRIDGE / "src").glob("*.c"))
VECTORS = sorted((BRIDGE / "vectors").glob("*.txt"))
STRICT = ["-std=c99", "-pedantic", "-Wall", "-Wextra", "-Werror"]
SANITIZED = ["-O1", "-g", "-fsanitize=address,undefined", "-fno-sanitize-recover=all"]
CELLS_MAX = 8
NIL = -1
STATES = ("idle", "greeting", "running", "silent")
COUNTERS = (  # as in gsb_rig.h
    "samples",
    "skipped",
    "answers",
    "ignored",
    "overtaken",
    "clipped",
    "faults",
    "silences",
)

_folder = tempfile.TemporaryDirectory(prefix="gatestep-firmware-")


def compiler() -> list[str]:
    """The C compiler, or a skip of the test that needs it."""
    found = shlex.split(os.environ.get("CC", "")) or [shutil.which("cc") or ""]
    if not found[0]:
        pytest.skip("needs a C compiler (Debian: apt install gcc libc6-dev)")
    return found


def run(command: Sequence[str | Path], **options: object) -> subprocess.CompletedProcess[str]:
    """A command that must succeed."""
    done = subprocess.run(
        [str(part) for part in command], capture_output=True, text=True, check=False, **options
    )
    assert done.returncode == 0, f"{shlex.join(map(str, command))}\n{done.stdout}{done.stderr}"
    return done


@functools.cache
def program(name: str, *sources: Path, flags: tuple[str, ...] = ("-O2",)) -> Path:
    """A program of the library and some sources, built once."""
    path = Path(_folder.name) / name
    include = ["-I", BRIDGE / "include", "-I", BRIDGE / "fuzz"]
    run([*compiler(), *STRICT, *flags, *include, "-o", path, *sources, *SOURCES, "-lm"])
    return path


@functools.cache
def software_rig() -> Path:
    """The POSIX example."""
    folder = BRIDGE / "examples" / "posix_rig"
    return program("posix_rig", folder / "posix_rig.c", folder / "posix_stream.c")


class Sample(ctypes.Structure):
    """``struct gsb_sample``."""

    _fields_ = (
        ("seq", ctypes.c_int64),
        ("t_us", ctypes.c_uint64),
        ("in_force", ctypes.c_int64),
        ("lag_us", ctypes.c_int64),
        ("cells", ctypes.c_uint32),
        ("v_mv", ctypes.c_float * CELLS_MAX),
    )


class Answer(ctypes.Structure):
    """``struct gsb_answer``."""

    _fields_ = (
        ("seq", ctypes.c_int64),
        ("flags", ctypes.c_uint64),
        ("service_nsec", ctypes.c_uint64),
        ("cells", ctypes.c_uint32),
        ("i_pa", ctypes.c_float * CELLS_MAX),
    )


class Limits(ctypes.Structure):
    """``struct gsb_cell_limits``."""

    _fields_ = (
        ("current_pa", ctypes.c_float),
        ("slew_pa_per_ms", ctypes.c_float),
        ("window_low_mv", ctypes.c_float),
        ("window_high_mv", ctypes.c_float),
    )


class Config(ctypes.Structure):
    """``struct gsb_rig_config``."""

    _fields_ = (
        ("cells", ctypes.c_uint32),
        ("interval_us", ctypes.c_float),
        ("on_arrival", ctypes.c_uint32),
        ("silence_us", ctypes.c_uint32),
        ("greeting_us", ctypes.c_uint32),
        ("cell", Limits * CELLS_MAX),
    )


_BYTES = ctypes.POINTER(ctypes.c_uint8)
READ = ctypes.CFUNCTYPE(
    ctypes.c_int, ctypes.c_void_p, ctypes.POINTER(ctypes.c_float), ctypes.c_uint32
)
SEND = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_void_p, _BYTES, ctypes.c_size_t)
NOW = ctypes.CFUNCTYPE(ctypes.c_uint32, ctypes.c_void_p)


class Port(ctypes.Structure):
    """``struct gsb_port``."""

    _fields_ = (
        ("context", ctypes.c_void_p),
        ("read_voltage_mv", READ),
        ("write_current_pa", READ),
        ("send_bytes", SEND),
        ("receive_bytes", SEND),
        ("now_us", NOW),
    )


@functools.cache
def library() -> ctypes.CDLL:
    """The library and the shim, loaded."""
    path = program(
        "libgsb.so", ROOT / "tests" / "firmware_shim.c", flags=("-O2", "-shared", "-fPIC")
    )
    loaded = ctypes.CDLL(str(path))
    loaded.shim_size.restype = ctypes.c_size_t
    loaded.shim_counter.restype = ctypes.c_uint32
    loaded.gsb_crc16.restype = ctypes.c_uint16
    loaded.gsb_adc_mv.restype = loaded.gsb_dac_pa.restype = ctypes.c_float
    loaded.gsb_limit_pa.restype = ctypes.c_float
    loaded.gsb_dac_code.restype = ctypes.c_uint32
    mirrored = {2: Config, 4: Sample, 5: Answer}
    for which, mirror in mirrored.items():
        assert loaded.shim_size(which) == ctypes.sizeof(mirror), mirror
    return loaded
