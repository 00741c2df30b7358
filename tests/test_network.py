"""Who is let in: a list of peers over both lanes, CURVE keys, and neither from elsewhere.

Everything is on this machine: a rig "from elsewhere" is one whose own address is
127.0.0.2, which is on no list unless the test puts it there.
"""

from __future__ import annotations

import shutil
import socket

import msgpack
import pytest
import zmq
import zmq.auth
from conftest import PATIENCE_S, Attended, RawRig, make_rig, running, wait_until

from gatestep.control import Control
from gatestep.errors import ControlError, FileError, GatestepError, LinkError
from gatestep.server import Server

ANYWHERE = "tcp://0.0.0.0:0"
SHUT_OUT_S = 0.7
"""How long a peer that must not be answered is listened to; others answer far sooner."""


def from_address(source: str, bound: str) -> str:
    """How to connect from one of this machine's addresses to a bound endpoint."""
    port = bound.rpartition(":")[2]
    return f"tcp://{source}:0;127.0.0.1:{port}"


def rig_is_answered(endpoint: str, patience_s: float, **options) -> bool:
    """Whether a rig gets an answer there; one that is refused may not even be able to send."""
    with RawRig(endpoint, **options) as rig:
        rig.socket.setsockopt(zmq.SNDTIMEO, int(1000 * patience_s))
        try:
            rig.send(0, -65.0)
        except zmq.Again:
            return False
        return rig.receive(patience_s) is not None


def control_is_answered(endpoint: str, patience_s: float, **keys) -> bool:
    """Whether a control client gets an answer there."""
    with Control(endpoint, timeout_s=patience_s, **keys) as control:
        try:
            return bool(control.status()["ok"])
        except LinkError:
            return False


def feed_is_heard(endpoint: str, patience_s: float, **options) -> bool:
    """Whether a watcher hears anything there; a status comes every second."""
    context = zmq.Context()
    try:
        socket = context.socket(zmq.SUB)
        for name, value in options.items():
            setattr(socket, name, value)
        socket.subscribe(b"")
        socket.connect(endpoint)
        if not socket.poll(int(1000 * patience_s)):
            return False
        topic, content = socket.recv_multipart()
        assert topic in (b"status", b"event", b"sample")
        assert isinstance(msgpack.unpackb(content), dict)
        return True
    finally:
        context.destroy(linger=0)


@pytest.mark.parametrize("lane", ["direct", "libzmq"])
def test_a_list_of_peers_at_the_loop(tmp_path, lane):
    """Loopback and those on the list are answered; anyone else is not, over either lane."""
    loop = {"interval_us": 20.0, "endpoint": ANYWHERE, "lane": lane}
    for peers, let_in in ((("10.1.2.3",), False), (("10.1.2.3", "127.0.0.2"), True)):
        folder = tmp_path / str(let_in)
        folder.mkdir()
        limits = {"silence_ms": 5.0}
        with running(folder, loop=loop, network={"peers": peers}, limits=limits) as server:
            bound = server.server.endpoints()["loop"]
            stranger = from_address("127.0.0.2", bound)
            assert rig_is_answered(stranger, PATIENCE_S if let_in else SHUT_OUT_S) == let_in
            assert rig_is_answered(from_address("127.0.0.1", bound), PATIENCE_S)


@pytest.mark.parametrize(
    ("name", "heard"), [("control", control_is_answered), ("feed", feed_is_heard)]
)
def test_a_list_of_peers_at_the_other_sockets(tmp_path, name, heard):
    """Control and feed let the same addresses in as the loop."""
    for peers, let_in in ((("10.1.2.3",), False), (("10.1.2.3", "127.0.0.2"), True)):
        folder = tmp_path / str(let_in)
        folder.mkdir()
        server = Attended(
            make_rig(folder, network={"peers": peers}, **{name: {"endpoint": ANYWHERE}})
        )
        try:
            bound = server.server.endpoints()[name]
            stranger = from_address("127.0.0.2", bound)
            # A feed's status comes once a second: a stranger listens for longer than that.
            assert heard(stranger, PATIENCE_S if let_in else 2 * SHUT_OUT_S) == let_in
            assert heard(from_address("127.0.0.1", bound), PATIENCE_S)
        finally:
            server.close()


@pytest.fixture(scope="module")
def keys(tmp_path_factory):
    """Certificates of a server, of a client that it knows, and of one that it does not."""
    folder = tmp_path_factory.mktemp("keys")
    for name in ("server", "client", "stranger"):
        zmq.auth.create_certificates(folder, name)
    (folder / "clients").mkdir()
    shutil.copy(folder / "client.key", folder / "clients")
    return folder


def curve(keys, name: str) -> dict[str, bytes]:
    """The socket options of a client."""
    public, secret = zmq.auth.load_certificate(keys / f"{name}.key_secret")
    server, _ = zmq.auth.load_certificate(keys / "server.key")
    return {"curve_serverkey": server, "curve_publickey": public, "curve_secretkey": secret}


def network(keys, **changes) -> dict[str, str]:
    found = {
        "curve_secret": str(keys / "server.key_secret"),
        "curve_clients": str(keys / "clients"),
    }
    return {**found, **changes}


@pytest.fixture(scope="module")
def guarded(keys, tmp_path_factory):
    """A server with CURVE keys on all its sockets."""
    made = Attended(make_rig(tmp_path_factory.mktemp("guarded"), network=network(keys)))
    yield made.server
    made.close()


def certificates(keys, name: str):
    return {"curve_server": keys / "server.key", "curve_client": keys / f"{name}.key_secret"}


