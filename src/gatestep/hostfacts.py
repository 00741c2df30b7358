"""What a host can do for the loop: facts, verdicts and remedies, read from files.

Every fact is a pure function of a tree of files like Linux's ``/proc``, ``/sys`` and
``/dev``, and of what the rig file's ``[host]`` asks for.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

from .remedies import (
    CAP_IPC_LOCK,
    CAP_SYS_NICE,
    allow_c_states,
    allow_memory_lock,
    allow_real_time,
    choose_cpus,
    cpu_list,
    cpu_set,
    has_capability,
    online_cpus,
    read_text,
)
from .specs import HostSpec

Verdict = Literal["ok", "weak", "missing"]

_CPUS = "sys/devices/system/cpu"
_CLOCK = "sys/devices/system/clocksource/clocksource0"
_IN_RIG_FILE = "in the rig file: [host] "
# Clocks that the kernel reads without leaving the program, and those it asks a slow chip for.
_GOOD_CLOCKS = {"tsc", "arch_sys_counter", "riscv_clocksource", "stp", "tod"}
_SLOW_CLOCKS = {"hpet", "acpi_pm", "jiffies", "refined-jiffies", "pit"}
_CONTAINER_SIGNS = ("docker", "kubepods", "containerd", "lxc", "libpod")


@dataclass(frozen=True)
class Finding:
    """One fact with its verdict.

    ``why`` is what it means to the loop; ``remedy`` the command or setting that
    betters it, None when there is nothing to better; ``more`` is for programs.
    """

    name: str
    verdict: Verdict
    found: str
    why: str
    remedy: str | None = None
    more: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class Host:
    """A tree of files to read, and what is asked of the host.

    ``refused`` is what the kernel said when a real-time policy was tried, empty when
    it was allowed, None when nothing was tried.
    """

    root: Path
    asked: HostSpec
    refused: str | None = None

    def text(self, name: str) -> str | None:
        """A file's content, stripped; None when it cannot be read."""
        return read_text(self.root, name)

    def cpus(self) -> set[int]:
        """The CPUs in question: those asked for, else all that are online."""
        return set(self.asked.cpus) or online_cpus(self.root)

    def limit(self, name: str) -> float:
        """A soft limit of this process from ``/proc/self/limits``; 0 when not stated."""
        row = re.search(rf"^{name}\s+(\S+)", self.text("proc/self/limits") or "", re.MULTILINE)
        if not row:
            return 0.0
        return float("inf") if row[1] == "unlimited" else float(row[1])

    def flags(self) -> set[str]:
        """The first CPU's feature flags."""
        row = re.search(r"^flags\s*:(.*)$", self.text("proc/cpuinfo") or "", re.MULTILINE)
        return set(row[1].split()) if row else set()


def kernel(host: Host) -> Finding:
    """Which kernel, and when it lets a waking thread interrupt its own work."""
    why = "It decides how long the kernel's own work may keep the loop from waking."
    release = host.text("proc/sys/kernel/osrelease") or "unknown"
    version = host.text("proc/sys/kernel/version") or ""
    if "PREEMPT_RT" in version or host.text("sys/kernel/realtime") == "1":
        return Finding("kernel", "ok", f"{release}, PREEMPT_RT", why)
    built = re.search(r"PREEMPT(_\w+)?", version)
    model = built[0] if built else "no preemption"
    mode = _preemption_mode(host) if model == "PREEMPT_DYNAMIC" else None
    shown = f"{release}, {model}" + (f", running as {mode}" if mode else "")
    bad = not built or model == "PREEMPT_VOLUNTARY" or mode in ("none", "voluntary")
    return Finding("kernel", "missing" if bad else "weak", shown, why, _other_kernel(host))


def _preemption_mode(host: Host) -> str | None:
    """The mode a PREEMPT_DYNAMIC kernel runs in, where it says so."""
    shown = re.search(r"\((\w+)\)", host.text("sys/kernel/debug/sched/preempt") or "")
    given = re.findall(r"\bpreempt=(\w+)", host.text("proc/cmdline") or "")
    return shown[1] if shown else given[-1] if given else None


