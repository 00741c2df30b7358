"""The hot loop's machine code: what it calls, and that it allocates nothing.

Read from the LLVM code of the whole loop, every function it is made of included, as
numba hands it to the assembler. The wrapper through which Python calls the loop is not
part of it.
"""

from __future__ import annotations

import re

import llvmlite.binding as llvm
import numpy as np
import pytest
from conftest import make_rig
from numba import njit, typeof
from numba.core.errors import TypingError

from gatestep.direct import make_direct
from gatestep.loop import make_memory, run_loop
from gatestep.zmqlane import load_libzmq, make_zmq_lane

NATIVE = {"nogil": True, "error_model": "numpy", "_nrt": False}
BARE = {"no_cpython_wrapper": True, "no_cfunc_wrapper": True}

# Plain arithmetic and stack; each becomes instructions, none a call that could wait.
INTRINSICS = re.compile(
    r"llvm\.(assume|ceil|floor|fabs|fma|sqrt|is\.fpclass|lifetime|memset|memcpy|memmove|ctlz|cttz|"
    r"s(max|min)|u(max|min)|abs|[us](add|sub|mul)\.(with\.overflow|sat)|fsh[lr]|minnum|maxnum|"
    r"experimental\.noalias\.scope\.decl|vector\.reduce)\b"
)
CLOCK = {"clock_gettime"}
# The inproc lines for orders and log, and libzmq's own socket.
LIBZMQ = {"zmq_recv", "zmq_send", "zmq_errno", "zmq_getsockopt"}
# Stream sockets that never block, and the one wait with its time-out.
SOCKETS = {
    "poll", "recv", "send", "accept4", "close", "shutdown", "setsockopt", "__errno_location",
}  # fmt: skip
FORBIDDEN = re.compile(r"@(Py|_Py|NRT_|numba_|malloc|calloc|realloc|free|pthread_|mmap|sleep)\w*")


def code_of(function, *types, **options) -> str:
    """LLVM code of a function compiled afresh, with all that it is made of."""
    fresh = njit(**BARE, **options)(function)
    fresh.compile(types)
    (overload,) = fresh.overloads.values()
    return overload.library.get_llvm_str()


def outside(code: str) -> set[str]:
    """Functions that the code calls and does not define, LLVM's own arithmetic apart."""
    module = llvm.parse_assembly(code)
    names = {f.name for f in module.functions if f.is_declaration}
    return {name for name in names if not INTRINSICS.match(name)}


def calls_through_pointers(code: str) -> list[str]:
    """Calls whose target is not named: it could be anything."""
    calls = re.findall(r"^.*\b(?:call|invoke)\b.*$", code, re.MULTILINE)
    # The target stands right before the first bracket that opens its arguments.
    named = re.compile(r"\b(?:call|invoke)\b[^(]*(?:\([^()]*\)[^(]*)*?@[\w.$\"]+\(")
    return [line.strip() for line in calls if not named.search(line)]


@pytest.fixture(scope="module", params=["direct", "libzmq"])
def hot(request, tmp_path_factory):
    """``(lane, code)`` of the whole hot loop over either lane."""
    load_libzmq()
    rig = make_rig(tmp_path_factory.mktemp("hot")).spec
    lane = make_direct(5) if request.param == "direct" else make_zmq_lane()
    memory = make_memory(rig, lane, 0, 0, np.zeros(8), np.zeros((2, 8)))
    return request.param, code_of(run_loop.py_func, typeof(memory), **NATIVE)


def test_it_calls_only_its_sockets_and_the_clock(hot):
    """What the loop calls outside itself is exactly what its lane needs, and nothing else."""
    lane, code = hot
    allowed = CLOCK | LIBZMQ | (SOCKETS if lane == "direct" else set())
    assert outside(code) <= allowed
    assert {"zmq_recv", "zmq_send", "clock_gettime"} <= outside(code)
    assert calls_through_pointers(code) == []


def test_it_never_allocates_nor_meets_the_interpreter(hot):
    """No name of Python's, of numba's memory runtime or of an allocator or lock occurs."""
    _, code = hot
    assert FORBIDDEN.findall(code) == []


def test_everything_in_it_is_ours_or_numbas_arithmetic(hot):
    """Each function that the code defines comes from gatestep or is numba's min, max or range."""
    _, code = hot
    defined = [f.name for f in llvm.parse_assembly(code).functions if not f.is_declaration]
    assert sum("8gatestep" in name for name in defined) > 10
    strangers = [n for n in defined if "8gatestep" not in n and "5numba" not in n]
    assert strangers == []


def test_its_stack_is_bounded(hot):
    """Nothing takes stack by a size that is only known as it runs."""
    _, code = hot
    assert re.findall(r"alloca [^\n]*, i(?:32|64) %", code) == []


def allocates(n):
    return np.zeros(n).sum()


def prints(n):
    print(n)
    return n


def harmless(n):
    return n * 2.0 + max(n, 3)


def test_the_check_sees_an_allocation():
    """A function that makes an array is caught: by the names it uses and what it calls."""
    code = code_of(allocates, typeof(3))
    assert FORBIDDEN.search(code)
    assert outside(code) - CLOCK - LIBZMQ - SOCKETS


def test_the_check_sees_the_interpreter():
    """A function that prints is caught."""
    code = code_of(prints, typeof(3))
    assert any(name.startswith("Py") for name in outside(code))
    assert FORBIDDEN.search(code)


def test_the_check_sees_a_call_through_a_pointer():
    """A call to an address that is only known as it runs is caught."""
    direct = "  %x = call i32 @poll(ptr %p, i64 1, i32 5)\n  tail call void @f(ptr %q)"
    assert calls_through_pointers(direct) == []
    assert len(calls_through_pointers("  %x = call i32 %f(ptr %p)\n  call void %g()")) == 2


def test_the_check_lets_arithmetic_pass():
    """A function that only computes has nothing to be caught."""
    code = code_of(harmless, typeof(3.0), **NATIVE)
    assert outside(code) == set()
    assert FORBIDDEN.findall(code) == []


def test_what_would_allocate_does_not_compile_as_hot():
    """With the options of hot code numba itself refuses a function that makes an array."""
    with pytest.raises(TypingError, match=r"zeros"):
        code_of(allocates, typeof(3), **NATIVE)
