"""``gatestep bench loop`` against real servers: measured, refused, interrupted."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
import threading
import time

import pytest
from conftest import wait_until

from gatestep.cli import app
from gatestep.commands import bench_loop as command
from gatestep.config import load_rig
from gatestep.control import Control
from gatestep.errors import ControlError, FileError, LinkError
from gatestep.timing import (
    NAMES,
    stable_gain,
)

RIG = """
[loop]
endpoint = "{folder}/loop"
interval_us = 1000.0
[control]
endpoint = "{folder}/control"
[feed]
endpoint = "{folder}/feed"
[[cell]]
name = "a"
model = "squid-na-k"
capacitance_pf = 30.0
"""


@pytest.fixture
def rig_file(tmp_path):
    path = tmp_path / "rig.toml"
    path.write_text(RIG.format(folder=f"ipc://{tmp_path}"), "utf-8")
    return path


def run(*arguments):
    """``gatestep`` in this process: its exit status or result."""
    return app([str(a) for a in arguments], standalone_mode=False)


def test_a_private_server_is_measured_and_ended(rig_file, tmp_path, capsys):
    """The whole command, quiet and loaded: every part of the result is there and agrees."""
    saved, figure = tmp_path / "result.json", tmp_path / "figure.svg"
    options = ["--seconds", 0.3, "--rounds", 3, "--load", "--burners", 1, "--json"]
    run("bench", "loop", rig_file, *options, "--save", saved, "--figure", figure)
    result = json.loads(capsys.readouterr().out)
    assert json.loads(saved.read_text("utf-8")) == result
    assert figure.read_bytes().startswith(b"<?xml")
    assert result["complete"]
    assert result["server"]["private"]
    assert result["server"]["state"] == "armed"
    assert socket.gethostname() not in saved.read_text("utf-8").split('"')
    for condition in ("quiet", "loaded"):
        paced = result["conditions"][condition]["tick"]
        assert paced["samples"] + paced["skipped"] + paced["unsent"] == 300
        assert paced["missed"] == 0
        for series in result["conditions"][condition].values():
            assert series["live"] == series["answered"] == sum(series["histogram"]["counts"])
            assert len(series["rounds"]) == 3
            for quantity in ("round_trip_us", "jitter_us", "service_us"):
                values = [series[quantity][name] for name in NAMES]
                assert values == sorted(values)
        cell = result["carries"][condition]["cells"][0]
        delay = result["carries"][condition]["delay_ticks"]
        assert cell["largest_ns"] == pytest.approx(30.0 * stable_gain(delay), rel=1e-5)
    run("bench", "loop", rig_file, "--seconds", 0.1, "--rounds", 1, "--compare", saved)
    shown = capsys.readouterr().out
    assert "Compared with" in shown
    assert "plan.rounds was 3, is 1" in shown


@pytest.fixture
def serving_file(serving, rig_file, tmp_path):
    """A server at the endpoints of ``rig_file``."""
    spec = load_rig(rig_file).spec
    return serving(**spec.model_dump(exclude_none=True))


def test_an_idle_running_server_is_measured_and_left_running(rig_file, serving_file, capsys):
    """Its lane is told, nothing was live, and it is idle afterwards as before."""
    run("bench", "loop", rig_file, "--seconds", 0.1, "--rounds", 1, "--json")
    result = json.loads(capsys.readouterr().out)
    assert not result["server"]["private"]
    assert result["conditions"]["quiet"]["tick"]["live"] == 0
    assert serving_file.control.status()["state"] == "idle"


def test_an_armed_or_held_server_is_left_alone(rig_file, serving_file):
    """No sample reaches it, and the reason is said."""
    serving_file.control.arm()
    with pytest.raises(ControlError, match="armed"):
        run("bench", "loop", rig_file, "--seconds", 0.1)
    assert serving_file.control.status()["answered"] == 0
    serving_file.control.disarm()
    from conftest import RawRig

    with RawRig(load_rig(rig_file).spec.loop.endpoint) as holder:
        holder.ask(0, -65.0)
        wait_until(lambda: serving_file.control.status()["rig"] == "connected", "the hold")
        with pytest.raises(ControlError, match="held by a rig"):
            run("bench", "loop", rig_file, "--seconds", 0.1)
        assert serving_file.control.status()["answered"] == 1


def test_another_rig_file_than_the_servers_is_refused(rig_file, serving_file):
    """The server's file is named, with what is different."""
    rig_file.write_text(rig_file.read_text("utf-8").replace("1000.0", "500.0"), "utf-8")
    with pytest.raises(LinkError, match="another rig file"):
        run("bench", "loop", rig_file, "--seconds", 0.1)


