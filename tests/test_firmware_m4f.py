"""A model and a rig on an emulated Cortex-M4F, from images built here.

The processor is QEMU's mps2-an386. Its serial line is a socket: to the real server, to a
framed host, or to none.
"""

from __future__ import annotations

import functools
import re
import shutil
import socket
import subprocess
import tempfile
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pytest
from firmware_build import BRIDGE, run
from firmware_model_build import TICK_US, folder, same_bits, tables
from framed_host import (
    ARM,
    BYE,
    DISARM,
    HELLO,
    PARAMETER,
    TRACE,
    WELCOME,
    Host,
    encode,
)

from gatestep.firmware_c import code_bytes, instructions
from gatestep.firmware_errors import server_walk
from gatestep.firmware_twin import steps_compiled, steps_numpy
from gatestep.library import load_model
from gatestep.tables import build_tables

EXAMPLE = BRIDGE / "examples" / "cortex_m4f"
MODEL = "squid-na-k"
LONGEST_S = 60.0
# The simulated cell of the images, every operation in float32.
LEAK_NS, LEAK_MV, DRIVE_PA = (np.float32(x) for x in (9.0, -54.387, 300.0))
SHARE = np.float32(TICK_US) * np.float32(1e-3) * np.float32(1 / 32)

_made = tempfile.TemporaryDirectory(prefix="gatestep-m4f-")


def tools() -> tuple[str, str]:
    """The cross compiler's prefix and the emulator, or a skip of the test that needs them."""
    compiler, qemu = shutil.which("arm-none-eabi-gcc"), shutil.which("qemu-system-arm")
    if not compiler or not qemu or not shutil.which("make"):
        pytest.skip(
            "needs a Cortex-M4F's tools (Debian: apt install gcc-arm-none-eabi "
            "libnewlib-arm-none-eabi qemu-system-arm make)"
        )
    return compiler.removesuffix("gcc"), qemu


@functools.cache
def image(name: str, model: str = MODEL, contract: str = "off") -> Path:
    """An image of the example with a model, built once."""
    build = Path(_made.name) / f"{model}-{contract}"
    target = build / f"{name}.elf"
    settings = [f"MODEL={folder(model)}", f"BUILD={build}", f"CROSS={tools()[0]}"]
    if (model, contract) != (MODEL, "off"):
        # Of these only the figures matter, and 20,000 lines take their time.
        settings.append(f"EXTRA=-DSTEPS=100u -ffp-contract={contract}")
    run(["make", "-s", "-C", EXAMPLE, *settings, target])
    return target


def variant(tag: str, old: str, new: str) -> Path:
    """The supervised image with a line of its source changed."""
    usual = image("supervised").parent
    copy, build = usual.parent / f"cortex_m4f-{tag}", usual.parent / f"build-{tag}"
    shutil.copytree(EXAMPLE, copy)
    shutil.copytree(usual / "objects", build / "objects")
    (build / "objects" / "supervised.o").unlink()
    source = (copy / "supervised.c").read_text("utf-8")
    assert source.count(old) == 1
    (copy / "supervised.c").write_text(source.replace(old, new), "utf-8")
    settings = [f"MODEL={folder(MODEL)}", f"BUILD={build}", f"CROSS={tools()[0]}"]
    run(["make", "-s", "-C", copy, *settings, build / "supervised.elf"])
    return build / "supervised.elf"


def command(path: Path, link: str = "null", clock: tuple[str, ...] = ()) -> list[str]:
    """How to run an image: the link's line where it is told, the console on stdout."""
    _, qemu = tools()
    plain = ["-M", "mps2-an386", "-display", "none", "-monitor", "none", *clock]
    exits = ["-semihosting-config", "enable=on,target=native"]
    lines = ["-chardev", f"{link},id=link", "-serial", "chardev:link", "-serial", "stdio"]
    return [qemu, *plain, *exits, *lines, "-kernel", str(path)]


def ran(path: Path, link: str = "null", clock: tuple[str, ...] = ()) -> str:
    """An image's console, run to its end."""
    done = subprocess.run(
        command(path, link, clock), capture_output=True, text=True, timeout=LONGEST_S, check=False
    )
    assert done.returncode == 0, done.stdout[-500:] + done.stderr
    return done.stdout


class Measured(NamedTuple):
    """What measure.elf printed."""

    figures: dict[str, int]
    v_mv: np.ndarray
    i_pa: np.ndarray


def floats(text: str, words: int) -> list[np.ndarray]:
    """Columns of float32 from lines of so many words of eight hexadecimal digits."""
    lines = re.findall(rf"^[0-9a-f]{{{8 * words}}}$", text, re.MULTILINE)
    bits = np.array([[int(line[8 * k : 8 * k + 8], 16) for k in range(words)] for line in lines])
    return list(bits.astype(np.uint32).T.copy())


