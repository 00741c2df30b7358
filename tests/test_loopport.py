"""The loop socket from outside: who may connect, its file, and which lane serves."""

from __future__ import annotations

import os
import shutil
from pathlib import Path
from typing import Any

import msgpack
import pytest
import zmq.auth
import zmtp_reference as rfc
from conftest import RawRig, make_rig, read_reply, running
from zmtp_reference import Wire

from gatestep.control import Control
from gatestep.errors import LinkError
from gatestep.server import Server
from gatestep.specs import MAX_PEERS, RigSpec

DIRECT = {"interval_us": 20.0, "lane": "direct"}


def endpoint(server: Any) -> str:
    return server.server.endpoints()["loop"]


def sample(seq: int, v_mv: float) -> bytes:
    """A sample by the reference MessagePack implementation."""
    return msgpack.packb([seq, 20 * seq, None, None, v_mv])


PEERS_ONLY = {"interval_us": 20.0, "lane": "direct", "endpoint": "tcp://0.0.0.0:0"}


def port_of(server: Any) -> str:
    return endpoint(server).rpartition(":")[2]


@pytest.mark.parametrize("family", ["IPv4", "IPv4 through IPv6"])
def test_the_list_of_peers(serving, family):
    """Bound for others to reach, only loopback and the addresses on the list may connect.

    From elsewhere the connection is closed without a word, by hand or by libzmq.
    """
    bind = "tcp://0.0.0.0:0" if family == "IPv4" else "tcp://[::]:0"
    made = serving(loop={**PEERS_ONLY, "endpoint": bind}, network={"peers": ["127.0.0.2"]})
    where = f"tcp://127.0.0.1:{port_of(made)}"
    for n, source in enumerate(("127.0.0.1", "127.0.0.2")):
        with Wire(where, source=source) as wire:
            wire.send(rfc.message(sample(n, -60.0)))
            assert read_reply(wire.answer()).seq == n
        with RawRig(where.replace("tcp://", f"tcp://{source}:0;")) as rig:
            assert rig.ask(n, -60.0).seq == n
    for source in ("127.0.0.3", "127.1.0.2", "127.0.0.22"):
        with Wire(where, b"", source=source) as wire:
            assert wire.rest() == b""
        with RawRig(where.replace("tcp://", f"tcp://{source}:0;")) as rig:
            rig.send(0, -60.0)
            assert rig.receive(0.3) is None
    assert made.control.status()["lane"] == "direct"


def test_peers_over_ipv6(serving):
    """A list of IPv6 addresses lets loopback in and others on the list, in whatever spelling."""
    loop = {**PEERS_ONLY, "endpoint": "tcp://[::]:0"}
    made = serving(loop=loop, network={"peers": ["2001:0db8:0:0::1"]})
    with Wire(f"tcp://[::1]:{port_of(made)}") as wire:
        wire.send(rfc.message(sample(5, -60.0)))
        assert read_reply(wire.answer()).seq == 5
    with Wire(f"tcp://127.0.0.1:{port_of(made)}", b"", source="127.0.0.9") as wire:
        assert wire.rest() == b""


def test_the_longest_list_of_peers(serving):
    """As many peers as a rig file may name fit into the direct lane, the last one too."""
    peers = [*(f"10.0.0.{n}" for n in range(MAX_PEERS - 1)), "127.0.0.2"]
    made = serving(loop=PEERS_ONLY, network={"peers": peers})
    where = f"tcp://127.0.0.1:{port_of(made)}"
    with Wire(where, source="127.0.0.2") as wire:
        wire.send(rfc.message(sample(3, -60.0)))
        assert read_reply(wire.answer()).seq == 3
    with Wire(where, b"", source="127.0.0.3") as wire:
        assert wire.rest() == b""


def test_the_socket_file_comes_and_goes_with_the_server(tmp_path):
    """Its owner's alone while the server runs, gone afterwards; one that is stale is replaced."""
    path = tmp_path / "loop"
    for _ in range(2):
        with running(tmp_path, loop=DIRECT) as made:
            assert path.stat().st_mode & 0o777 == 0o600
            with RawRig(endpoint(made)) as rig:
                assert rig.ask(0, -60.0).seq == 0
            shutil.copystat(path, tmp_path)
        assert not path.exists()


def test_another_servers_file_is_left_alone(tmp_path):
    """A server whose file was taken away and replaced does not take the new one away."""
    path = tmp_path / "loop"
    with running(tmp_path, loop=DIRECT):
        path.unlink()
        path.write_text("another's")
    assert path.read_text() == "another's"


def test_a_second_server_is_refused(tmp_path):
    """Where a server runs another cannot start; the first goes on serving."""
    with running(tmp_path, loop=DIRECT) as first:
        second = Server(make_rig(tmp_path, loop=DIRECT))
        with pytest.raises(LinkError, match=r"loop\.endpoint.*another server"):
            second.start()
        second.close()
        with RawRig(endpoint(first)) as rig:
            assert rig.ask(0, -60.0).seq == 0


def test_a_name_without_a_file(serving):
    """``ipc://@NAME`` is where libzmq clients look for it, and leaves no file."""
    name = f"ipc://@gatestep-test-{os.getpid()}"
    serving(loop={**DIRECT, "endpoint": name})
    with RawRig(name) as rig:
        assert rig.ask(0, -60.0).seq == 0
    assert not Path(name.removeprefix("ipc://")).exists()


@pytest.mark.parametrize(("asked", "found"), [("libzmq", "libzmq"), ("auto", "direct")])
def test_the_status_says_which_lane(serving, asked, found):
    """The lane asked for is the lane that serves, and the status names it."""
    made = serving(loop={"interval_us": 20.0, "lane": asked})
    assert made.control.status()["lane"] == found
    with RawRig(endpoint(made)) as rig:
        assert rig.ask(0, -60.0).seq == 0


def test_curve_goes_through_libzmq(tmp_path):
    """With keys the lane is libzmq: a client with keys is served, one without is not heard.

    Asked for the direct lane with keys, the rig file is refused.
    """
    (tmp_path / "clients").mkdir()
    server_public, server_secret = zmq.auth.create_certificates(tmp_path, "server")
    client_public, client_secret = zmq.auth.create_certificates(tmp_path, "client")
    shutil.copy(client_public, tmp_path / "clients")
    network = {"curve_secret": server_secret, "curve_clients": str(tmp_path / "clients")}
    loop = {"interval_us": 20.0, "endpoint": "tcp://127.0.0.1:0"}
    public, secret = zmq.auth.load_certificate(client_secret)
    keys = {
        "curve_serverkey": zmq.auth.load_certificate(server_public)[0],
        "curve_publickey": public,
        "curve_secretkey": secret,
    }
    with running(tmp_path, loop=loop, network=network) as made:
        ends = made.server.endpoints()
        with RawRig(ends["loop"], **keys) as rig, RawRig(ends["loop"]) as stranger:
            stranger.send(0, -60.0)
            assert rig.ask(0, -60.0).seq == 0
            assert stranger.receive(0.3) is None
        with Control(ends["control"], 20, Path(server_public), Path(client_secret)) as control:
            assert control.status()["lane"] == "libzmq"
    sections = {"loop": {**loop, "lane": "direct"}, "network": network}
    sections["cell"] = [{"name": "a", "model": "squid-axon"}]
    with pytest.raises(ValueError, match=r"direct.*CURVE"):
        RigSpec.model_validate(sections)