def test_something_else_at_the_control_endpoint_is_not_disturbed(rig_file, tmp_path):
    """Whoever listens there without giving a status may be at work."""
    with socket.socket(socket.AF_UNIX) as other:
        other.bind(str(tmp_path / "control"))
        other.listen()
        with pytest.raises(LinkError, match="gives no status"):
            run("bench", "loop", rig_file, "--seconds", 0.1)


def test_outputs_that_cannot_be_written_are_found_before_measuring(rig_file, tmp_path, monkeypatch):
    """No minute is measured for nothing."""
    monkeypatch.setattr(command, "measure", lambda *_: pytest.fail("was measured"))
    for option, path in (
        ("--save", tmp_path / "nowhere" / "x.json"),
        ("--save", tmp_path),
        ("--figure", tmp_path / "nowhere" / "x.png"),
        ("--figure", tmp_path / "x.txt"),
        ("--compare", tmp_path / "nothing.json"),
    ):
        with pytest.raises(FileError, match=option):
            run("bench", "loop", rig_file, option, path)
    with pytest.raises(FileError, match="--burners 0"):
        run("bench", "loop", rig_file, "--burners", 0)


def test_a_server_that_goes_in_the_middle_leaves_the_result_so_far(
    rig_file, serving_file, tmp_path, capsys, monkeypatch
):
    """What was measured is printed and saved, and the error says both."""
    monkeypatch.setattr(command, "_WARM_UP_S", 0.001)  # at most 100 samples
    saved = tmp_path / "part.json"

    def stop_soon():
        wait_until(lambda: serving_file.control.status()["answered"] > 200, "samples")
        serving_file.control.stop()
        # The process ends, and with it the connection.
        serving_file.close()

    stopper = threading.Thread(target=stop_soon)
    stopper.start()
    with pytest.raises(LinkError, match="until then is saved in"):
        run("bench", "loop", rig_file, "--seconds", 100, "--rounds", 1, "--save", saved)
    stopper.join()
    assert "cut short" in capsys.readouterr().out
    result = json.loads(saved.read_text("utf-8"))
    assert not result["complete"]
    assert result["fault"]
    assert result["conditions"]["quiet"]["tick"]["answered"] > 20


@pytest.mark.parametrize("how", [signal.SIGTERM, signal.SIGKILL])
def test_ended_by_a_signal_no_server_is_left(rig_file, tmp_path, how):
    """SIGTERM: the result so far is printed. However it ends, the private server ends with it."""
    command_ = [sys.executable, "-m", "gatestep", "bench", "loop", rig_file, "--json"]
    process = subprocess.Popen(
        [*command_, "--seconds", "100", "--rounds", "50"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env={**os.environ, "TMPDIR": str(tmp_path)},
    )
    try:
        while not (found := list(tmp_path.glob("gatestep-*/loop"))):
            assert process.poll() is None, "ended before it measured"
            time.sleep(0.05)  # the server may have to compile
        with Control(f"ipc://{found[0].parent}/control") as control:
            wait_until(lambda: (control.status()["seq"] or 0) > 0, "samples")
        time.sleep(0.5)  # past the warm-up, of which no result is made
        process.send_signal(how)
        printed, said = process.communicate(timeout=60)
    finally:
        process.kill()
    if how == signal.SIGTERM:
        assert process.returncode == 130, said
        assert json.loads(printed)["fault"] == "interrupted"
        assert not list(tmp_path.glob("gatestep-*"))
    wait_until(lambda: not listens(found[0]), "the end of the private server")


def listens(path):
    with socket.socket(socket.AF_UNIX) as link:
        return link.connect_ex(str(path)) == 0


def test_a_bad_rig_file_is_named(tmp_path):
    """Its faults are said, as everywhere."""
    path = tmp_path / "bad.toml"
    path.write_text("[loop]\ninterval_us = 1.0\n", "utf-8")
    with pytest.raises(FileError, match="interval_us"):
        run("bench", "loop", path)
    with pytest.raises(FileError):
        run("bench", "loop", tmp_path / "none.toml")