def _other_kernel(host: Host) -> str:
    release = host.text("etc/os-release") or ""
    meanwhile = "; until then the kernel parameter preempt=full"
    named = re.search(r'^ID="?(\w+)', release, re.MULTILINE)
    if named and named[1] == "debian":
        return "sudo apt install linux-image-rt-$(dpkg --print-architecture)" + meanwhile
    if named and named[1] == "ubuntu":
        return "sudo pro enable realtime-kernel" + meanwhile
    return "install your distribution's PREEMPT_RT kernel" + meanwhile


def isolated(host: Host) -> Finding:
    """Whether a CPU is set aside for the loop."""
    name, why = "isolated CPUs", "On a CPU set aside, no other program ever stands before the loop."
    online, asked = online_cpus(host.root), set(host.asked.cpus)
    aside = cpu_set(host.text(f"{_CPUS}/isolated"))
    tickless = cpu_set(host.text(f"{_CPUS}/nohz_full"))
    shown = f"isolated {cpu_list(aside) or 'none'}, tick-free {cpu_list(tickless) or 'none'}"
    if asked - online:
        absent = f"CPU {cpu_list(asked - online)} is not online; {shown}"
        return Finding(name, "missing", absent, why, choose_cpus(host.root, "cpus"))
    if asked and asked <= aside:
        return Finding(name, "ok", f"the loop's {cpu_list(asked)}; {shown}", why)
    if not asked and aside:
        remedy = f"{_IN_RIG_FILE}cpus = [{max(aside)}]"
        return Finding(name, "weak", f"none is the loop's; {shown}", why, remedy)
    cpus = cpu_list(asked or {max(online, default=0)})
    remedy = f"kernel parameters isolcpus={cpus} nohz_full={cpus} rcu_nocbs={cpus}" + (
        "" if asked else f", and {_IN_RIG_FILE}cpus = [{cpus}]"
    )
    if len(online) < 2:
        remedy = "a machine with two or more CPUs: the only one cannot be set aside"
    return Finding(name, "weak" if asked else "missing", shown, why, remedy)


def governor(host: Host) -> Finding:
    """How the CPUs choose their frequency."""
    name, why = "frequency governor", "A CPU slowed down between samples answers the next one late."
    paths = {c: f"{_CPUS}/cpu{c}/cpufreq/scaling_governor" for c in sorted(host.cpus())}
    found = {c: text for c, path in paths.items() if (text := host.text(path))}
    if not found:
        remedy = "set the performance profile in the firmware, or on the machine below this one"
        return Finding(name, "weak", "not to be seen from here", why, remedy)
    shown = ", ".join(sorted(set(found.values())))
    if set(found.values()) == {"performance"}:
        return Finding(name, "ok", shown, why)
    files = " ".join(f"/{paths[c]}" for c in found)
    return Finding(name, "weak", shown, why, f"echo performance | sudo tee {files}")


def siblings(host: Host) -> Finding:
    """Whether the loop's CPUs share their core with others."""
    name, why = "shared cores", "Two CPUs of one core slow each other down at any moment."
    chosen, online = host.cpus(), online_cpus(host.root)
    aside = cpu_set(host.text(f"{_CPUS}/isolated")) - set(host.asked.cpus)
    sharing: dict[int, set[int]] = {}
    for cpu in sorted(chosen):
        others = cpu_set(host.text(f"{_CPUS}/cpu{cpu}/topology/thread_siblings_list")) & online
        if rest := others - {cpu} - aside:
            sharing[cpu] = rest
    if not sharing:
        return Finding(name, "ok", f"CPUs {cpu_list(chosen)} have their cores to themselves", why)
    shown = "; ".join(f"CPU {c} with {cpu_list(rest)}" for c, rest in sharing.items())
    remedy = f"echo off | sudo tee /{_CPUS}/smt/control"
    if host.asked.cpus:
        shared = sorted(set().union(*sharing.values()))
        files = " ".join(f"/{_CPUS}/cpu{other}/online" for other in shared)
        remedy = f"echo 0 | sudo tee {files}"
    return Finding(name, "weak", shown, why, remedy)


