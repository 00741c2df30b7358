"""The servers and clients of the round-trip benchmark, each started and always ended."""

from __future__ import annotations

import ctypes
import json
import os
import select
import shlex
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import msgpack
import numpy as np
import zmq
from rigs import INTERVAL_US, MODEL

from gatestep.errors import GatestepError, LinkError
from gatestep.wire import unpack_answer
from gatestep.zmqlane import load_libzmq

FOLDER = Path(__file__).resolve().parent
FIRST_SEQ = 100_000
"""As in c/client.c: from here on every sample is 26 bytes."""
ANSWER_BYTES, EACH_FURTHER = 19, 9
"""Of nearly every answer of one cell, and of each further cell's current; two more or
fewer where the service time is long or short."""
PATIENCE_S = 5.0
START_S = 180.0
_LONGEST = 128
_DEATH_SIGNAL = 1  # PR_SET_PDEATHSIG


@dataclass(frozen=True)
class Trips:
    """What one client measured in one turn."""

    nsec: np.ndarray
    smallest: int
    largest: int
    answer: bytes


def build_c(name: str, folder: Path, libzmq: Path) -> Path:
    """Compile a program of ``bench/c`` against a libzmq.

    Raises
    ------
    GatestepError
        Without a C compiler, or when it fails.
    """
    compiler = shlex.split(os.environ.get("CC", "")) or [shutil.which("cc") or ""]
    if not compiler[0]:
        raise GatestepError("this benchmark needs a C compiler: there is no cc on the path")
    program = folder / name
    command = [*compiler, "-std=c99", "-O2", "-o", str(program), str(FOLDER / "c" / f"{name}.c")]
    command += [str(libzmq), f"-Wl,-rpath,{libzmq.parent}"]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
    if done.returncode:
        raise GatestepError(f"{shlex.join(command)}: {done.stderr.strip()[-1000:]}")
    return program


def find_libzmq(given: Path | None) -> Path:
    """The libzmq to link with: the one given, else the one that pyzmq carries.

    Raises
    ------
    LinkError
        When there is none that a C program can be linked with.
    """
    path = given or load_libzmq()
    if not path.exists() or "libzmq" not in path.name:
        raise LinkError(
            f"{path} is not a libzmq that C can be linked with; install one "
            "(Debian: apt install libzmq3-dev) and give its path with --libzmq"
        )
    return path.resolve()


def _prepare_child(priority: int) -> None:
    """In a child: end when the benchmark ends, however it ends (Linux); SCHED_FIFO if asked."""
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(_DEATH_SIGNAL, signal.SIGTERM)
    if priority:
        os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(priority))


@contextmanager
def process(
    command: list[str], log: Path, priority: int = 0, **pipes: int
) -> Iterator[subprocess.Popen[bytes]]:
    """A process that has ended when the block ends; what it says on stderr goes to ``log``."""
    with log.open("wb") as errors:
        child = subprocess.Popen(
            command,
            stderr=errors,
            # No thread of this program holds a lock when it forks.
            preexec_fn=lambda: _prepare_child(priority),  # noqa: PLW1509
            **pipes,
        )
        try:
            yield child
        finally:
            child.terminate()
            try:
                child.wait(10)
            except subprocess.TimeoutExpired:
                child.kill()
                child.wait()
            for pipe in (child.stdin, child.stdout):
                if pipe:
                    pipe.close()


@contextmanager
def server(command: list[str], log: Path) -> Iterator[None]:
    """A server process that has said on stdout that it is ready."""
    with process(command, log, stdout=subprocess.PIPE) as child:
        assert child.stdout is not None
        ready, _, _ = select.select([child.stdout], [], [], START_S)
        if not (ready and child.stdout.readline()):
            raise LinkError(f"{shlex.join(command)} did not start: {log.read_text()[-1000:]}")
        yield


