"""Host settings: what is reported is what the kernel says, and refusals come with remedies."""

from __future__ import annotations

import ctypes
import errno
import gc
import json
import os
import re
import resource
import struct
import subprocess
import sys
import threading
from pathlib import Path

import numpy as np
import pytest
import zmq
from conftest import wait_until

from gatestep import hosttune
from gatestep.config import load_rig
from gatestep.errors import FileError
from gatestep.hosttune import HostTuning
from gatestep.remedies import user_name
from gatestep.specs import HostSpec

HERE = sorted(os.sched_getaffinity(0))
ABSENT_CPU = 1023


def thread_stat(thread: int) -> dict:
    """A thread's settings from procfs, by the field numbers of proc(5), not by sched calls."""
    folder = Path("/proc/self/task") / str(thread)
    fields = (folder / "stat").read_text().rpartition(")")[2].split()
    allowed = re.search(r"^Cpus_allowed_list:\s*(\S+)", (folder / "status").read_text(), re.M)[1]
    settings = {"priority": int(fields[37]), "policy": int(fields[38]), "cpus": allowed}
    return {"id": thread, **settings}


def own_stat() -> dict:
    """The settings of the thread that asks."""
    return thread_stat(threading.get_native_id())


def tuned(host: HostSpec, look=lambda: None) -> tuple[HostTuning, list[str], object]:
    """Settings applied from inside a thread, where ``look`` then looks; what was said."""
    said: list[str] = []
    tuning, seen = HostTuning(host, said.append), []

    def run() -> None:
        tuning.tune_thread()
        seen.append(look())

    thread = threading.Thread(target=run)
    thread.start()
    thread.join()
    tuning.confirm()
    return tuning, said, seen[0]


def entry(tuning: HostTuning, setting: str) -> dict:
    (found,) = [e for e in tuning.report if e["setting"] == setting]
    assert set(found) == {"setting", "applied", "detail", "remedy"}
    assert (found["remedy"] is None) == found["applied"]
    return found


@pytest.fixture
def humble(tmp_path, monkeypatch):
    """A process without capabilities, as far as gatestep reads."""
    (tmp_path / "proc/self").mkdir(parents=True)
    (tmp_path / "proc/self/status").write_text("CapEff:\t0000000000000000\n")
    monkeypatch.setattr(hosttune, "SYSTEM", tmp_path)


def refuse(number: int):
    """A system call that fails."""

    def call(*_: object) -> None:
        raise OSError(number, os.strerror(number))

    return call


# What a rig file may ask for


def rig_with(tmp_path, host: str) -> Path:
    path = tmp_path / "rig.toml"
    path.write_text(
        f'[loop]\ninterval_us = 50.0\n[[cell]]\nname = "a"\nmodel = "leak"\n[host]\n{host}\n'
    )
    return path


@pytest.mark.parametrize(
    ("host", "words"),
    [
        ('policy = "realtime"', ["host.policy", '"realtime"', "'other', 'fifo' or 'rr'"]),
        ('policy = "fifo"\npriority = 100', ["host.priority", "100", "99"]),
        ("priority = 80", ['host: priority = 80 has no effect with policy = "other"']),
        ("cpus = [2, 2]", ["host.cpus", "CPU named twice: 2"]),
        ("cpus = [-1]", ["host.cpus", "-1"]),
        ('io_cpus = "3"', ["host.io_cpus", '"3"']),
        ("lock_memory = 1", ["host.lock_memory", "1"]),
        ("timer_slack_nsec = 0", ["host.timer_slack_nsec", "0"]),
        ("hold_c_state = true", ["did you mean hold_c_states?"]),
    ],
)
def test_impossible_host_settings_are_errors_that_name_the_key(tmp_path, host, words):
    """File, key, what was found and what is allowed stand in the message."""
    path = rig_with(tmp_path, host)
    with pytest.raises(FileError) as fault:
        load_rig(path)
    for word in [str(path), *words]:
        assert word in str(fault.value)


