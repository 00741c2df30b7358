"""The check before arming: verdicts from made-up hosts, stability, and the command."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from gatestep import hostfacts, remedies
from gatestep.cli import main
from gatestep.commands import check as command
from gatestep.commands.check_record import record_finding
from gatestep.config import load_rig
from gatestep.hostfacts import FACTS, Finding, Host, host_findings
from gatestep.specs import HostSpec

CPU = "sys/devices/system/cpu"
CLOCK = "sys/devices/system/clocksource/clocksource0"
SMT = f"{CPU}/cpu1/topology/thread_siblings_list"
IDLE = f"{CPU}/cpu1/cpuidle"
SYSCTL = "proc/sys/kernel"
TSC = "flags : fpu tsc constant_tsc nonstop_tsc"

# A machine as a rig should have it: everything ok with GOOD_ASKED.
GOOD = {
    f"{SYSCTL}/osrelease": "6.12.9-rt",
    f"{SYSCTL}/version": "#1 SMP PREEMPT_RT Mon Jan 5 2026",
    f"{SYSCTL}/sched_rt_runtime_us": "950000",
    f"{SYSCTL}/sched_rt_period_us": "1000000",
    f"{CPU}/online": "0-3",
    f"{CPU}/isolated": "2-3",
    f"{CPU}/nohz_full": "2-3",
    **{f"{CPU}/cpu{c}/cpufreq/scaling_governor": "performance" for c in range(4)},
    **{f"{CPU}/cpu{c}/topology/thread_siblings_list": str(c) for c in range(4)},
    f"{CLOCK}/current_clocksource": "tsc",
    f"{CLOCK}/available_clocksource": "tsc hpet acpi_pm",
    "proc/cpuinfo": f"processor : 0\n{TSC}\n\nprocessor : 1\n{TSC}",
    "proc/self/status": "Name: x\nCapEff:\t0000000000000000",
    "proc/self/limits": (
        "Limit                     Soft Limit           Hard Limit           Units\n"
        "Max locked memory         unlimited            unlimited            bytes\n"
        "Max realtime priority     99                   99"
    ),
    "proc/1/cgroup": "0::/init.scope",
    "proc/loadavg": "0.10 0.20 0.30 1/100 1234",
    "dev/cpu_dma_latency": "",
    "sys/kernel/mm/transparent_hugepage/enabled": "always [madvise] never",
}
GOOD_ASKED = {"policy": "fifo", "cpus": (3,), "lock_memory": True, "hold_c_states": True}


def limits(memory: str = "unlimited", priority: str = "99") -> dict[str, str]:
    rows = f"Max locked memory  {memory}  {memory}  bytes\nMax realtime priority  {priority}  0"
    return {"proc/self/limits": rows}


def capabilities(*bits: int) -> dict[str, str]:
    return {"proc/self/status": f"CapEff:\t{sum(1 << b for b in bits):016x}"}


def build(folder: Path, files: dict[str, str | None]) -> None:
    """Write a tree of files."""
    for name, text in files.items():
        if text is not None:
            path = folder / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(f"{text}\n", "utf-8")


def look(
    folder: Path,
    changes: dict[str, str | None] | None = None,
    refused: str | None = None,
    **asked: object,
) -> dict[str, Finding]:
    """The findings on the good machine with some files changed (None: absent)."""
    build(folder, {**GOOD, **(changes or {})})
    host = Host(folder, HostSpec(**{**GOOD_ASKED, **asked}), refused)
    return {finding.name: finding for finding in host_findings(host)}


def test_a_machine_as_a_rig_should_have_it_is_ok_throughout(tmp_path):
    """No weakness is found where there is none, and nothing is left to better."""
    found = look(tmp_path, refused="")
    assert len(found) == len(FACTS)
    assert {name: f.verdict for name, f in found.items()} == dict.fromkeys(found, "ok")
    assert not any(f.remedy for f in found.values())
    assert all(f.why.endswith(".") and f.why.count(". ") == 0 for f in found.values())


VERSION, CMDLINE = f"{SYSCTL}/version", "proc/cmdline"
KERNELS = [
    ({VERSION: "#1 SMP PREEMPT_DYNAMIC", "sys/kernel/realtime": "1"}, "ok", "PREEMPT_RT", None),
    ({VERSION: "#1 SMP PREEMPT_DYNAMIC"}, "weak", "PREEMPT_DYNAMIC", "preempt=full"),
    ({VERSION: "#1 SMP PREEMPT Mon"}, "weak", "PREEMPT", "PREEMPT_RT kernel"),
    (
        {VERSION: "#1 PREEMPT_DYNAMIC", CMDLINE: "quiet preempt=full"},
        "weak", "running as full", "PREEMPT_RT",
    ),
    (
        {VERSION: "#1 PREEMPT_DYNAMIC", "sys/kernel/debug/sched/preempt": "none (voluntary) full"},
        "missing", "running as voluntary", "preempt=full",
    ),
    ({VERSION: "#1 SMP Mon Jan 5"}, "missing", "no preemption", "PREEMPT_RT kernel"),
    (
        {VERSION: "#1 SMP", "etc/os-release": 'NAME="Debian"\nID=debian'},
        "missing", "no preemption", "sudo apt install linux-image-rt-",
    ),
    (
        {VERSION: "#1 SMP", "etc/os-release": 'ID_LIKE=debian\nID="ubuntu"'},
        "missing", "no preemption", "sudo pro enable realtime-kernel",
    ),
]  # fmt: skip
CPUS = [
    ("isolated CPUs", {}, {"cpus": ()}, "weak", "isolated 2-3", "[host] cpus = [3]"),
    ("isolated CPUs", {}, {"cpus": (1,)}, "weak", "isolated 2-3", "isolcpus=1 nohz_full=1"),
    (
        "isolated CPUs", {f"{CPU}/isolated": "", f"{CPU}/nohz_full": "(null)"}, {"cpus": ()},
        "missing", "isolated none, tick-free none", "isolcpus=3 nohz_full=3 rcu_nocbs=3, and",
    ),
    ("isolated CPUs", {}, {"cpus": (3, 9)}, "missing", "CPU 9 is not online", "online, 0-3"),
    (
        "isolated CPUs", {f"{CPU}/online": "0", f"{CPU}/isolated": None}, {"cpus": ()},
        "missing", "isolated none", "two or more CPUs",
    ),
    (
        "frequency governor", {f"{CPU}/cpu3/cpufreq/scaling_governor": "powersave"}, {},
        "weak", "powersave",
        f"echo performance | sudo tee /{CPU}/cpu3/cpufreq/scaling_governor",
    ),
    (
        "frequency governor", {f"{CPU}/cpu1/cpufreq/scaling_governor": "schedutil"}, {"cpus": ()},
        "weak", "performance, schedutil", "cpu0/cpufreq/scaling_governor /sys",
    ),
    (
        "frequency governor", {f"{CPU}/cpu3/cpufreq/scaling_governor": None}, {},
        "weak", "not to be seen", "performance profile",
    ),
    (
        "shared cores", {SMT: "0-1"}, {"cpus": (1,)},
        "weak", "CPU 1 with 0", f"echo 0 | sudo tee /{CPU}/cpu0/online",
    ),
    ("shared cores", {SMT: "1,2"}, {"cpus": (1,)}, "ok", "to themselves", None),
    ("shared cores", {SMT: "1,2"}, {"cpus": (1, 2)}, "weak", "CPU 1 with 2", "cpu2/online"),
    ("shared cores", {SMT: "1,7"}, {"cpus": (1,)}, "ok", "to themselves", None),
    (
        "shared cores", {SMT: "0-1"}, {"cpus": ()},
        "weak", "CPU 1 with 0", f"echo off | sudo tee /{CPU}/smt/control",
    ),
]  # fmt: skip
CURRENT, OFFERED = f"{CLOCK}/current_clocksource", f"{CLOCK}/available_clocksource"
RUNTIME = f"{SYSCTL}/sched_rt_runtime_us"
SYSTEMS = [
    ("clock source", {CURRENT: "hpet"}, {}, "missing", "hpet", f"echo tsc | sudo tee /{CURRENT}"),
    ("clock source", {CURRENT: "kvm-clock"}, {}, "weak", "kvm-clock", "echo tsc"),
    (
        "clock source", {CURRENT: "acpi_pm", OFFERED: "acpi_pm"}, {},
        "missing", "acpi_pm", "tsc=reliable",
    ),
    (
        "clock source", {"proc/cpuinfo": "flags : tsc constant_tsc"}, {},
        "weak", "stops when idle", "hold_c_states = true",
    ),
    ("clock source", {CURRENT: "arch_sys_counter"}, {}, "ok", "arch_sys_counter", None),
    ("clock source", {CURRENT: None}, {}, "weak", "unknown", "echo tsc"),
    ("real-time throttling", {RUNTIME: "-1"}, {}, "weak", "off", "sched_rt_runtime_us=950000"),
    ("real-time throttling", {RUNTIME: "1000000"}, {}, "weak", "off", "sudo sysctl -w"),
    ("real-time throttling", {RUNTIME: "0"}, {}, "missing", "0 ms of every 1000 ms", "sysctl"),
    ("real-time throttling", {RUNTIME: "10000"}, {}, "weak", "10 ms of every 1000 ms", "sysctl"),
    ("real-time throttling", {RUNTIME: None}, {}, "weak", "does not say", None),
    (
        "huge pages", {"sys/kernel/mm/transparent_hugepage/enabled": "[always] madvise never"}, {},
        "weak", "always", "echo madvise | sudo tee /sys/kernel/mm/transparent_hugepage/enabled",
    ),
    ("huge pages", {"sys/kernel/mm/transparent_hugepage/enabled": None}, {}, "ok", "none", None),
    ("machine", {"proc/cpuinfo": TSC + " hypervisor"}, {}, "weak", "virtual machine", "itself"),
    ("machine", {"run/.containerenv": ""}, {}, "weak", "container", "itself"),
    ("machine", {"proc/1/cgroup": "0::/docker/1f"}, {}, "weak", "container", "itself"),
    (
        "machine", {f"{SYSCTL}/osrelease": "5.15-Microsoft-standard", ".dockerenv": ""}, {},
        "weak", "virtual machine and container", "itself",
    ),
    ("load", {"proc/loadavg": "2.5 1 1 1/1 1"}, {}, "weak", "2.50 over", "ps -eo pid,pcpu,comm"),
    ("load", {"proc/loadavg": "4.5 1 1 1/1 1"}, {}, "missing", "on 4 CPUs", "ps -eo"),
    ("load", {"proc/loadavg": None}, {}, "weak", "not to be seen", "uptime"),
]  # fmt: skip
PERMISSIONS = [
    (
        "real-time policy", limits(priority="0"), {},
        "missing", "real-time priority limit 0", "- rtprio 50'",
    ),
    ("real-time policy", limits(priority="10"), {}, "weak", "up to 10", "[host] priority = 10"),
    ("real-time policy", {}, {"policy": "other"}, "weak", "not asked for", 'policy = "fifo"'),
    (
        "real-time policy", {**limits(priority="0"), **capabilities(23)}, {"policy": "rr"},
        "ok", "rr 50 (capability SYS_NICE)", None,
    ),
    (
        "locked memory", limits(memory="8388608"), {},
        "missing", "limited to 8192 KiB", "- memlock unlimited'",
    ),
    (
        "locked memory", {**limits(memory="8388608"), **capabilities(14)}, {},
        "ok", "capability IPC_LOCK", None,
    ),
    (
        "locked memory", {}, {"lock_memory": False},
        "weak", "no limit), not asked for", "[host] lock_memory = true",
    ),
    (
        "idle states", {"dev/cpu_dma_latency": None}, {},
        "missing", "no /dev/cpu_dma_latency", "processor.max_cstate=1",
    ),
    (
        "idle states",
        {f"{IDLE}/state0/latency": "0", f"{IDLE}/state3/latency": "133"},
        {"hold_c_states": False},
        "weak", "not asked for; the deepest takes 133 µs", "[host] hold_c_states = true",
    ),
]  # fmt: skip
CASES = [("kernel", files, {}, *rest) for files, *rest in KERNELS] + CPUS + SYSTEMS + PERMISSIONS


@pytest.mark.parametrize(("name", "files", "asked", "verdict", "found", "remedy"), CASES)
def test_each_verdict_follows_from_the_files(tmp_path, name, files, asked, verdict, found, remedy):
    """One thing differs from the good machine: verdict, what was found and remedy say so."""
    finding = look(tmp_path, files, **asked)[name]
    assert finding.verdict == verdict
    assert found in finding.found
    assert (finding.remedy is None) == (remedy is None)
    assert (remedy or "") in (finding.remedy or "")


def test_a_policy_that_was_tried_and_refused_is_missing(tmp_path):
    """What the kernel does counts, whatever capability and limit promise."""
    finding = look(tmp_path, capabilities(23), refused="Operation not permitted")
    assert finding["real-time policy"].verdict == "missing"
    assert "Operation not permitted" in finding["real-time policy"].found
    assert "sched_rt_runtime_us" in (finding["real-time policy"].remedy or "")


def test_a_device_that_may_not_be_written_is_missing(tmp_path, monkeypatch):
    """The remedy gives it to the user."""
    monkeypatch.setattr(os, "access", lambda *_: False)
    finding = look(tmp_path)["idle states"]
    assert finding.verdict == "missing"
    assert f"sudo chown {remedies.user_name()} /dev/cpu_dma_latency" in (finding.remedy or "")


def test_a_host_that_is_no_linux_says_so(tmp_path):
    """Without /proc there is one finding, and no guess."""
    (finding,) = host_findings(Host(tmp_path, HostSpec()))
    assert (finding.verdict, finding.found) == ("missing", "not Linux")


def test_no_fact_fails_on_an_empty_tree(tmp_path):
    """A kernel that shows none of the files gives findings, never an error."""
    for fact in FACTS:
        for asked in (HostSpec(), HostSpec(**GOOD_ASKED)):
            assert fact(Host(tmp_path, asked)).verdict in ("ok", "weak", "missing")


def test_this_machine_is_read_as_its_own_tools_read_it():
    """The real tree: release and CPUs as uname(2) and sysconf(3) have them."""
    found = {f.name: f for f in host_findings(Host(remedies.SYSTEM, HostSpec()))}
    assert os.uname().release in found["kernel"].found
    assert ("PREEMPT_RT" in found["kernel"].found) == ("PREEMPT_RT" in os.uname().version)
    assert len(remedies.online_cpus(remedies.SYSTEM)) == os.sysconf("SC_NPROCESSORS_ONLN")


@given(st.sets(st.integers(0, 1023)))
def test_cpu_lists_are_read_as_they_are_written(cpus):
    """A list in the kernel's form gives back its CPUs."""
    assert remedies.cpu_set(remedies.cpu_list(cpus)) == cpus