def test_keys_open_every_socket(guarded, keys):
    """A client with keys steers, samples and watches as ever, over the libzmq lane."""
    ends = guarded.endpoints()
    with Control(ends["control"], timeout_s=PATIENCE_S, **certificates(keys, "client")) as control:
        assert control.status()["lane"] == "libzmq"
        assert control.arm()["state"] == "armed"
        with RawRig(ends["loop"], **curve(keys, "client")) as rig:
            assert rig.ask(0, -65.0).flags == 1
        assert control.disarm()["state"] == "idle"
        with pytest.raises(ControlError, match="not known"):
            control.ask("fire")
    assert feed_is_heard(ends["feed"], PATIENCE_S, **curve(keys, "client"))


@pytest.mark.parametrize("who", ["nobody", "stranger"])
def test_without_the_right_keys_nothing_is_heard(guarded, keys, who):
    """Neither a peer without keys nor one whose key is not on file is answered at any socket."""
    ends = guarded.endpoints()
    options = curve(keys, "stranger") if who == "stranger" else {}
    files = certificates(keys, "stranger") if who == "stranger" else {}
    assert not rig_is_answered(ends["loop"], SHUT_OUT_S, **options)
    assert not control_is_answered(ends["control"], SHUT_OUT_S, **files)
    assert not feed_is_heard(ends["feed"], 2 * SHUT_OUT_S, **options)


@pytest.mark.parametrize("fault", ["missing", "public", "garbage", "short key", "no clients"])
def test_keys_that_are_none(keys, tmp_path, fault):
    """A certificate that cannot be used is a FileError that names it, and leaves nothing open."""
    changes = {}
    if fault == "missing":
        changes["curve_secret"] = str(tmp_path / "none.key_secret")
    elif fault == "public":
        changes["curve_secret"] = str(keys / "server.key")
    elif fault == "no clients":
        changes["curve_clients"] = str(tmp_path / "nobody")
    else:
        bad = tmp_path / "bad.key_secret"
        text = (keys / "server.key_secret").read_text()
        secret = text.split('secret-key = "')[1].split('"')[0]
        bad.write_text("garbage" if fault == "garbage" else text.replace(secret, secret[:20]))
        changes["curve_secret"] = str(bad)
    with pytest.raises(FileError) as caught:
        Server(make_rig(tmp_path, network=network(keys, **changes)))
    wrong = changes.get("curve_secret") or changes["curve_clients"]
    assert wrong in str(caught.value)


def test_relative_certificates_lie_beside_the_rig_file(keys, tmp_path):
    """Their paths start at the rig file's folder."""
    shutil.copytree(keys, tmp_path / "mine")
    names = {"curve_secret": "mine/server.key_secret", "curve_clients": "mine/clients"}
    Server(make_rig(tmp_path, network=names)).close()


def test_an_endpoint_that_is_taken(tmp_path):
    """A second server at the same endpoint is refused, and the first one is not disturbed."""
    with running(tmp_path) as first:
        again = Server(make_rig(tmp_path))
        try:
            with pytest.raises(LinkError, match=r"loop\.endpoint.*another server"):
                again.start()
        finally:
            again.close()
        with RawRig(first.server.endpoints()["loop"]) as rig:
            assert rig.ask(0, -65.0).flags == 0
        assert first.control.status()["ok"]


@pytest.mark.parametrize("name", ["loop", "control", "feed"])
@pytest.mark.parametrize(
    "endpoint",
    ["tcp://192.0.2.1:5790", "ipc:///nonexistent/folder/socket"],
)
def test_an_endpoint_that_cannot_be_bound(tmp_path, name, endpoint):
    """The error names the key and the endpoint, and the server leaves nothing behind.

    192.0.2.1 belongs to no machine (RFC 5737).
    """
    changes = {name: {"endpoint": endpoint, **({"interval_us": 20.0} if name == "loop" else {})}}
    network_ = {"network": {"peers": ("10.0.0.1",)}} if "192" in endpoint else {}
    server = Server(make_rig(tmp_path, **changes, **network_))
    with pytest.raises(GatestepError) as caught:
        server.start()
    server.close()
    assert f"{name}.endpoint" in str(caught.value)
    assert endpoint in str(caught.value)


@pytest.mark.parametrize("lane", ["direct", "libzmq"])
def test_loopback_in_ipv6(tmp_path, lane):
    """[::1] serves as 127.0.0.1 does, at every socket."""
    ends = {name: {"endpoint": f"tcp://[::1]:{port}"} for name, port in free_ports().items()}
    ends["loop"].update(interval_us=20.0, lane=lane)
    with running(tmp_path, **ends) as server:
        bound = server.server.endpoints()
        assert all("[::1]" in e for e in bound.values())
        with RawRig(bound["loop"], ipv6=True) as rig:
            assert rig.ask(0, -65.0).flags == 0
        assert feed_is_heard(bound["feed"], PATIENCE_S, ipv6=True)
        assert server.control.status()["ok"]


def free_ports() -> dict[str, int]:
    """A port for each of a server's sockets that nobody uses now."""
    found = {}
    for name in ("loop", "control", "feed"):
        with socket.socket(socket.AF_INET6) as probe:
            probe.bind(("::1", 0))
            found[name] = probe.getsockname()[1]
    return found


def test_a_stale_socket_file_is_replaced(tmp_path):
    """What a killed server left behind at an ipc endpoint does not stop the next one."""
    with socket.socket(socket.AF_UNIX) as left:
        left.bind(str(tmp_path / "loop"))
    with running(tmp_path) as server:
        with RawRig(server.server.endpoints()["loop"]) as rig:
            assert rig.ask(0, -65.0).flags == 0
        wait_until(lambda: server.control.status()["answered"] == 1, "the answer told")
