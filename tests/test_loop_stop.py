"""How a loop ends: by order, by a signal, with a rig and without; the last answer is 0 pA."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from contextlib import contextmanager
from pathlib import Path

import msgpack
import pytest
import zmq
from conftest import PATIENCE_S, RawRig, running, wait_until
from test_loop import endpoint, in_order, leak_cell, steady_rig

from gatestep.wire import LIVE


def last_answers_are_zero(answers, was_live: bool = True) -> None:
    """The rig's last answer is 0 pA and not live, and it had been live before."""
    assert in_order(answers)
    assert not answers[-1].flags & LIVE
    assert answers[-1].i_pa == [0.0]
    if was_live:
        assert any(a.flags & LIVE and a.i_pa[0] != 0.0 for a in answers)


def test_stop_answers_zero_last(tmp_path):
    """Told to stop while a rig runs, the server's last answer is 0 pA, and it ends in order."""
    with running(tmp_path, cell=[leak_cell(tmp_path)]) as server:
        server.control.arm()
        with steady_rig(server) as answers:
            wait_until(lambda: answers[-1].flags & LIVE, "a live answer")
            assert server.control.stop()["ok"]
            server.thread.join(PATIENCE_S)
            wait_until(lambda: not answers[-1].flags & LIVE, "the last answer")
        last_answers_are_zero(answers)
        assert server.result == 0


def test_arming_right_after_stop_changes_nothing(tmp_path):
    """Orders that follow the one to stop cannot bring the current back."""
    with running(tmp_path, cell=[leak_cell(tmp_path)]) as server:
        server.control.arm()
        with RawRig(endpoint(server)) as rig:
            assert rig.ask(0, -60.0).i_pa == [-100.0]
            context = zmq.Context()
            client = context.socket(zmq.DEALER)
            client.connect(server.server.endpoints()["control"])
            for verb in ("stop", "reset", "arm", "arm"):
                client.send(msgpack.packb({"verb": verb}))
            assert msgpack.unpackb(client.recv())["ok"]
            rig.send(1, -60.0)
            last = rig.receive(5.0)
            assert last is None or (last.flags, last.i_pa) == (0, [0.0])
            server.thread.join(PATIENCE_S)
            context.destroy(linger=0)
        assert server.result == 0


def test_stop_without_a_rig(tmp_path):
    """With no rig to tell, the server ends at once; with a silent one, soon."""
    with running(tmp_path) as server:
        server.control.stop()
        server.thread.join(PATIENCE_S)
        assert server.result == 0
    (tmp_path / "again").mkdir()
    with running(tmp_path / "again") as server:
        with RawRig(endpoint(server)) as rig:
            rig.ask(0, -65.0)
            server.control.stop()
            server.thread.join(PATIENCE_S)
        assert server.result == 0


def write_rig(folder: Path, **limits) -> Path:
    """A rig file for a server of its own process."""
    model = leak_cell(folder)["model"]
    rig = folder / "rig.toml"
    rig.write_text(
        f"""
[loop]
endpoint = "ipc://{folder}/loop"
interval_us = 20.0
[control]
endpoint = "ipc://{folder}/control"
[feed]
endpoint = "ipc://{folder}/feed"
[[cell]]
name = "a"
model = "{model}"
"""
    )
    return rig


@contextmanager
def serve_process(folder: Path, *options: str):
    """``gatestep serve`` in a process of its own, once it says that it is ready."""
    process = subprocess.Popen(
        [sys.executable, "-m", "gatestep", "serve", str(write_rig(folder)), "--json", *options],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=dict(os.environ),
    )
    try:
        assert json.loads(process.stdout.readline())["ready"]
        yield process
    finally:
        process.kill()
        process.communicate()


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_answers_zero_last(tmp_path, number):
    """SIGTERM or SIGINT while a rig keeps sending: the last answer is 0 pA, exit status 0."""
    answers = []
    with serve_process(tmp_path, "--arm") as process, RawRig(f"ipc://{tmp_path}/loop") as rig:
        for n in range(2_000_000):
            rig.send(n, -60.0)
            if n == 500:
                process.send_signal(number)
            while (reply := rig.receive(0.1)) is None and process.poll() is None:
                pass
            if reply is None:
                break
            answers.append(reply)
        assert process.wait(PATIENCE_S) == 0
        said = process.stdout.read()
    last_answers_are_zero(answers)
    assert answers[10].i_pa == [-100.0]
    report = json.loads(said.splitlines()[-1])
    assert report["stopped"]
    assert report["answered"] == len(answers)


def test_a_signal_without_a_rig(tmp_path):
    """Told to end with nobody connected, the server ends in order."""
    with serve_process(tmp_path) as process:
        process.send_signal(signal.SIGTERM)
        assert process.wait(PATIENCE_S) == 0
