"""The serial bridge and an emulated Cortex-M4F, whose line is a pty: rig and supervised model."""

from __future__ import annotations

import re
import subprocess
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import pairwise
from pathlib import Path

import pytest
from conftest import wait_until
from test_firmware_m4f import (
    LONGEST_S,
    check_exchange,
    command,
    image,
    serve,
    variant,
)

from gatestep.bridgehost import Bridge
from gatestep.bridgeline import Line
from gatestep.bridgemodel import EVERY, Supervisor, Trace
from gatestep.errors import ControlError


def patient() -> Path:
    """The supervised image with a silence time-out that no load of this machine reaches.

    Its clock runs ahead of ours, so that its own half second may be over in no time.
    """
    return variant("patient", "500000u,", "1000000000u,")


@contextmanager
def on_a_pty(built: Path, *clock: str) -> Iterator[tuple[str, subprocess.Popen[str]]]:
    """An image running, and the device that its line is."""
    process = subprocess.Popen(
        command(built, "pty", clock),
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )
    try:
        assert process.stdout is not None
        told = re.search(r"/dev/\S+", process.stdout.readline())
        assert told is not None
        yield told[0], process
    finally:
        process.kill()
        process.wait()


def test_two_thousand_samples_through_the_bridge(serving):
    """Each is answered with the float64 kernel's current for its voltage, rounded to float32."""
    server = serve(serving)
    said: list[str] = []
    with on_a_pty(image("serial_rig")) as (device, process):
        console: list[str] = []
        reader = threading.Thread(target=lambda: console.append(process.stdout.read()))
        reader.start()
        bridge = Bridge(device, 115_200, server.server.endpoints()["loop"], said.append)
        bridge.start()
        reader.join(LONGEST_S)
        wait_until(lambda: any("is gone" in text for text in said), "the image has ended")
        figures = bridge.figures()
        bridge.halt()
    check_exchange(console[0], server)
    assert (figures["samples"], figures["answers"]) == (2000, 2000)
    assert [figures[k] for k in ("dropped", "overtaken", "damaged", "malformed")] == [0] * 4
    for way, found in figures["added_nsec"].items():
        print(way, {name: f"{value / 1000:.1f} us" for name, value in found.items()})


def settled(supervisor: Supervisor, traces: list[Trace], state: int, count: int = 150) -> Trace:
    """The last of so many more samples in a state."""
    traces.clear()
    end = time.monotonic() + LONGEST_S
    while sum(trace.state == state for trace in traces) < count:
        assert time.monotonic() < end, (supervisor.state, traces[-1:])
        supervisor.attend(0.05)
    return traces[-1]


def test_a_model_on_the_device_is_supervised():
    """Its parameters are read and set, it is armed, watched and disarmed, over the same line.

    Its cell is 9 nS of leak at -54.387 mV. With the squid axon's conductances it rests near
    -65 mV (Hodgkin and Huxley 1952, modern sign), without current at its leak's reversal.
    """
    traces: list[Trace] = []
    with (
        on_a_pty(patient(), "-icount", "shift=0,sleep=off") as (device, _),
        Line(device, 115_200) as line,
        Supervisor(line, traces.append) as supervisor,
    ):
        assert list(supervisor.parameters)[:2] == ["Na.gmax_ns", "Na.reversal_mv"]
        assert supervisor.hello.features == 2
        supervisor.set(EVERY, 50)
        assert settled(supervisor, traces, 0, 20).i_pa == (0.0,)
        assert {after.seq - before.seq for before, after in pairwise(traces)} == {50}
        supervisor.arm()
        assert settled(supervisor, traces, 1).v_mv[0] == pytest.approx(-65.0, abs=0.1)
        with pytest.raises(ControlError, match=r"Na.gmax_ns=1e\+09: the device refuses it"):
            supervisor.set("Na.gmax_ns", 1e9)
        supervisor.set("K.gmax_ns", 0.0)
        assert supervisor.parameters["K.gmax_ns"].value == 0.0
        assert settled(supervisor, traces, 1).v_mv[0] > -60.0
        supervisor.disarm()
        free = settled(supervisor, traces, 0)
        assert free.i_pa == (0.0,)
        assert free.v_mv[0] == pytest.approx(-54.387, abs=0.01)