def test_cpu_lists_have_the_kernels_form():
    """Runs with a dash, commas between (cpuset(7), list format); rubbish is nothing."""
    assert remedies.cpu_list({0, 1, 2, 5, 7, 8}) == "0-2,5,7-8"
    assert remedies.cpu_set("0-2,5,7-8\n") == {0, 1, 2, 5, 7, 8}
    assert remedies.cpu_set("(null)") == remedies.cpu_set("") == remedies.cpu_set(None) == set()


# The command


def write_rig(folder: Path, *cells: str) -> Path:
    path = folder / "rig.toml"
    path.write_text("[loop]\ninterval_us = 50.0\n" + "".join(f"[[cell]]\n{c}\n" for c in cells))
    return path


def test_the_command_exits_0_however_weak_the_host(tmp_path):
    """The whole command, as a program of its own: JSON with every section, status 0."""
    rig = write_rig(
        tmp_path,
        'name = "a"\nmodel = "leak"\ncapacitance_pf = 30.0',
        'name = "b"\nmodel = "k-v3-cortical"',
    )
    arguments = [sys.executable, "-m", "gatestep", "check", str(rig), "--json"]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert found["rig"] == str(rig.resolve())
    assert [f["name"] for f in found["files"]] == ["rig file", "model of a", "model of b"]
    assert [f["verdict"] for f in found["files"]] == ["ok", "ok", "weak"]
    assert found["files"][1]["shipped"]
    assert Path(found["files"][1]["path"]).is_file()
    assert 0 < found["files"][2]["table_error"] < 1e-6
    assert [f["name"] for f in found["host"]] == [
        "kernel", "isolated CPUs", "frequency governor", "shared cores", "clock source",
        "real-time throttling", "real-time policy", "locked memory", "idle states",
        "huge pages", "machine", "load",
    ]  # fmt: skip
    [record] = found["record"]
    # 56 bytes and 24 for each of two cells, every tick.
    assert record["bytes_per_s"] == pytest.approx(104 * 1e6 / 50.0)
    assert record["hours"] == pytest.approx(record["free_bytes"] / record["bytes_per_s"] / 3600)
    known, unknown = found["stability"]
    assert (known["cell"], known["verdict"]) == ("a", "ok")
    assert known["plain_limit_ns"] == pytest.approx(540.0, rel=0.02)
    assert (unknown["cell"], unknown["verdict"], unknown["margin"]) == ("b", "weak", None)
    for finding in found["files"] + found["host"] + found["stability"]:
        assert finding["verdict"] in ("ok", "weak", "missing")
        assert finding["found"]
        assert finding["why"]