def test_host_settings_are_read(tmp_path):
    """Each key arrives; I/O threads go where the hot thread goes unless told otherwise."""
    host = load_rig(
        rig_with(tmp_path, 'policy = "rr"\npriority = 20\ncpus = [1, 3]\nlock_memory = true')
    ).spec.host
    assert (host.policy, host.priority, host.cpus, host.lock_memory) == ("rr", 20, (1, 3), True)
    assert host.cpus_of_io == (1, 3)
    assert HostSpec(cpus=(1,), io_cpus=()).cpus_of_io == ()
    assert HostSpec() == load_rig(rig_with(tmp_path, "")).spec.host


# Applied as far as this machine allows; what is reported must be what procfs shows


@pytest.mark.parametrize(("policy", "number"), [("fifo", 1), ("rr", 2)])
def test_the_policy_reported_is_the_policy_in_force(policy, number):
    """Allowed or not, "applied" means that the thread has policy and priority (sched(7))."""
    host = HostSpec(policy=policy, priority=7)
    tuning, said, seen = tuned(host, own_stat)
    found = entry(tuning, "policy")
    assert found["applied"] == ((seen["policy"], seen["priority"]) == (number, 7))
    assert (f"{policy} 7" in found["detail"]) == found["applied"]
    assert len(said) == (0 if found["applied"] else 1)


def test_the_cpus_reported_are_those_of_the_thread():
    """A thread asked to stay on one CPU does, and a CPU that does not exist is not reported."""
    tuning, said, seen = tuned(HostSpec(cpus=(HERE[-1],)), own_stat)
    assert seen["cpus"] == str(HERE[-1])
    assert entry(tuning, "cpus")["applied"]
    assert said == []
    tuning, said, seen = tuned(HostSpec(cpus=(ABSENT_CPU,)), own_stat)
    found = entry(tuning, "cpus")
    assert not found["applied"]
    assert f"CPUs {seen['cpus']}" in found["detail"]
    assert "[host] cpus = [...]" in found["remedy"]
    assert said == [f"[host] cpus not in force: {found['detail']}. {found['remedy']}"]
    tuning, _, _ = tuned(HostSpec(cpus=(HERE[0], ABSENT_CPU)), own_stat)
    assert not entry(tuning, "cpus")["applied"], "half of what was asked is not what was asked"


def test_the_timer_slack_reported_is_the_threads():
    """The slack is set in the thread itself (procfs: timerslack_ns) and in no other."""

    def slack(thread: int) -> int:
        return int(Path(f"/proc/{thread}/timerslack_ns").read_text())

    before = slack(os.getpid())
    tuning, _, seen = tuned(
        HostSpec(timer_slack_nsec=12_345), lambda: slack(threading.get_native_id())
    )
    assert entry(tuning, "timer_slack_nsec")["applied"] == (seen == 12_345)
    assert f"{seen} ns" in entry(tuning, "timer_slack_nsec")["detail"]
    assert slack(os.getpid()) == before


def locked_kib() -> int:
    """Locked memory from the process's status (proc(5): VmLck)."""
    return int(re.search(r"^VmLck:\s*(\d+)", Path("/proc/self/status").read_text(), re.M)[1])


def touched_kib() -> int:
    return int(re.search(r"^VmRSS:\s*(\d+)", Path("/proc/self/status").read_text(), re.M)[1])


def test_memory_is_locked_without_being_touched_and_released_again():
    """Locking follows the status; a large untouched array takes no memory; release undoes it."""
    tuning, _, locked = tuned(HostSpec(lock_memory=True), locked_kib)
    assert entry(tuning, "lock_memory")["applied"] == (locked > 0)
    before = touched_kib()
    untouched = np.empty(1 << 27, np.uint8)
    assert touched_kib() - before < (1 << 16)
    del untouched
    tuning.release()
    assert locked_kib() == 0


def test_without_settings_nothing_changes():
    """The default asks for nothing, and says how the hot thread runs."""
    tuning, said, seen = tuned(HostSpec(), own_stat)
    assert [e["setting"] for e in tuning.report] == ["policy"]
    assert entry(tuning, "policy")["applied"] == (seen["policy"] == 0)
    assert f"hot thread {seen['id']}: other" in entry(tuning, "policy")["detail"]
    assert said == []
    context = zmq.Context()
    tuning.set_up_io(context)
    context.term()
    assert len(tuning.report) == 1


# Refused: nothing is claimed, and the remedy is a command


