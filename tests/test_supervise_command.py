"""``gatestep supervise``: what a signal stops, and how it learns of a trip."""

from __future__ import annotations

import json
import queue
import threading

import pytest
from conftest import wait_until
from framed_host import ARM, BYE, DISARM, PARAMETER
from test_bridge_model import device

from gatestep.commands import supervise as command
from gatestep.commands.supervise import _attend, supervise

EVERY_INDEX = 2
INTERVAL_US = 20.0


def listening(monkeypatch, *signals):
    """Orders and signals as a test gives them, in place of stdin's and the system's."""
    orders, asked = queue.SimpleQueue(), list(signals)
    monkeypatch.setattr(command, "_listen", lambda: (orders, asked))
    return orders, asked


def begun(there, **changes):
    """The command on a thread, for it ends only when it is told to."""
    options = {
        "assignments": [], "every": None, "arm": True, "trace_file": None, "seconds": None,
        "json_output": True, **changes,
    }  # fmt: skip
    path = str(there.line.pty.path)
    thread = threading.Thread(target=lambda: supervise(path, 115_200, **options))
    thread.start()
    return thread


def test_a_signal_before_arming_leaves_it_disarmed(tmp_path, monkeypatch):
    """Ctrl-C while parameters are set: no current flows after it."""
    listening(monkeypatch, 2)
    with device(tmp_path) as there:
        begun(there).join()
    assert (ARM,) not in there.done
    assert there.done[-1] == (DISARM,)
    assert there.heard[-1] == BYE


def test_a_signal_leaves_orders_that_wait_undone():
    """Nothing that stood in line is carried out once the end was asked for."""
    orders, asked, told = queue.SimpleQueue(), [], []

    class Stub:
        def attend(self, seconds):
            for text in ("disarm", "arm", "arm"):
                orders.put(text)

        def disarm(self):
            told.append("disarm")
            asked.append(2)

        def arm(self):
            told.append("arm")

    _attend(Stub(), orders, asked, None)
    assert told == ["disarm"]


def test_a_trip_is_told_though_no_samples_were_asked_for(tmp_path, monkeypatch, capfd):
    """Where the device sends none and none were asked for, it sends one in about 100 ms."""
    orders, _ = listening(monkeypatch)
    with device(tmp_path) as there:
        thread = begun(there)
        wait_until(lambda: there.armed and there.seq > 0, "armed")
        there.armed = False  # its own guard, say
        wait_until(lambda: "gatestep: disarmed" in capfd.readouterr().err, "told")
        orders.put("stop")
        thread.join()
    assert there.done[0] == (PARAMETER, EVERY_INDEX, 100_000.0 / INTERVAL_US)
    assert json.loads(capfd.readouterr().out.splitlines()[-1])["state"] == "disarmed"


@pytest.mark.parametrize("asked", [{"every": 0}, {"assignments": ["trace.every_ticks=0"]}])
def test_none_asked_for_are_none(tmp_path, monkeypatch, asked):
    """Who says 0 gets 0."""
    listening(monkeypatch, 2)
    with device(tmp_path) as there:
        begun(there, **asked).join()
    assert there.done == [(PARAMETER, EVERY_INDEX, 0.0), (DISARM,)]
    assert there.values[EVERY_INDEX] == 0.0


def test_samples_that_were_there_stay_as_they_are(tmp_path, monkeypatch):
    """A device that sends samples already is not told how many."""
    listening(monkeypatch, 2)
    with device(tmp_path) as there:
        there.values[EVERY_INDEX] = 7.0
        begun(there).join()
    assert there.done == [(DISARM,)]