def clock(host: Host) -> Finding:
    """Which clock times the answers."""
    name, why = (
        "clock source",
        "Every sample reads the clock twice; a slow clock delays its answer.",
    )
    current = host.text(f"{_CLOCK}/current_clocksource") or "unknown"
    offered = (host.text(f"{_CLOCK}/available_clocksource") or "").split()
    flags = host.flags()
    steady = current != "tsc" or {"constant_tsc", "nonstop_tsc"} <= flags
    if current in _GOOD_CLOCKS and steady:
        return Finding(name, "ok", current, why)
    if current == "tsc":
        shown = "tsc, which changes its pace or stops when idle on this CPU"
        return Finding(name, "weak", shown, why, f"{_IN_RIG_FILE}hold_c_states = true")
    remedy = "kernel parameter tsc=reliable, where the CPU's counter is sound"
    if "tsc" in offered:
        remedy = f"echo tsc | sudo tee /{_CLOCK}/current_clocksource"
    return Finding(name, "missing" if current in _SLOW_CLOCKS else "weak", current, why, remedy)


def throttling(host: Host) -> Finding:
    """How far real-time threads may take the machine."""
    why = (
        "It keeps the machine usable when a real-time thread is flooded; the loop's waits are free."
    )
    name, command = "real-time throttling", "sudo sysctl -w kernel.sched_rt_runtime_us=950000"
    text = host.text("proc/sys/kernel/sched_rt_runtime_us")
    if text is None:
        return Finding(name, "weak", "this kernel does not say", why)
    runtime = int(text)
    period = int(host.text("proc/sys/kernel/sched_rt_period_us") or 1_000_000)
    if runtime < 0 or runtime >= period:
        return Finding(name, "weak", "off: nothing holds a real-time thread back", why, command)
    shown = f"real-time threads have {runtime / 1000:g} ms of every {period / 1000:g} ms"
    if runtime == 0:
        return Finding(name, "missing", shown, why, command)
    if runtime < period / 2:
        return Finding(name, "weak", shown, why, command)
    return Finding(name, "ok", shown, why)


def real_time(host: Host) -> Finding:
    """Whether a real-time policy is allowed, and asked for."""
    name, why = "real-time policy", "With it the loop goes before every ordinary program."
    asked = host.asked
    allowed = host.limit("Max realtime priority")
    has = has_capability(host.root, CAP_SYS_NICE)
    source = "capability SYS_NICE" if has else f"real-time priority limit {allowed:g}"
    if host.refused or not (has or allowed >= 1):
        shown = f"not allowed ({host.refused or source})"
        return Finding(name, "missing", shown, why, allow_real_time(host.root, asked.priority))
    if not has and allowed < asked.priority:
        remedy = f"{_IN_RIG_FILE}priority = {allowed:g}"
        return Finding(name, "weak", f"allowed up to {allowed:g} only", why, remedy)
    if not asked.real_time:
        remedy = f'{_IN_RIG_FILE}policy = "fifo"'
        return Finding(name, "weak", f"allowed ({source}), not asked for", why, remedy)
    tried = "" if host.refused is None else ", tried"
    return Finding(name, "ok", f"{asked.policy} {asked.priority} ({source}{tried})", why)


def memory_lock(host: Host) -> Finding:
    """Whether memory may be locked without limit, and is asked to be."""
    name, why = "locked memory", "A page the kernel took away costs the loop a wait for the disk."
    limit = host.limit("Max locked memory")
    has = has_capability(host.root, CAP_IPC_LOCK)
    if not has and limit != float("inf"):
        shown = f"limited to {limit / 1024:g} KiB"
        return Finding(name, "missing", shown, why, allow_memory_lock())
    source = "capability IPC_LOCK" if has else "no limit"
    if not host.asked.lock_memory:
        remedy = f"{_IN_RIG_FILE}lock_memory = true"
        return Finding(name, "weak", f"allowed ({source}), not asked for", why, remedy)
    return Finding(name, "ok", f"allowed ({source})", why)


