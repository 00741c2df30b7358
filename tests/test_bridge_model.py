"""Supervising a model on a serial device: orders, losses, thinned samples; a device in Python."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import termios
import threading
import time
from contextlib import contextmanager

import numpy as np
import pytest
from conftest import PATIENCE_S, wait_until
from framed_host import (
    ALIVE,
    ARM,
    ASK,
    BYE,
    DISARM,
    DONE,
    HELLO,
    IS,
    PARAMETER,
    TRACE,
    WELCOME,
    encode,
)
from hypothesis import given
from hypothesis import strategies as st
from serial_device import FakeDevice, Pty, pack

from gatestep.bridgeline import Line
from gatestep.bridgemodel import Supervisor, Trace, read_trace
from gatestep.commands.supervise import _written
from gatestep.errors import ControlError, LinkError, MissingExtraError

NAMES = ["K.gmax_ns", "K.reversal_mv", "trace.every_ticks"]


class ModelDevice(threading.Thread):
    """The device's end from SPEC.md alone, on a thread; it can lose what it hears and says."""

    def __init__(self, pty, hello=(1, 0, 1, 20.0, 2), lossy=False, deaf=0):
        super().__init__(daemon=True)
        self.deaf = deaf  # goodbyes that it does not hear, running from before
        self.line, self.hello, self.lossy = FakeDevice(pty), list(hello), lossy
        self.values = [12.5, -77.0, 0.0]
        self.armed, self.open, self.over = False, deaf > 0, threading.Event()
        self.done, self.last, self.seq, self.heard = [], None, 0, []
        self.orders = 0

    def loses(self, place):
        """Of three orders one is not heard, and of one the answer is lost."""
        return self.lossy and self.orders % 3 == place

    def run(self):
        greeted = 0.0
        frame = None
        while frame is not None or not self.over.is_set():
            if not self.open and time.monotonic() - greeted > 0.1:
                greeted = time.monotonic()
                self.line.write(b"\0" + encode(HELLO, self.hello))
            frame = self.line.hear(0.01)
            if frame is not None:
                self.heard.append(frame.kind)
                self.orders += frame.kind in (ASK, PARAMETER, ARM, DISARM)
                if frame.kind in (WELCOME, BYE, ALIVE) or not self.loses(0):
                    self.act(*frame)
            if self.open and self.values[2]:
                self.trace()

    def act(self, kind, items):
        if kind == WELCOME:
            assert items == self.hello[:3]
            self.open = True
        elif kind == BYE and self.deaf:
            self.deaf -= 1
        elif kind == BYE:
            self.armed = self.open = False
            self.line.send(HELLO, self.hello)
        elif kind == ASK:
            token, index = items
            if not self.loses(1):
                self.line.send(IS, [token, index, len(NAMES), NAMES[index], self.values[index]])
        elif kind in (PARAMETER, ARM, DISARM):
            self.order(kind, *items)

    def order(self, kind, token, *arguments):
        if self.last is None or self.last[0] != token:
            self.last = token, self.carry_out(kind, *arguments)
        if not self.loses(1):
            self.line.send(DONE, list(self.last))

    def carry_out(self, kind, *arguments):
        self.done.append((kind, *arguments))
        if kind == PARAMETER:
            index, value = arguments
            if value < 0 and index != 1:
                return 1
            self.values[index] = float(np.float32(value))
        else:
            self.armed = kind == ARM
        return 0

    def trace(self):
        self.seq += int(self.values[2])
        i_pa = self.values[0] * 0.5 if self.armed else 0.0
        self.line.send(TRACE, [self.seq, 20 * self.seq, int(self.armed), -65.5, i_pa])


@contextmanager
def device(folder, **options):
    pty = Pty(folder)
    made = ModelDevice(pty, **options)
    made.start()
    try:
        yield made
    finally:
        made.over.set()
        made.join(PATIENCE_S)
        pty.close()


@contextmanager
def supervised(folder, **options):
    with device(folder, **options) as there, Line(str(there.line.pty.path), 115_200) as line:
        traces: list[Trace] = []
        with Supervisor(line, traces.append) as supervisor:
            yield there, supervisor, traces


@pytest.mark.parametrize("lossy", [False, True])
def test_parameters_arming_and_samples(tmp_path, lossy):
    """Each order is carried out exactly once, though orders and answers are lost."""
    with supervised(tmp_path, lossy=lossy) as (there, supervisor, traces):
        assert {p.name: p.value for p in supervisor.parameters.values()} == dict(
            zip(NAMES, [12.5, -77.0, 0.0], strict=True)
        )
        supervisor.set("K.gmax_ns", 36.1)
        assert supervisor.parameters["K.gmax_ns"].value == float(np.float32(36.1))
        supervisor.set("trace.every_ticks", 50)
        supervisor.arm()
        before = len(traces)
        supervisor.attend(0.2)
        armed = traces[before:]
        assert supervisor.state == "armed"
        supervisor.disarm()
        supervisor.attend(0.1)
        assert supervisor.state == "disarmed"
    assert there.done == [
        (PARAMETER, 0, 36.1), (PARAMETER, 2, 50.0), (ARM,), (DISARM,), (DISARM,)
    ]  # fmt: skip
    assert len(armed) >= 2
    assert np.diff([t.seq for t in traces]).tolist() == [50] * (len(traces) - 1)
    assert armed[-1].v_mv == (-65.5,)
    assert armed[-1].i_pa == (float(np.float32(36.1)) * 0.5,)
    assert there.heard.count(ALIVE) >= 3
    assert BYE in there.heard[2:]  # and not only at the start


