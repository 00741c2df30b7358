"""Commands that let the operating system give the loop what it asks for.

Worded for this process: its user, and what the kernel says of it below ``root``,
which tests replace by a tree of their own.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Iterable
from pathlib import Path

SYSTEM = Path("/")
CAP_IPC_LOCK = 14
CAP_SYS_NICE = 23
_LIMITS_FILE = "/etc/security/limits.d/gatestep.conf"


def read_text(root: Path, name: str) -> str | None:
    """Stripped content of a small file below ``root``, or None when it cannot be read."""
    try:
        return (root / name).read_text("utf-8", "replace").strip().strip("\0")
    except OSError:
        return None


def has_capability(root: Path, bit: int) -> bool:
    """Whether this process has a Linux capability, by its number, in force."""
    for line in (read_text(root, "proc/self/status") or "").splitlines():
        if line.startswith("CapEff:"):
            return bool(int(line.split()[1], 16) >> bit & 1)
    return False


def online_cpus(root: Path) -> set[int]:
    """Numbers of the CPUs that are in use."""
    return cpu_set(read_text(root, "sys/devices/system/cpu/online"))


def cpu_set(text: str | None) -> set[int]:
    """CPU numbers of a kernel list such as ``0-3,7``; an unreadable one is empty."""
    found: set[int] = set()
    for part in (text or "").split(","):
        low, _, high = part.strip().partition("-")
        if low.isdigit() and (high or low).isdigit():
            found |= set(range(int(low), int(high or low) + 1))
    return found


def cpu_list(cpus: Iterable[int]) -> str:
    """The same, written as the kernel writes it."""
    parts: list[list[int]] = []
    for cpu in sorted(cpus):
        if parts and parts[-1][1] == cpu - 1:
            parts[-1][1] = cpu
        else:
            parts.append([cpu, cpu])
    return ",".join(str(a) if a == b else f"{a}-{b}" for a, b in parts)


def user_name() -> str:
    """The user this process runs as, by name where there is one."""
    if sys.platform == "win32":
        return os.environ.get("USERNAME", "USER")
    import pwd

    try:
        return pwd.getpwuid(os.getuid()).pw_name
    except KeyError:
        return f":{os.getuid()}"


def _limit(kind: str, value: str, option: str) -> str:
    line = f"{user_name()} - {kind} {value}"
    return (
        f"echo '{line}' | sudo tee -a {_LIMITS_FILE}, then log in again; "
        f"for one shell at once: sudo prlimit --pid $$ --{option}"
    )


def allow_real_time(root: Path, priority: int) -> str:
    """How to be allowed a real-time policy."""
    if has_capability(root, CAP_SYS_NICE):
        return (
            "this process has the capability, but no real-time budget: sudo sysctl -w "
            "kernel.sched_rt_runtime_us=950000; where control groups share it out, write it to "
            "this process's cpu.rt_runtime_us; in a container: docker run --cap-add=SYS_NICE"
        )
    return _limit("rtprio", str(priority), f"rtprio={priority}") + (
        "; in a container: docker run --cap-add=SYS_NICE"
    )


def allow_memory_lock() -> str:
    """How to be allowed to lock memory without limit."""
    return _limit("memlock", "unlimited", "memlock=unlimited") + (
        "; in a container: docker run --cap-add=IPC_LOCK --ulimit memlock=-1"
    )


def allow_c_states() -> str:
    """How to be allowed to hold the C-state device."""
    return (
        f"sudo chown {user_name()} /dev/cpu_dma_latency (until the next boot); "
        "in a container: docker run --device /dev/cpu_dma_latency"
    )


def choose_cpus(root: Path, key: str) -> str:
    """Which CPUs there are to choose from."""
    online = cpu_list(online_cpus(root)) or "unknown"
    return (
        f"in the rig file: [host] {key} = [...] of the CPUs online, {online}; "
        "where control groups share them out: cat /sys/fs/cgroup/cpuset.cpus.effective"
    )