def plain_command(endpoint: str) -> list[str]:
    """The plain Python server."""
    return [sys.executable, str(FOLDER / "plain_server.py"), endpoint, MODEL, str(INTERVAL_US)]


class PythonClient:
    """A rig in Python: pyzmq and msgpack, in this process."""

    def __init__(self, endpoint: str, v_mv: np.ndarray) -> None:
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.DEALER)
        self._socket.setsockopt(zmq.RCVTIMEO, int(PATIENCE_S * 1e3))
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.connect(endpoint)
        self._v_mv, self._seq = v_mv.tolist(), FIRST_SEQ

    def run(self, count: int) -> Trips:
        """Time ``count`` round trips, from a packed sample to an answer's bytes."""
        nsec, sizes = np.zeros(count, np.int64), set()
        answer = b""
        for k in range(count):
            seq = self._seq
            t_us = int((seq - FIRST_SEQ) * INTERVAL_US) + FIRST_SEQ
            v_mv = self._v_mv[seq % len(self._v_mv)]
            message = msgpack.packb([seq, t_us, seq - 2, None, v_mv])
            start = time.perf_counter_ns()
            self._socket.send(message)
            answer = self._socket.recv()
            nsec[k] = time.perf_counter_ns() - start
            sizes.add(len(answer))
            self._seq += 1
        return Trips(nsec, min(sizes), max(sizes), answer)

    def close(self) -> None:
        """Give the socket back."""
        self._context.destroy(linger=0)


class ProcessClient:
    """A rig in C or compiled: a process that takes counts on stdin and tells what it measured."""

    def __init__(self, child: subprocess.Popen[bytes], log: Path) -> None:
        self._child, self._log = child, log

    def run(self, count: int) -> Trips:
        """Time ``count`` round trips."""
        stdin, stdout = self._child.stdin, self._child.stdout
        assert stdin is not None
        assert stdout is not None
        stdin.write(b"%d\n" % count)
        stdin.flush()
        size = (count + 3) * 8 + _LONGEST
        content = stdout.read(size)
        if len(content) != size:
            raise LinkError(f"the client ended: {self._log.read_text()[-500:]}")
        numbers = np.frombuffer(content[:-_LONGEST], np.int64)
        smallest, largest, last = (int(n) for n in numbers[count:])
        return Trips(numbers[:count], smallest, largest, content[-_LONGEST:][:last])


Client = PythonClient | ProcessClient


@contextmanager
def process_client(command: list[str], log: Path, priority: int = 0) -> Iterator[ProcessClient]:
    """A client of a server in a process of its own, under SCHED_FIFO if given a priority."""
    pipes = {"stdin": subprocess.PIPE, "stdout": subprocess.PIPE}
    with process(command, log, priority, **pipes) as child:
        yield ProcessClient(child, log)


@contextmanager
def python_client(endpoint: str, v_mv: np.ndarray) -> Iterator[PythonClient]:
    """A Python client of a server."""
    client = PythonClient(endpoint, v_mv)
    try:
        yield client
    finally:
        client.close()


def answer_bytes(cells: int) -> int:
    """Size of an answer for so many cells."""
    return ANSWER_BYTES + EACH_FURTHER * (cells - 1)


def check_answer(name: str, trips: Trips, live: bool, cells: int = 1) -> None:
    """See that a server answers what it should, in as many bytes as the others.

    Raises
    ------
    GatestepError
        When a model server's answer is not live, or its size is far from the echo's.
    """
    size = answer_bytes(cells)
    if not size - 2 <= trips.smallest <= trips.largest <= size + 2:
        raise GatestepError(
            f"{name}: answers of {trips.smallest} to {trips.largest} bytes; the echo sends {size}"
        )
    if live:
        answer = unpack_answer(trips.answer)
        if not (isinstance(answer, tuple) and answer[1] == 1):
            raise GatestepError(
                f"{name}: its last answer is not plainly live: {json.dumps(answer)}"
            )
