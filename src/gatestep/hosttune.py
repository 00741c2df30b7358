"""Real-time set-up of the host: applied, read back, and said where it could not be had.

Nothing is assumed. A setting that the rig file's ``[host]`` asks for is applied and
then read back from the kernel; what was read is what is reported. A server runs on
without what it could not have.

Real-time threads that never wait take their CPU from everything else. The hot thread
and libzmq's I/O threads wait in the kernel for the next message, and the kernel's
real-time throttling bounds them when they are flooded.
"""

from __future__ import annotations

import ctypes
import gc
import os
import struct
import sys
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import zmq

from .remedies import (
    CAP_IPC_LOCK,
    SYSTEM,
    allow_c_states,
    allow_memory_lock,
    allow_real_time,
    choose_cpus,
    cpu_list,
    has_capability,
)
from .specs import HostSpec

LINUX = sys.platform == "linux"
POLICIES = {"other": 0, "fifo": 1, "rr": 2}
"""Linux's numbers of the scheduling policies."""
C_STATE_DEVICE = Path("/dev/cpu_dma_latency")

_POLICY_NAMES = {0: "other", 1: "fifo", 2: "rr", 3: "batch", 5: "idle", 6: "deadline"}
_RESET_ON_FORK = 0x40000000
_PR_SET_TIMERSLACK, _PR_GET_TIMERSLACK = 29, 30
# Pages are locked when they are touched: the server reserves far more than it uses.
_MCL_CURRENT_FUTURE_ONFAULT = 1 | 2 | 4
_IO_THREAD = "ZMQbg/IO"
_THREADS = Path("/proc/self/task")
_PATIENCE_S = 5.0


@dataclass(frozen=True)
class Applied:
    """What became of one setting: whether it holds, as read back, and what would allow it."""

    setting: str
    applied: bool
    detail: str
    remedy: str | None = None


class HostTuning:
    """The host settings of one server.

    Parameters
    ----------
    host : HostSpec
    say : callable
        Takes a line for every setting that could not be had.

    Attributes
    ----------
    report : list of dict
        Every setting with ``setting``, ``applied``, ``detail`` and ``remedy``; filled
        by :meth:`set_up_io` and :meth:`confirm`.
    """

    def __init__(self, host: HostSpec, say: Callable[[str], None] = lambda _: None) -> None:
        self.report: list[dict[str, Any]] = []
        self._host, self._say = host, say
        self._tuned = threading.Event()
        self._found: list[Applied] = []
        self._device: int | None = None
        self._locked = self._frozen = False
        self._collecting = True

    def set_up_io(self, context: zmq.Context[Any]) -> None:
        """Give the I/O threads of a context policy and CPUs; before its first socket.

        For the context whose I/O threads carry the loop's messages.
        """
        host = self._host
        if not (host.real_time or host.cpus_of_io):
            return
        if not LINUX:
            self._take(_elsewhere("io_policy" if host.real_time else "io_cpus"))
            return
        for found in tune_io(host, context):
            self._take(found)

    def tune_thread(self) -> None:
        """Apply the settings to the calling thread, the hot one, and to the process."""
        try:
            self._found = list(self._tune(threading.get_native_id()))
        finally:
            self._tuned.set()

    def confirm(self) -> None:
        """Wait until :meth:`tune_thread` is through on its thread; report what it found."""
        if not self._tuned.wait(_PATIENCE_S):
            self._take(Applied("policy", False, "the hot thread has not come up", "start again"))
        for found in self._found:
            self._take(found)

    def follow(self, armed: bool) -> None:
        """Keep Python's garbage collector off while the loop is armed."""
        if armed == self._frozen:
            return
        self._frozen = armed
        if armed:
            self._collecting = gc.isenabled()
            gc.freeze()
            gc.disable()
        else:
            gc.unfreeze()
            if self._collecting:
                gc.enable()

    def release(self) -> None:
        """Give back what holds for the process: idle states, memory, the collector."""
        self.follow(False)
        if self._device is not None:
            os.close(self._device)
            self._device = None
        if self._locked:
            _libc().munlockall()
            self._locked = False

    def _take(self, found: Applied) -> None:
        self.report.append(asdict(found))
        if not found.applied and found.remedy:
            self._say(f"[host] {found.setting} not in force: {found.detail}. {found.remedy}")

    def _tune(self, thread: int) -> Iterator[Applied]:
        host = self._host
        if not LINUX:
            yield from (_elsewhere(name) for name in _asked(host))
            return
        yield set_policy(thread, host)
        if host.cpus:
            yield set_cpus(thread, host.cpus)
        if host.timer_slack_nsec:
            yield set_timer_slack(host.timer_slack_nsec)
        if host.lock_memory:
            found = lock_memory()
            self._locked = found.applied
            yield found
        if host.hold_c_states:
            found, self._device = hold_c_states()
            yield found


