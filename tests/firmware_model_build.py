"""A model's firmware made, built on the host, and its functions through ctypes."""

from __future__ import annotations

import ctypes
import functools
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
from firmware_build import STRICT, compiler, run

from gatestep.commands.firmware import write_firmware
from gatestep.firmware import DeviceTables, device_tables
from gatestep.library import load_model

SHIM = Path(__file__).with_name("firmware_model_shim.c")
TICK_US = 20.0

_folder = tempfile.TemporaryDirectory(prefix="gatestep-model-")


@functools.cache
def folder(model: str, rows: int = 2049, interval_us: float = TICK_US) -> Path:
    """What ``gatestep firmware`` writes, made once."""
    name = model.replace("/", "_")
    path = Path(_folder.name) / f"{name}-{rows}-{interval_us:g}"
    write_firmware(model, path, rows, interval_us, json_output=True)
    return path


@functools.cache
def tables(model: str, rows: int = 2049, interval_us: float = TICK_US) -> DeviceTables:
    return device_tables(load_model(model).spec, rows, interval_us)


def sources(made: Path) -> list[Path]:
    return [*sorted(made.glob("*.c")), *sorted((made / "library").glob("*.c"))]


@functools.cache
def library(model: str) -> Any:
    """The model, the device around it and the shim as a shared library."""
    made = folder(model)
    target = made.with_suffix(".so")
    include = ["-I", made, "-I", made / "library"]
    flags = ["-O2", "-ffp-contract=off", "-shared", "-fPIC"]
    run([*compiler(), *STRICT, *flags, *include, "-o", target, SHIM, *sources(made)])
    built = ctypes.CDLL(str(target))
    f32, u32 = ctypes.c_float, ctypes.c_uint32
    built.shim_start.argtypes = [f32, f32, f32, f32, f32, u32, u32]
    built.shim_tick.argtypes = [f32, ctypes.c_int, ctypes.c_int, u32]
    built.shim_current_pa.restype = built.shim_gate.restype = f32
    built.shim_counters.restype = ctypes.POINTER(u32)
    return built


def walk(
    model: str, v_mv: Any, ticks: Any = 1, with_: tuple[Any, Any] | None = None
) -> tuple[Any, Any]:
    """The C's currents along voltages, and its gates after each."""
    made = tables(model)
    v = np.ascontiguousarray(v_mv, dtype=np.float32)
    spans = np.array(np.broadcast_to(np.asarray(ticks, dtype=np.uint32), v.shape))
    gmax, reversal = with_ or (made.gmax_ns, made.reversal_mv)
    gmax, reversal = (np.ascontiguousarray(a, dtype=np.float32) for a in (gmax, reversal))
    gates = made.dynamic + made.instant
    i_pa = np.zeros_like(v)
    x = np.zeros((v.size, max(gates, 1)), dtype=np.float32)
    arrays = (ctypes.c_void_p(a.ctypes.data) for a in (v, spans, gmax, reversal, i_pa, x))
    library(model).shim_walk(ctypes.c_uint32(v.size), *arrays)
    return i_pa, x[:, :gates]


def same_bits(a: Any, b: Any) -> bool:
    """Whether float32 arrays are alike to the last bit, any NaN counting as any other."""
    a, b = np.asarray(a, dtype=np.float32), np.asarray(b, dtype=np.float32)
    return bool(((a.view(np.uint32) == b.view(np.uint32)) | (np.isnan(a) & np.isnan(b))).all())