@functools.cache
def measured(model: str = MODEL) -> Measured:
    """A model measured; an instruction lasts 1 ns of the emulated clock."""
    said = ran(image("measure", model), clock=("-icount", "shift=0"))
    figures = {name: int(value) for name, value in re.findall(r"^(\w+) (\d+)$", said, re.MULTILINE)}
    v_mv, i_pa = (column.view(np.float32) for column in floats(said, 2))
    return Measured(figures, v_mv, i_pa)


# ---- the model ----


def test_20000_steps_give_the_bits_of_numpy_and_compiled():
    """The squid set's currents on the device, along the voltages it drove the cell to."""
    found = measured()
    assert found.v_mv.size == found.figures["steps"] == 20_000
    assert same_bits(found.i_pa, steps_numpy(tables(MODEL), found.v_mv).i_pa)
    assert same_bits(found.i_pa, steps_compiled(tables(MODEL), found.v_mv).i_pa)
    assert found.figures["selftest"] == 0


def test_the_cell_in_its_loop_is_the_one_described():
    """Each voltage follows from the one before and its current, in float32; and it fires."""
    v, i = measured().v_mv, measured().i_pa
    true = v[:-1] + ((LEAK_NS * (LEAK_MV - v[:-1]) + i[:-1]) + DRIVE_PA) * SHARE
    assert same_bits(v[1:], true)
    spikes = int(((v[:-1] < 0) & (v[1:] >= 0)).sum())
    # 300 pA on 32 pF is 9.4 uA/cm2, where the squid axon fires at 65 to 68 Hz; 0.4 s.
    assert 24 <= spikes <= 30


def test_against_the_server_the_current_misses_less_than_a_thousandth():
    """The same voltages through the float64 kernel: worst error a share of the current's range."""
    found = measured()
    true = server_walk(build_tables(load_model(MODEL).spec), found.v_mv, TICK_US)
    error = np.abs(found.i_pa - true).max() / np.ptp(true)
    print(f"current's error against the float64 server: {error:.2e} of its range")
    assert 0 < error < 1e-3


def test_its_costs_are_printed_and_small():
    """Instructions counted, stack measured, sizes read: within what a microcontroller has."""
    found = measured().figures
    prefix, _ = tools()
    text, data, bss, *_ = run([f"{prefix}size", image("measure")]).stdout.split("\n")[1].split()
    print(found, {"text": text, "data": data, "bss": bss})
    assert 90 <= found["step_instructions"] <= 140
    assert found["tick_instructions"] <= 500
    assert found["step_stack"] <= found["tick_stack"] <= 128
    assert found["faults"] == 0
    assert int(text) - tables(MODEL).table_bytes < 20_000
    assert int(data) + int(bss) < 8_000


@pytest.mark.parametrize("model", [MODEL, "na-p-hippocampal", "low-threshold-spiking"])
def test_the_stated_costs_are_what_is_counted(model):
    """The estimates in model.h against counts and the object file, for gates of every sort."""
    counted = measured(model).figures
    assert counted["selftest"] == 0
    stated = instructions(tables(model))
    assert stated == pytest.approx(counted["step_instructions"], rel=0.1, abs=3)
    prefix, _ = tools()
    listed = run([f"{prefix}nm", "-S", image("measure", model)]).stdout
    code = sum(
        int(size, 16)
        for size, name in re.findall(r"^\w+ (\w+) [tT] (gsm_\w+)$", listed, re.MULTILINE)
        if name
        in {"gsm_model_settle", "gsm_model_step", "gsm_model_current", "gsm_tick", "gsm_leap"}
    )
    assert code == pytest.approx(code_bytes(tables(model)), rel=0.25, abs=60)


def test_the_self_test_finds_contraction():
    """Built with fused multiply-adds the model gives other bits, and the self-test says so."""
    built = image("measure", MODEL, "fast")
    done = subprocess.run(
        command(built, clock=("-icount", "shift=0")),
        capture_output=True, text=True, timeout=LONGEST_S, check=False,
    )  # fmt: skip
    assert done.returncode == 1
    assert re.search(r"^selftest [1-9]", done.stdout, re.MULTILINE)


# ---- the rig ----


def serve(serving, **loop):
    """The real server with the image's model, its loop armed."""
    server = serving(
        loop={
            "interval_us": TICK_US,
            "endpoint": "tcp://127.0.0.1:0",
            "lane": "direct",
            "anticipate": False,
            **loop,
        },
        cell=[{"name": "a", "model": MODEL, "limits": {"current_pa": 100_000.0}}],
    )
    server.control.arm()
    return server


def check_exchange(said: str, server) -> None:
    """2,000 samples, each answered with the float64 kernel's current rounded to float32."""
    v_bits, i_bits, flags = floats(said, 3)
    v_mv, i_pa = v_bits.view(np.float32), i_bits.view(np.float32)
    assert v_mv.size == 2000
    assert (flags == 1).all()  # live, and nothing else
    true = server_walk(build_tables(load_model(MODEL).spec), v_mv, TICK_US)
    assert same_bits(i_pa, true.astype(np.float32))
    assert v_mv.max() > 20  # it fired
    assert "answers 2000\nignored 0\nclipped 0\nfaults 0\nend" in said
    status = server.control.status()
    assert status["answered"] == 2000
    assert status["late"] == status["missed"] == status["repeats"] == status["malformed"] == 0