@pytest.mark.usefixtures("humble")
def test_a_refused_policy_says_which_command_allows_it(monkeypatch):
    """No permission: the thread stays as it was; limits.d and prlimit lines are named."""
    monkeypatch.setattr(os, "sched_setscheduler", refuse(errno.EPERM))
    tuning, said, _ = tuned(HostSpec(policy="fifo", priority=42))
    found = entry(tuning, "policy")
    assert not found["applied"]
    assert found["detail"].startswith(os.strerror(errno.EPERM))
    assert f"echo '{user_name()} - rtprio 42' | sudo tee -a /etc/security/" in found["remedy"]
    assert "sudo prlimit --pid $$ --rtprio=42" in found["remedy"]
    assert said == [f"[host] policy not in force: {found['detail']}. {found['remedy']}"]


def test_a_policy_refused_to_a_process_with_the_capability_points_at_its_budget(
    monkeypatch, tmp_path
):
    """With CAP_SYS_NICE (bit 23, capabilities(7)) limits are not what stands in the way."""
    (tmp_path / "proc/self").mkdir(parents=True)
    (tmp_path / "proc/self/status").write_text(f"CapEff:\t{1 << 23:016x}\n")
    monkeypatch.setattr(hosttune, "SYSTEM", tmp_path)
    monkeypatch.setattr(os, "sched_setscheduler", refuse(errno.EPERM))
    tuning, _, _ = tuned(HostSpec(policy="rr"))
    assert "sudo sysctl -w kernel.sched_rt_runtime_us=950000" in entry(tuning, "policy")["remedy"]
    assert "rtprio" not in entry(tuning, "policy")["remedy"]


class NoLock:
    """A C library that locks no memory."""

    calls = 0

    def mlockall(self, _flags: int) -> int:
        NoLock.calls += 1
        ctypes.set_errno(errno.ENOMEM)
        return -1


@pytest.mark.usefixtures("humble")
def test_memory_is_not_locked_under_a_limit(monkeypatch):
    """Under a finite limit it is not even tried: later allocations of the process would fail."""
    monkeypatch.setattr(hosttune, "_libc", NoLock)
    monkeypatch.setattr(resource, "getrlimit", lambda _: (8 << 20, 8 << 20))
    tuning, said, _ = tuned(HostSpec(lock_memory=True))
    found = entry(tuning, "lock_memory")
    assert not found["applied"]
    assert "8192 KiB" in found["detail"]
    assert f"{user_name()} - memlock unlimited" in found["remedy"]
    assert NoLock.calls == 0
    assert len(said) == 1


def test_memory_that_cannot_be_locked_is_said(monkeypatch):
    """The kernel's own reason is passed on."""
    monkeypatch.setattr(hosttune, "_libc", NoLock)
    unlimited = resource.RLIM_INFINITY
    monkeypatch.setattr(resource, "getrlimit", lambda _: (unlimited, unlimited))
    tuning, _, _ = tuned(HostSpec(lock_memory=True))
    assert entry(tuning, "lock_memory")["detail"] == os.strerror(errno.ENOMEM)


def test_the_c_state_request_is_a_zero_in_an_open_file(tmp_path, monkeypatch):
    """The kernel holds a latency of int32 0 µs while the file is open (its PM QoS interface)."""
    device = tmp_path / "cpu_dma_latency"
    device.write_bytes(struct.pack("=i", 2_000_000_000))
    monkeypatch.setattr(hosttune, "C_STATE_DEVICE", device)
    tuning, _, _ = tuned(HostSpec(hold_c_states=True))
    assert entry(tuning, "hold_c_states")["applied"]
    assert device.read_bytes() == b"\0\0\0\0"
    assert len(holders(device)) == 1
    tuning.release()
    assert holders(device) == []


def holders(path: Path) -> list[str]:
    """File descriptors of this process on a file."""
    found = []
    for link in Path("/proc/self/fd").iterdir():
        try:
            if Path(os.readlink(link)) == path:
                found.append(link.name)
        except OSError:
            continue
    return found


