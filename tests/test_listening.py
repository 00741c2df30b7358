"""Binding for the direct lane: files, names and ports, and what stands in the way."""

from __future__ import annotations

import os
import socket
import stat
from pathlib import Path

import pytest
from zmtp_reference import Wire

from gatestep.errors import LinkError
from gatestep.listening import listen


def _mode(path: Path) -> int:
    return stat.S_IMODE(path.stat().st_mode)


@pytest.mark.parametrize("mask", [0o000, 0o022, 0o077])
def test_the_socket_file_is_its_owners_alone(tmp_path, mask):
    """Mode 0600 whatever the process's mask, which is left as it was."""
    before = os.umask(mask)
    try:
        listen(f"ipc://{tmp_path}/loop").close()
        assert os.umask(before) == mask
    finally:
        os.umask(before)
    assert _mode(tmp_path / "loop") == 0o600


def test_a_stale_socket_file_is_replaced_and_a_live_one_is_not(tmp_path):
    """A file left behind by a server that was killed is no obstacle; a server is."""
    endpoint = f"ipc://{tmp_path}/loop"
    listen(endpoint).close()
    assert (tmp_path / "loop").is_socket()
    live = listen(endpoint)
    with pytest.raises(LinkError, match="another server"):
        listen(endpoint)
    Wire(endpoint).close()
    live.close()


def test_a_server_too_busy_to_answer_is_not_stale(tmp_path):
    """One whose queue of connections is full still listens: its file is left alone."""
    path = tmp_path / "loop"
    busy = socket.socket(socket.AF_UNIX)
    busy.bind(str(path))
    busy.listen(0)
    waiting = []
    for _ in range(3):
        waiting.append(socket.socket(socket.AF_UNIX))
        waiting[-1].setblocking(False)
        waiting[-1].connect_ex(str(path))
    with pytest.raises(LinkError, match="another server"):
        listen(f"ipc://{path}")
    assert path.is_socket()
    for end in (*waiting, busy):
        end.close()


@pytest.mark.parametrize(
    ("endpoint", "words"),
    [
        ("ipc://{}/file", "in use"),
        ("ipc://{}/no/folder", "No such file"),
        ("ipc://" + "x" * 200, "too long"),
        ("ipc://*", "path"),
        ("tcp://192.0.2.1:0", "assign"),
        ("tcp://127.0.0.1:99999", "0-65535"),
        ("tcp://no-such-interface.invalid:0", "not known"),
    ],
)
def test_what_cannot_be_bound(tmp_path, endpoint, words):
    """The error names the endpoint and the reason; a file that is no socket is left alone."""
    (tmp_path / "file").write_text("mine")
    endpoint = endpoint.format(tmp_path)
    with pytest.raises(LinkError, match=words) as caught:
        listen(endpoint)
    assert str(caught.value).startswith(endpoint)
    assert (tmp_path / "file").read_text() == "mine"
