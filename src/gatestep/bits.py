"""Reading a number's bits as another type, and a number at an address, without the interpreter.

Each function works compiled and, with numba's compiler switched off, as plain
numpy, so that the suites of the kernel and the codec can run uncompiled.
"""

from __future__ import annotations

import ctypes
from typing import Any

import numpy as np
from llvmlite import ir
from numba import config, types
from numba.extending import intrinsic


def _bitcast(source: Any, target: Any, llvm_target: Any) -> Any:
    @intrinsic
    def cast(_typing: Any, _value: Any) -> Any:
        def generate(_context: Any, builder: Any, _signature: Any, arguments: Any) -> Any:
            return builder.bitcast(arguments[0], llvm_target)

        return target(source), generate

    return cast


def _load(target: Any, llvm_target: Any) -> Any:
    @intrinsic
    def load(_typing: Any, _address: Any) -> Any:
        def generate(_context: Any, builder: Any, _signature: Any, arguments: Any) -> Any:
            return builder.load(builder.inttoptr(arguments[0], llvm_target.as_pointer()))

        return target(types.uintp), generate

    return load


if config.DISABLE_JIT:

    def f64_from_u64(bits: Any) -> Any:
        """[hot] The float64 whose bits these are."""
        return np.uint64(bits).view(np.float64)

    def u64_from_f64(value: Any) -> Any:
        """[hot] The bits of a float64."""
        return np.float64(value).view(np.uint64)

    def f32_from_u32(bits: Any) -> Any:
        """[hot] The float32 whose bits these are."""
        return np.uint32(bits).view(np.float32)

    def i32_at(address: Any) -> Any:
        """[hot] The int32 at an address."""
        return ctypes.c_int32.from_address(int(address)).value
else:
    f64_from_u64 = _bitcast(types.uint64, types.float64, ir.DoubleType())
    u64_from_f64 = _bitcast(types.float64, types.uint64, ir.IntType(64))
    f32_from_u32 = _bitcast(types.uint32, types.float32, ir.FloatType())
    i32_at = _load(types.int32, ir.IntType(32))