def _asked(host: HostSpec) -> list[str]:
    """Settings that differ from leaving the host alone."""
    return [name for name, value in host.model_dump(exclude_defaults=True).items() if value]


def _elsewhere(setting: str) -> Applied:
    return Applied(
        setting,
        False,
        f"gatestep sets up Linux hosts only, and this is {sys.platform}",
        "Run the server on Linux, or leave it out of [host]",
    )


def set_policy(thread: int, host: HostSpec) -> Applied:
    """Set the policy of a thread; ``other`` leaves it as the process was started."""
    refused = ""
    if host.real_time:
        try:
            os.sched_setscheduler(thread, POLICIES[host.policy], os.sched_param(host.priority))
        except OSError as fault:
            refused = f"{fault.strerror or fault}; "
    holds, shown = _read_policy(thread, host)
    remedy = None
    if not holds:
        remedy = (
            allow_real_time(SYSTEM, host.priority)
            if host.real_time
            else 'To have it stated, give [host] policy = "fifo" or "rr"'
        )
    return Applied("policy", holds, f"{refused}hot thread {thread}: {shown}", remedy)


def set_cpus(thread: int, cpus: tuple[int, ...]) -> Applied:
    """Keep a thread to some CPUs."""
    refused = ""
    try:
        os.sched_setaffinity(thread, cpus)
    except OSError as fault:
        refused = f"{fault.strerror or fault}; "
    holds, shown = _read_cpus(thread, cpus)
    remedy = None if holds else choose_cpus(SYSTEM, "cpus")
    return Applied("cpus", holds, f"{refused}hot thread {thread}: {shown}", remedy)


def _read_policy(thread: int, host: HostSpec) -> tuple[bool, str]:
    """Whether a thread has the policy and priority asked for, and what it has."""
    policy = os.sched_getscheduler(thread) & ~_RESET_ON_FORK
    priority = os.sched_getparam(thread).sched_priority
    wanted = (POLICIES[host.policy], host.priority if host.real_time else 0)
    name = _POLICY_NAMES.get(policy, str(policy))
    return (policy, priority) == wanted, f"{name} {priority}" if priority else name


def _read_cpus(thread: int, cpus: tuple[int, ...]) -> tuple[bool, str]:
    """Whether a thread is kept to the CPUs asked for, and where it may run."""
    found = os.sched_getaffinity(thread)
    return found == set(cpus), f"CPUs {cpu_list(found)}"


def set_timer_slack(slack_nsec: int) -> Applied:
    """Bound how late the calling thread's timed waits may end, in ns."""
    libc = _libc()
    failed = libc.prctl(_PR_SET_TIMERSLACK, ctypes.c_ulong(slack_nsec), 0, 0, 0)
    found = libc.prctl(_PR_GET_TIMERSLACK, 0, 0, 0, 0)
    holds = not failed and 0 <= found <= slack_nsec
    remedy = None if holds else 'Give [host] policy = "fifo": a real-time thread has no slack'
    return Applied("timer_slack_nsec", holds, f"{found} ns", remedy)


def lock_memory() -> Applied:
    """Lock every page of the process, each once it is touched.

    Under a finite limit it is not tried: once the limit is reached every further
    allocation of the process would fail.
    """
    import resource

    limit, _ = resource.getrlimit(resource.RLIMIT_MEMLOCK)
    if limit != resource.RLIM_INFINITY and not has_capability(SYSTEM, CAP_IPC_LOCK):
        detail = f"at most {limit // 1024} KiB may be locked, and beyond it allocations would fail"
        return Applied("lock_memory", False, detail, allow_memory_lock())
    if _libc().mlockall(_MCL_CURRENT_FUTURE_ONFAULT):
        return Applied("lock_memory", False, os.strerror(ctypes.get_errno()), allow_memory_lock())
    locked = _locked_kib()
    remedy = None if locked else allow_memory_lock()
    return Applied("lock_memory", locked > 0, f"{locked} KiB of address space locked", remedy)


def _locked_kib() -> int:
    """How much of the process's address space is locked, touched or not."""
    for line in Path("/proc/self/status").read_text("utf-8").splitlines():
        if line.startswith("VmLck:"):
            return int(line.split()[1])
    return 0


