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
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import msgpack
import numpy as np
import zmq

from gatestep.errors import GatestepError, LinkError
from gatestep.zmqlane import load_libzmq

FOLDER = Path(__file__).resolve().parent
MODEL = "squid-axon"
INTERVAL_US = 20.0
FIRST_SEQ = 100_000
"""As in c/client.c: from here on every sample is 26 bytes."""
ANSWER_BYTES = 19
"""Of nearly every answer; two more or fewer where the service time is long or short."""
PATIENCE_S = 5.0
START_S = 180.0
_LONGEST = 64
_DEATH_SIGNAL = 1  # PR_SET_PDEATHSIG

RIG = """\
# Written by bench/roundtrip.py.
[loop]
endpoint = "{loop}"
interval_us = {interval_us}
budget_us = 1000000                     # how late an answer is, is measured, not judged
lane = "{lane}"

[control]
endpoint = "{folder}control"

[feed]
endpoint = "{folder}feed"

[limits]
silence_ms = 600000                     # a rig is silent while others have their turn
late_run = 1000000

[[cell]]
name = "cell"
model = "{model}"
[cell.limits]
current_pa = 200000
"""


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


def _end_with_parent() -> None:
    """In a child: end when the benchmark ends, however it ends (Linux)."""
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(_DEATH_SIGNAL, signal.SIGTERM)


@contextmanager
def process(command: list[str], log: Path, **pipes: int) -> Iterator[subprocess.Popen[bytes]]:
    """A process that has ended when the block ends; what it says on stderr goes to ``log``."""
    with log.open("wb") as errors:
        # No thread of this program holds a lock when it forks.
        child = subprocess.Popen(command, stderr=errors, preexec_fn=_end_with_parent, **pipes)  # noqa: PLW1509
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


def gatestep_command(lane: str, endpoint: str, folder: Path) -> list[str]:
    """A real ``gatestep serve``, armed, with one cell."""
    rig = folder / f"{lane}.toml"
    rig.write_text(
        RIG.format(
            loop=endpoint,
            lane=lane,
            folder=f"ipc://{folder}/{lane}-",
            interval_us=INTERVAL_US,
            model=MODEL,
        )
    )
    return [sys.executable, "-m", "gatestep", "serve", str(rig), "--arm", "--json"]


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


class CClient:
    """A rig in C: a process that takes counts on stdin and tells what it measured."""

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
            raise LinkError(f"the C client ended: {self._log.read_text()[-500:]}")
        numbers = np.frombuffer(content[:-_LONGEST], np.int64)
        smallest, largest, last = (int(n) for n in numbers[count:])
        return Trips(numbers[:count], smallest, largest, content[-_LONGEST:][:last])


Client = PythonClient | CClient


@contextmanager
def c_client(program: Path, endpoint: str, voltages: Path, log: Path) -> Iterator[CClient]:
    """A C client of a server."""
    command = [str(program), endpoint, str(voltages)]
    with process(command, log, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as child:
        yield CClient(child, log)


@contextmanager
def python_client(endpoint: str, v_mv: np.ndarray) -> Iterator[PythonClient]:
    """A Python client of a server."""
    client = PythonClient(endpoint, v_mv)
    try:
        yield client
    finally:
        client.close()


def check_answer(name: str, trips: Trips, live: bool, unpack: Callable[[bytes], object]) -> None:
    """See that a server answers what it should, in as many bytes as the others.

    Raises
    ------
    GatestepError
        When a model server's answer is not live, or its size is far from the echo's.
    """
    if not ANSWER_BYTES - 2 <= trips.smallest <= trips.largest <= ANSWER_BYTES + 2:
        raise GatestepError(
            f"{name}: answers of {trips.smallest} to {trips.largest} bytes; the echo sends "
            f"{ANSWER_BYTES}"
        )
    if live:
        answer = unpack(trips.answer)
        if not (isinstance(answer, tuple) and answer[1] == 1):
            raise GatestepError(
                f"{name}: its last answer is not plainly live: {json.dumps(answer)}"
            )