def c_states(host: Host) -> Finding:
    """Whether the CPUs can be kept out of slow idle states, and are asked to be."""
    name, why = "idle states", "A CPU asleep between samples must wake before it can answer."
    device = host.root / "dev/cpu_dma_latency"
    if not device.exists():
        remedy = "kernel parameters processor.max_cstate=1 intel_idle.max_cstate=0; " + (
            "in a container: docker run --device /dev/cpu_dma_latency"
        )
        return Finding(name, "missing", "no /dev/cpu_dma_latency here", why, remedy)
    if not os.access(device, os.R_OK | os.W_OK):
        shown = "/dev/cpu_dma_latency may not be written"
        return Finding(name, "missing", shown, why, allow_c_states())
    if not host.asked.hold_c_states:
        remedy = f"{_IN_RIG_FILE}hold_c_states = true"
        shown = f"can be held off, not asked for{_slowest_wake(host)}"
        return Finding(name, "weak", shown, why, remedy)
    return Finding(name, "ok", f"held off while the server runs{_slowest_wake(host)}", why)


def _slowest_wake(host: Host) -> str:
    """How long the deepest idle state takes to leave, where the kernel says so."""
    files = host.root.glob(f"{_CPUS}/cpu[0-9]*/cpuidle/state*/latency")
    found = [int(file.read_text("utf-8")) for file in files]
    return f"; the deepest takes {max(found)} µs to leave" if found else ""


def huge_pages(host: Host) -> Finding:
    """Whether the kernel regroups pages behind programs' backs."""
    name, why = "huge pages", "Regrouping pages stops the program for as long as it takes."
    file = "sys/kernel/mm/transparent_hugepage/enabled"
    chosen = re.search(r"\[(\w+)\]", host.text(file) or "")
    if chosen and chosen[1] == "always":
        return Finding(name, "weak", "always", why, f"echo madvise | sudo tee /{file}")
    return Finding(name, "ok", chosen[1] if chosen else "none", why)


def machine(host: Host) -> Finding:
    """Whether something stands between this system and its machine."""
    name, why = "machine", "Below a virtual machine another system decides when the loop runs."
    signs = []
    release = host.text("proc/sys/kernel/osrelease") or ""
    if "hypervisor" in host.flags() or "microsoft" in release.lower():
        signs.append("virtual machine")
    groups = host.text("proc/1/cgroup") or ""
    marked = any((host.root / mark).exists() for mark in (".dockerenv", "run/.containerenv"))
    if marked or any(sign in groups for sign in _CONTAINER_SIGNS):
        signs.append("container")
    if not signs:
        return Finding(name, "ok", "no sign of a virtual machine or container", why)
    remedy = "run gatestep serve on the machine itself"
    if signs == ["container"]:
        why = "A container may lack permissions and CPU time that its machine has."
    return Finding(name, "weak", " and ".join(signs), why, remedy)


def load(host: Host) -> Finding:
    """How busy the machine is."""
    name, why = "load", "Whatever else runs takes CPU, cache and memory from the loop."
    text = (host.text("proc/loadavg") or "").split()
    if not text:
        return Finding(name, "weak", "not to be seen from here", why, "uptime")
    average, cpus = float(text[0]), max(len(online_cpus(host.root)), 1)
    shown = f"{average:.2f} over the last minute on {cpus} CPU{'s' * (cpus > 1)}"
    remedy = "ps -eo pid,pcpu,comm --sort=-pcpu | head, and end what is not needed"
    if average <= cpus / 2:
        return Finding(name, "ok", shown, why)
    return Finding(name, "weak" if average <= cpus else "missing", shown, why, remedy)


FACTS: tuple[Callable[[Host], Finding], ...] = (
    kernel,
    isolated,
    governor,
    siblings,
    clock,
    throttling,
    real_time,
    memory_lock,
    c_states,
    huge_pages,
    machine,
    load,
)
"""Every fact, in the order in which a person reads them."""


def host_findings(host: Host) -> list[Finding]:
    """Every fact about a host; one that says so when it is no Linux."""
    if host.text("proc/sys/kernel/osrelease") is None:
        why = "Real-time set-up and these facts are Linux's; elsewhere the loop runs as it comes."
        return [Finding("system", "missing", "not Linux", why, "run gatestep serve on Linux")]
    return [fact(host) for fact in FACTS]