def test_it_speaks_zmtp_to_the_server(serving):
    """The image's own ZMTP over its serial line, a socket to the server's direct lane."""
    server = serve(serving)
    host, port = server.server.endpoints()["loop"].removeprefix("tcp://").rsplit(":", 1)
    said = ran(image("zmtp_rig"), f"socket,host={host},port={port},nodelay=on")
    check_exchange(said, server)


@contextmanager
def framed(path: Path, *clock: str) -> Iterator[tuple[Host, subprocess.Popen[str]]]:
    """An image running, and the host at the other end of its line."""
    with socket.create_server(("127.0.0.1", 0)) as listening:
        listening.settimeout(LONGEST_S)
        link = f"socket,host=127.0.0.1,port={listening.getsockname()[1]},nodelay=on"
        process = subprocess.Popen(
            command(path, link, clock), stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True
        )
        try:
            line, _ = listening.accept()
            with line:
                line.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                line.settimeout(LONGEST_S)
                yield Host(line, LONGEST_S), process
        finally:
            process.kill()
            process.wait()


# ---- the supervised model ----


def states(rows: np.ndarray) -> set[int]:
    return set(rows[:, 2].astype(int))


def test_a_host_supervises_the_model_on_the_device():
    """Arm, watch, set, disarm, fall silent: over the serial line, while the device steps.

    Its cell is 9 nS of leak at -54.387 mV, 0.28 mS/cm2 on 32 pF. With the squid axon's
    conductances it rests near -65 mV (Hodgkin and Huxley 1952, modern sign, with 0.3 mS/cm2),
    as the balance of the currents says; without, at its leak's reversal.
    """
    with framed(image("supervised"), "-icount", "shift=0,sleep=off") as (host, _):
        host.line.sendall(b"\0" + encode(BYE))
        assert host.wait(HELLO).items == [1, 0, 1, TICK_US, 2]
        host.send(WELCOME, [1, 0, 1])
        names = [host.ask(k)[2] for k in range(5)]
        assert names[0] == "Na.gmax_ns"
        assert names[4] == "trace.every_ticks"
        assert host.order(PARAMETER, 4, 50.0) == 0
        resting = host.settled(20)
        assert states(resting) == {0}
        assert (resting[:, 4] == 0).all()
        assert (np.diff(resting[:, 0]) == 50).all()
        assert (np.diff(resting[:, 1]) == 50 * TICK_US).all()
        assert host.order(ARM) == 0
        armed = host.settled(150)
        assert states(armed[1:]) == {1}
        assert armed[-1, 3] == pytest.approx(-65.0, abs=0.1)
        assert host.order(PARAMETER, 0, 0.0) == 0  # gmax of Na, without a rebuild
        no_na = host.settled(150)[-1]
        n = 1.0 / (1.0 + _beta_n(no_na[3]) / _alpha_n(no_na[3]))
        assert no_na[4] == pytest.approx(1080.0 * n**4 * (-77.0 - no_na[3]), rel=1e-3)
        assert no_na[4] == pytest.approx(9.0 * (no_na[3] + 54.387), rel=1e-3)  # the leak's opposite
        assert host.order(PARAMETER, 0, 1e9) == 1
        assert host.order(DISARM) == 0
        free = host.settled(100)
        assert states(free[1:]) == {0}
        assert free[-1, 3] == pytest.approx(-54.387, abs=0.01)
        assert host.order(ARM) == 0
        silent = next(f for f in host.frames() if f.kind == TRACE and f.items[2] == 0)
        assert silent.items[4] == 0.0


SYSTICK_OFF = "if (device.beats > 99u) *(volatile uint32_t *)0xE000E010u = 0u;"
ENDS = {
    "ticks": (
        "    ticked = 1u;\n",
        f"    ticked = 1u;\n    {SYSTICK_OFF}\n",
    ),
    "loop": ("        turn();\n", "        while (device.beats > 100u) {}\n        turn();\n"),
}


@pytest.mark.parametrize("what", ENDS)
def test_the_watchdog_ends_what_hangs(what):
    """Without ticks or without the main loop it opens the relay and then resets the board."""
    built = command(variant(f"without-{what}", *ENDS[what]), clock=("-icount", "shift=0"))
    process = subprocess.Popen(built, stdout=subprocess.PIPE, text=True)
    watch = threading.Timer(LONGEST_S, process.kill)
    watch.start()
    try:
        assert process.stdout is not None
        told = [process.stdout.readline().split(" ")[0] for _ in range(3)]
    finally:
        watch.cancel()
        process.kill()
        process.communicate()
    assert told.count("model") >= 2
    # While the emulated processor sleeps, its two time-outs may pass as one.
    assert what == "ticks" or told == ["model", "watchdog:", "model"]


def _alpha_n(v: float) -> float:
    return 0.01 * (v + 55) / (1 - np.exp(-(v + 55) / 10))


def _beta_n(v: float) -> float:
    return 0.125 * np.exp(-(v + 65) / 80)