@pytest.mark.parametrize("kind", ["absent", "empty", "refused"])
def test_a_c_state_device_that_cannot_be_held_is_said(tmp_path, monkeypatch, kind):
    """Absent, closed to us, or not answering: not applied, with the command; none left open."""
    device = tmp_path / "cpu_dma_latency"
    monkeypatch.setattr(hosttune, "C_STATE_DEVICE", device)
    if kind == "empty":
        device.write_bytes(b"")
        monkeypatch.setattr(os, "pread", lambda *_: b"")
    if kind == "refused":
        monkeypatch.setattr(os, "open", refuse(errno.EACCES))
    tuning, _, _ = tuned(HostSpec(hold_c_states=True))
    found = entry(tuning, "hold_c_states")
    assert not found["applied"]
    assert f"sudo chown {user_name()} /dev/cpu_dma_latency" in found["remedy"]
    assert holders(device) == []


def test_elsewhere_than_on_linux_it_says_that_it_cannot(monkeypatch):
    """Every setting asked for is reported as not in force, and no system call is made."""
    monkeypatch.setattr(hosttune, "LINUX", False)
    for name in ("sched_setscheduler", "sched_setaffinity", "sched_getscheduler"):
        monkeypatch.setattr(os, name, refuse(errno.ENOSYS))
    host = HostSpec(policy="fifo", cpus=(0,), lock_memory=True, hold_c_states=True)
    tuning, said, _ = tuned(host)
    context = zmq.Context()
    tuning.set_up_io(context)
    context.term()
    names = [e["setting"] for e in tuning.report]
    assert names == ["policy", "cpus", "lock_memory", "hold_c_states", "io_policy"]
    assert not any(e["applied"] for e in tuning.report)
    assert len(said) == len(names)
    assert HostTuning(HostSpec()).report == []


# libzmq's I/O threads


def threads_named(start: str = "") -> set[int]:
    """Threads of this process, by the start of their names in procfs."""
    found = set()
    for folder in Path("/proc/self/task").iterdir():
        try:
            if (folder / "comm").read_text().startswith(start):
                found.add(int(folder.name))
        except OSError:
            continue
    return found


def set_up(host: HostSpec) -> tuple[HostTuning, list[dict], list[str]]:
    """A context set up; its I/O threads as procfs shows them; the context still carries."""
    said: list[str] = []
    tuning, context = HostTuning(host, said.append), zmq.Context(2)
    before = threads_named()
    tuning.set_up_io(context)
    threads = [thread_stat(t) for t in sorted(threads_named("ZMQbg/IO") - before)]
    server, client = context.socket(zmq.REP), context.socket(zmq.REQ)
    client.connect(f"tcp://127.0.0.1:{server.bind_to_random_port('tcp://127.0.0.1')}")
    client.send(b"x")
    assert server.poll(10_000)
    context.destroy(linger=0)
    assert len(threads) == 2
    return tuning, threads, said


def test_the_io_threads_reported_are_those_of_the_context():
    """Both I/O threads of a context of two: what is reported is what procfs shows of each."""
    other = zmq.Context()
    other.socket(zmq.PAIR).close()
    host = HostSpec(policy="fifo", priority=9, cpus=(HERE[0],))
    tuning, threads, said = set_up(host)
    other.term()
    has = all((t["policy"], t["priority"]) == (1, 9) for t in threads)
    assert entry(tuning, "io_policy")["applied"] == has
    assert entry(tuning, "io_cpus")["applied"] == all(t["cpus"] == str(HERE[0]) for t in threads)
    for e in tuning.report:
        assert all(f"I/O thread {t['id']}:" in e["detail"] for t in threads)
    assert len(said) == sum(not e["applied"] for e in tuning.report)


def test_io_cpus_alone_can_be_given():
    """Where the I/O threads have their own CPUs, the hot thread's are not theirs."""
    tuning, threads, _ = set_up(HostSpec(io_cpus=(HERE[-1],)))
    assert [e["setting"] for e in tuning.report] == ["io_cpus"]
    assert {t["cpus"] for t in threads} == {str(HERE[-1])}


