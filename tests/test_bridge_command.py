"""``gatestep bridge`` from the command line."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time

import pytest
from conftest import running
from framed_host import BYE
from serial_device import FakeDevice, Pty

from gatestep.bridgehost import Expected
from gatestep.cli import main
from gatestep.commands.bridge import ENDPOINT, _expectations

HOST_STOPS = 4


def test_from_the_command_line(tmp_path):
    """``gatestep bridge``: a second told on stderr, the report as JSON, ended by a signal."""
    pty = Pty(tmp_path)
    device = FakeDevice(pty)
    with running(tmp_path) as server:
        command = [sys.executable, "-m", "gatestep", "bridge", str(pty.path)]
        command += ["--server", server.server.endpoints()["loop"]]
        ends = {}
        for way, options in (("words", []), ("json", ["--json"])):
            process = subprocess.Popen(
                command + options, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
            )
            device.join()
            end = time.monotonic() + 1.1
            k = 0
            while time.monotonic() < end:
                assert device.ask(k, -65.0)[0] == k
                k += 1
            process.send_signal(signal.SIGTERM)
            ends[way] = (*process.communicate(timeout=30), process.returncode, k)
            assert device.wait(BYE) == [HOST_STOPS]
    pty.close()
    out, err, status, k = ends["words"]
    assert status == 0
    assert f"{k} to the server" in out
    assert "added so far in µs: to the server p50" in err
    out, err, status, k = ends["json"]
    assert status == 0
    assert "added so far" not in err
    assert json.loads(out)["answers"] == k


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["/dev/no-such-device"], "no such device; is it plugged in?"),
        (["."], "is no serial device"),
        (["/dev/null"], "is it a serial device?"),
        (["/dev/null", "--rig", "nowhere.toml"], "nowhere.toml"),
        (["/dev/null", "--server", "localhost"], "is not tcp://ADDRESS:PORT"),
    ],
)
def test_wrong_arguments_are_errors_in_words(arguments, words, monkeypatch, capsys):
    """One line, no traceback, status 1."""
    monkeypatch.setattr(sys, "argv", ["gatestep", "bridge", *arguments])
    with pytest.raises(SystemExit) as ended:
        main()
    told = capsys.readouterr().err
    assert ended.value.code == 1
    assert words in told
    assert told.count("\n") == 1


def test_the_rig_file_gives_endpoint_and_cells(tmp_path):
    """What the command takes from a rig file."""
    path = tmp_path / "rig.toml"
    path.write_text(
        f'[loop]\nendpoint = "ipc://{tmp_path}/x"\ninterval_us = 25\n'
        '[[cell]]\nname = "a"\nmodel = "leak"\n'
    )
    assert _expectations(None, path) == (f"ipc://{tmp_path}/x", Expected(1, 25.0))
    assert _expectations("tcp://127.0.0.1:9", path)[0] == "tcp://127.0.0.1:9"
    assert _expectations(None, None) == (ENDPOINT, None)