def run(monkeypatch, *arguments: str) -> int:
    """The command line in this process; its exit status."""
    monkeypatch.setattr(sys, "argv", ["gatestep", *arguments])
    with pytest.raises(SystemExit) as ended:
        main()
    return int(ended.value.code or 0)


def test_the_table_for_people_has_verdicts_and_whole_remedies(tmp_path, monkeypatch, capsys):
    """Remedies are printed on one line each, so that a command can be copied."""
    monkeypatch.setattr(command, "SYSTEM", tmp_path / "host")
    build(tmp_path / "host", GOOD)
    rig = write_rig(tmp_path, 'name = "a"\nmodel = "leak"\ncapacitance_pf = 30.0')
    assert run(monkeypatch, "check", str(rig)) == 0
    shown = capsys.readouterr().out
    for heading in ("Files", "Record", "Host", "Stability and fidelity of the loop"):
        assert f"\n{heading}" in f"\n{shown}"
    assert "6.12.9-rt, PREEMPT_RT" in shown
    assert "  locked memory: in the rig file: [host] lock_memory = true\n" in shown
    assert "  kernel:" not in shown


def test_a_faulty_model_is_told_with_the_rest_and_exits_1(tmp_path, monkeypatch, capsys):
    """Every cell's model is looked at, the host is checked all the same, and the status is 1."""
    (tmp_path / "bad.toml").write_text('title = "t"\n')
    rig = write_rig(
        tmp_path,
        'name = "a"\nmodel = "no-such-model"\ncapacitance_pf = 30.0',
        'name = "b"\nmodel = "./bad.toml"',
        'name = "c"\nmodel = "leak"\ncapacitance_pf = 30.0',
    )
    assert run(monkeypatch, "check", str(rig), "--json") == 1
    found = json.loads(capsys.readouterr().out)
    assert [f["verdict"] for f in found["files"]] == ["ok", "missing", "missing", "ok"]
    assert "no model is named 'no-such-model'" in found["files"][1]["found"]
    assert f"{tmp_path}/bad.toml: conductance: missing" in found["files"][2]["found"]
    assert len(found["host"]) == len(FACTS)
    assert [f["cell"] for f in found["stability"]] == ["c"]