@pytest.mark.usefixtures("humble")
def test_libzmq_is_not_told_what_the_kernel_refuses(monkeypatch):
    """A refused policy is not given to libzmq, whose threads then run as ever."""
    monkeypatch.setattr(os, "sched_setscheduler", refuse(errno.EPERM))
    tuning, threads, said = set_up(HostSpec(policy="fifo"))
    found = entry(tuning, "io_policy")
    assert not found["applied"]
    assert os.strerror(errno.EPERM) in found["detail"]
    assert "rtprio" in found["remedy"]
    assert {t["policy"] for t in threads} == {0}
    assert len(said) == 1


ALONE = """
import json, os, sys, zmq
from gatestep import hosttune
from gatestep.hosttune import HostTuning
from gatestep.specs import HostSpec
if os.getuid() == 0:
    os.setgroups([])
    os.setuid(65534)
host = HostSpec.model_validate_json(sys.argv[1])
tuning, context = HostTuning(host), zmq.Context()
tuning.set_up_io(context)
context.socket(zmq.ROUTER).close()
(thread,) = hosttune._io_threads()
print(json.dumps([
    [e["applied"] for e in tuning.report],
    [os.sched_getscheduler(thread) == 1, os.sched_getaffinity(thread) == set(host.cpus_of_io)],
]))
context.term()
"""


@pytest.mark.parametrize(
    ("host", "which"), [(HostSpec(policy="fifo"), 0), (HostSpec(io_cpus=(ABSENT_CPU,)), 1)]
)
def test_what_an_ordinary_user_may_not_have_does_not_end_the_process(host, which):
    """A thread setting that the kernel refuses makes libzmq abort; it never comes to that.

    The child gives up root where it has it, and reports what it reads from its I/O thread.
    """
    command = [sys.executable, "-c", ALONE, host.model_dump_json()]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    reported, seen = json.loads(done.stdout)
    assert reported == [seen[which]]


# The garbage collector, and the server


def test_the_collector_rests_while_armed():
    """Frozen and off while armed, as before afterwards; one that was off stays off."""
    tuning = HostTuning(HostSpec())
    frozen = gc.get_freeze_count()
    tuning.follow(False)
    assert gc.isenabled()
    tuning.follow(True)
    tuning.follow(True)
    assert not gc.isenabled()
    assert gc.get_freeze_count() > frozen
    tuning.follow(False)
    assert gc.isenabled()
    assert gc.get_freeze_count() == 0
    tuning.follow(True)
    tuning.release()
    assert gc.isenabled()
    gc.disable()
    tuning.follow(True)
    tuning.follow(False)
    was_off = not gc.isenabled()
    gc.enable()
    assert was_off


@pytest.mark.parametrize("lane", ["direct", "libzmq"])
def test_the_server_reports_its_host_settings_in_status(serving, lane):
    """Status has every setting, read back from the thread that runs the loop."""
    host = {"policy": "fifo", "priority": 8, "cpus": (HERE[0],)}
    server = serving(loop={"interval_us": 20.0, "lane": lane}, host=host)
    found = {e["setting"]: e for e in server.control.status()["host"]}
    io = {"io_policy", "io_cpus"} if lane == "libzmq" else set()
    assert set(found) == {"policy", "cpus"} | io
    thread = server.server._thread.native_id
    assert f"hot thread {thread}:" in found["policy"]["detail"]
    seen = thread_stat(thread)
    assert found["policy"]["applied"] == ((seen["policy"], seen["priority"]) == (1, 8))
    assert found["cpus"]["applied"] == (seen["cpus"] == str(HERE[0]))
    refused = [e for e in found.values() if not e["applied"]]
    assert sum(line.startswith("[host]") for line in server.said) == len(refused)


def test_the_server_keeps_the_collector_off_while_armed(serving):
    """Arming turns it off, disarming on again."""
    server = serving()
    assert gc.isenabled()
    server.control.arm()
    wait_until(lambda: not gc.isenabled(), "the collector off")
    server.control.disarm()
    wait_until(gc.isenabled, "the collector on")
    server.control.arm()
    server.close()
    assert gc.isenabled()


def test_a_server_runs_without_what_it_could_not_have(serving, monkeypatch):
    """Refused settings are said, and the server answers all the same."""
    monkeypatch.setattr(os, "sched_setscheduler", refuse(errno.EPERM))
    server = serving(host={"policy": "fifo"})
    assert server.control.status()["state"] == "idle"
    assert any(line.startswith("[host] policy not in force") for line in server.said)