def test_a_goodbye_that_is_lost_is_said_again(tmp_path):
    """A device that runs from before says hello only to a bye: the first may be lost."""
    with supervised(tmp_path, deaf=2) as (there, supervisor, _):
        supervisor.set("K.gmax_ns", 3.0)
    assert there.heard[:4] == [BYE, BYE, BYE, WELCOME]
    assert there.values[0] == 3.0


def test_what_the_device_refuses_is_an_error_in_words(tmp_path):
    """An unknown name, a value that cannot be; the supervision goes on."""
    with supervised(tmp_path) as (there, supervisor, _):
        with pytest.raises(ControlError, match=r"no 'Na.gmax_ns'; it has K.gmax_ns, K.rev"):
            supervisor.set("Na.gmax_ns", 1.0)
        with pytest.raises(ControlError, match=r"set K.gmax_ns=-1: .*error 1: .*cannot have"):
            supervisor.set("K.gmax_ns", -1.0)
        supervisor.set("K.reversal_mv", -80.0)
    assert there.values[1] == -80.0
    assert not there.armed


@pytest.mark.parametrize(
    ("hello", "words"),
    [((2, 0, 1, 20.0, 2), "framing 2.0"), ((1, 0, 1, 20.0, 1), "use gatestep bridge")],
)
def test_devices_without_a_model_of_this_framing_are_refused(tmp_path, hello, words):
    """And never welcomed."""
    with device(tmp_path, hello=hello) as there, Line(str(there.line.pty.path), 9600) as line:
        with pytest.raises(LinkError, match=words):
            Supervisor(line, lambda _: None)
        assert WELCOME not in there.heard


def test_a_device_that_starts_anew_ends_the_supervision(tmp_path):
    """It is disarmed and has other parameters: nothing may go on as if it had not been."""
    with supervised(tmp_path) as (there, supervisor, _):
        there.open = False
        with pytest.raises(LinkError, match="has started anew: it is disarmed"):
            supervisor.attend(PATIENCE_S)


def test_a_device_that_is_unplugged_ends_the_supervision(tmp_path):
    """Told as an error; there is nobody to disarm."""
    with device(tmp_path) as there, Line(str(there.line.pty.path), 9600) as line:
        supervisor = Supervisor(line, lambda _: None)
        there.over.set()
        there.join()
        there.line.pty.unplug()
        with pytest.raises(LinkError, match="is gone"):
            supervisor.attend(PATIENCE_S)


def test_a_device_that_is_not_there_leaves_no_log(tmp_path):
    """The next attempt may write to the same file."""
    log = tmp_path / "log.csv"
    with pytest.raises(LinkError, match="no such device"), _written(log):
        Line(str(tmp_path / "device"), 9600)
    assert not log.exists()


def test_without_pyserial_the_extra_is_named(tmp_path, monkeypatch):
    """An error in words that says what to install."""
    monkeypatch.setitem(sys.modules, "serial", None)
    with pytest.raises(MissingExtraError, match=r"pip install 'gatestep\[serial\]'"):
        Line(str(tmp_path / "device"), 9600)


def test_a_line_is_set_as_the_bridge_needs_it(tmp_path):
    """Reading blocks until one byte is there, writing never does, and nobody else may open it."""
    pty = Pty(tmp_path)
    with Line(str(pty.path), 115_200) as line:
        settings = termios.tcgetattr(line.reading)
        assert (settings[6][termios.VMIN], settings[6][termios.VTIME]) == (1, 0)
        assert os.get_blocking(line.reading)
        assert not os.get_blocking(line.writing)
        with pytest.raises(LinkError, match="in use by another program"):
            Line(str(pty.path), 115_200)
    pty.close()


@given(st.binary(max_size=60), st.lists(st.floats(width=32, allow_nan=False), max_size=4))
def test_any_trace_is_read_or_refused(junk, numbers):
    """Whatever the bytes; and every whole one comes out as it went in."""
    read_trace(junk)
    found = read_trace(pack(7, 140, 2, *numbers))
    if len(numbers) < 2 or len(numbers) % 2:
        assert found is None
    else:
        assert found == Trace(7, 140, 2, tuple(numbers[::2]), tuple(numbers[1::2]))


def test_from_the_command_line(tmp_path):
    """``gatestep supervise``: settings, a log as CSV, orders on stdin, disarmed at the end."""
    log = tmp_path / "log.csv"
    with device(tmp_path) as there:
        command = [sys.executable, "-m", "gatestep", "supervise", str(there.line.pty.path)]
        command += ["--set", "K.gmax_ns=20", "--every", "10", "--arm", "--trace", str(log)]
        process = subprocess.Popen(
            [*command, "--json"],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        )  # fmt: skip
        wait_until(lambda: there.armed, "armed")
        wait_until(lambda: there.seq > 100, "samples")
        process.stdin.write("set K.gmax_ns=24\ndance\nset K.gmax_ns=-1\nshow\n")
        process.stdin.flush()
        wait_until(lambda: there.done[-1:] == [(PARAMETER, 0, -1.0)], "orders")
        process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=PATIENCE_S)
        assert process.returncode == 0
        assert not there.armed
        again = subprocess.run([*command], capture_output=True, text=True, check=False)
    assert "K.gmax_ns is 24" in err
    assert "'dance' is no order" in err
    assert "the device refuses it (error 1" in err
    assert "Not a medical device" in err
    report = json.loads(out)
    assert report["parameters"]["K.gmax_ns"] == 24.0
    rows = list(csv.DictReader(log.open()))
    assert len(rows) == report["samples"] > 10
    assert [int(r["seq"]) for r in rows[:3]] == [10, 20, 30]
    live = {float(r["i_pa_1"]) for r in rows if r["state"] == "1"}
    assert live <= {10.0, 12.0}
    assert 10.0 in live
    assert again.returncode == 1
    assert "exists; choose another name" in again.stderr
    assert os.path.getsize(log) > 0