def test_a_faulty_rig_file_exits_1_with_its_faults(tmp_path, monkeypatch, capsys):
    """No traceback and no table: the file, the key and what is allowed."""
    rig = write_rig(tmp_path, 'name = "a"\nmodel = "leak"\ncapacitance_pf = -1.0')
    assert run(monkeypatch, "check", str(rig)) == 1
    said = capsys.readouterr()
    assert said.out == ""
    assert f'gatestep: {rig}: cell "a": capacitance_pf: found -1.0' in said.err


@pytest.mark.parametrize(
    ("text", "verdict", "words"),
    [
        ("on = false", "weak", "off"),
        ('folder = "a-file/records"', "missing", "cannot be written"),
        ('folder = "new/records"', "ok", "hours"),
    ],
)
def test_the_record_is_judged_before_it_is_needed(tmp_path, text, verdict, words):
    """Off, a file in the folder's way, a folder that is yet to be made."""
    (tmp_path / "a-file").write_text("x", "utf-8")
    rig = write_rig(tmp_path, f'name = "a"\nmodel = "leak"\n\n[record]\n{text}')
    finding = record_finding(load_rig(rig))
    assert finding.verdict == verdict
    assert words in finding.found
    assert (finding.remedy is None) == (verdict == "ok")


def test_another_section_can_be_added(tmp_path, monkeypatch, capsys):
    """A section is a function of what was read; its findings are shown and sent like the rest."""
    finding = Finding("margin", "ok", "large", "It is a margin.")

    def extra(checked):
        assert checked.rig.spec.cell[0].name == "a"
        return command.Section("margin", "Margin", [finding])

    monkeypatch.setattr(command, "SECTIONS", (*command.SECTIONS, extra))
    rig = write_rig(tmp_path, 'name = "a"\nmodel = "leak"')
    assert run(monkeypatch, "check", str(rig), "--json") == 0
    assert json.loads(capsys.readouterr().out)["margin"][0]["found"] == "large"


def test_the_trial_of_a_policy_leaves_this_thread_as_it_was():
    """The check tries on a thread of its own."""
    from gatestep import hosttune

    before = os.sched_getscheduler(0), os.sched_getaffinity(0)
    hosttune.try_policy("fifo", 10)
    assert (os.sched_getscheduler(0), os.sched_getaffinity(0)) == before


def test_facts_are_named_once():
    """Two facts of one name could not be told apart in JSON."""
    names = [fact(Host(remedies.SYSTEM, HostSpec())).name for fact in hostfacts.FACTS]
    assert len(set(names)) == len(names)