def hold_c_states() -> tuple[Applied, int | None]:
    """Ask for a wake-up latency of 0 µs, for as long as the returned file stays open."""
    setting, device = "hold_c_states", None
    try:
        device = os.open(C_STATE_DEVICE, os.O_RDWR | os.O_CLOEXEC)
        os.write(device, struct.pack("=i", 0))
        (latency_us,) = struct.unpack("=i", os.pread(device, 4, 0))
    except (OSError, struct.error) as fault:
        if device is not None:
            os.close(device)
        reason = getattr(fault, "strerror", None) or fault
        return Applied(setting, False, f"{C_STATE_DEVICE}: {reason}", allow_c_states()), None
    detail = f"longest wake-up allowed: {latency_us} µs"
    return Applied(
        setting, latency_us == 0, detail, allow_c_states() if latency_us else None
    ), device


def tune_io(host: HostSpec, context: zmq.Context[Any]) -> Iterator[Applied]:
    """Give a context's I/O threads policy and CPUs, start them and read them back.

    libzmq ends the process when one of its threads may not have what its context was
    told, so a thread of our own tries it first.
    """
    refused = {"io_policy": "", "io_cpus": ""}
    if host.real_time:
        fault = try_policy(host.policy, host.priority)
        refused["io_policy"] = fault or _tell(
            context,
            (zmq.THREAD_SCHED_POLICY, POLICIES[host.policy]),
            (zmq.THREAD_PRIORITY, host.priority),
        )
    if host.cpus_of_io:
        fault = _try(lambda thread: os.sched_setaffinity(thread, host.cpus_of_io))
        adding = [(zmq.THREAD_AFFINITY_CPU_ADD, cpu) for cpu in host.cpus_of_io]
        refused["io_cpus"] = fault or _tell(context, *adding)
    threads = _start_io(context)
    if host.real_time:
        remedy = allow_real_time(SYSTEM, host.priority)
        read = [(t, *_read_policy(t, host)) for t in threads]
        yield _of_io("io_policy", refused["io_policy"], read, remedy)
    if host.cpus_of_io:
        remedy = choose_cpus(SYSTEM, "io_cpus")
        read = [(t, *_read_cpus(t, host.cpus_of_io)) for t in threads]
        yield _of_io("io_cpus", refused["io_cpus"], read, remedy)


def _of_io(setting: str, refused: str, read: list[tuple[int, bool, str]], remedy: str) -> Applied:
    """One report of all I/O threads, read as (thread, holds, shown)."""
    shown = ", ".join(f"I/O thread {thread}: {text}" for thread, _, text in read)
    holds = bool(read) and all(holds for _, holds, _ in read)
    detail = "; ".join(part for part in (refused, shown or "no I/O thread was found") if part)
    return Applied(setting, holds, detail, None if holds else remedy)


def _tell(context: zmq.Context[Any], *options: tuple[int, int]) -> str:
    """Set options of a context; what it says against them, or nothing."""
    try:
        for option, value in options:
            context.set(option, value)
    except zmq.ZMQError as fault:
        return f"libzmq: {fault}"
    return ""


def _start_io(context: zmq.Context[Any]) -> list[int]:
    """Have a context start its I/O threads; their ids, once they have their names."""
    # A thread exists at once, and names itself after it has taken its policy and CPUs.
    before = {int(folder.name) for folder in _THREADS.iterdir()}
    context.socket(zmq.PAIR).close(linger=0)
    wanted = int(context.get(zmq.IO_THREADS))
    deadline = time.monotonic() + _PATIENCE_S
    while True:
        found = [thread for thread in _io_threads() if thread not in before]
        if len(found) >= wanted or time.monotonic() > deadline:
            return found
        time.sleep(0.001)


def _io_threads() -> Iterator[int]:
    """Ids of the libzmq I/O threads of this process, of every context."""
    for folder in sorted(_THREADS.iterdir(), key=lambda path: int(path.name)):
        try:
            name = (folder / "comm").read_text("utf-8")
        except OSError:
            continue
        if name.startswith(_IO_THREAD):
            yield int(folder.name)


def try_policy(policy: str, priority: int) -> str:
    """Whether a thread may have a policy: what the kernel says against it, or nothing."""
    param = os.sched_param(priority)
    return _try(lambda thread: os.sched_setscheduler(thread, POLICIES[policy], param))


def _try(act: Callable[[int], None]) -> str:
    """Do something to a thread that ends at once; what the kernel says against it."""
    said: list[str] = []

    def run() -> None:
        try:
            act(threading.get_native_id())
        except OSError as fault:
            said.append(fault.strerror or str(fault))

    trial = threading.Thread(target=run, name="trial")
    trial.start()
    trial.join()
    return said[0] if said else ""


def _libc() -> Any:
    return ctypes.CDLL(None, use_errno=True)
