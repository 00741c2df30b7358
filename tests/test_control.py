"""The control socket of a real server, and the client: steering, refusals, hostile requests."""

from __future__ import annotations

import math
import threading
import time

import msgpack
import pytest
import zmq
from conftest import PATIENCE_S, RawRig, running, wait_until

import gatestep.server
from gatestep.control import Control
from gatestep.errors import ControlError, FileError, LinkError
from gatestep.wire import LIVE


@pytest.fixture(scope="module")
def server(tmp_path_factory):
    """One server for the tests that leave it as they found it."""
    with running(tmp_path_factory.mktemp("control")) as made:
        yield made


class RawClient:
    """A control client that can send anything."""

    def __init__(self, server, kind=zmq.DEALER):
        self.context = zmq.Context()
        self.socket = self.context.socket(kind)
        for option in (zmq.SNDTIMEO, zmq.RCVTIMEO):
            self.socket.setsockopt(option, int(1000 * PATIENCE_S))
        self.socket.connect(server.server.endpoints()["control"])

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.context.destroy(linger=0)

    def send(self, *frames):
        self.socket.send_multipart(frames)

    def receive(self):
        assert self.socket.poll(1000 * PATIENCE_S), "no answer came"
        return msgpack.unpackb(self.socket.recv_multipart()[-1])

    def tell(self, *frames):
        self.send(*frames)
        return self.receive()


def nested(depth, inside=b"\xc0"):
    """Arrays in arrays, as bytes."""
    return b"\x91" * depth + inside


def in_map(value: bytes, verb: str = "set", key: str = "value") -> bytes:
    """A request whose one argument is these bytes."""
    return b"\x82" + msgpack.packb("verb") + msgpack.packb(verb) + msgpack.packb(key) + value


NO_REQUESTS = {
    "empty": b"",
    "nil": b"\xc0",
    "not MessagePack": b"\xc1",
    "text": b"status",
    "json": b'{"verb": "status"}',
    "cut short": msgpack.packb({"verb": "status"})[:-1],
    "too long": msgpack.packb({"verb": "status"}) + b"\x00",
    "array": msgpack.packb(["status"]),
    "number keys": msgpack.packb({1: "status"}),
    "nil key": msgpack.packb({None: 1, "verb": "status"}),
    "list key": b"\x81\x90\x01",
    "map key": b"\x81\x80\x01",
    "binary keys": msgpack.packb({b"verb": "status"}),
    "a binary verb": msgpack.packb({"verb": b"status"}),
    "ext": msgpack.packb(msgpack.ExtType(5, b"verb")),
    "an ext verb": msgpack.packb({"verb": msgpack.ExtType(1, b"x")}),
    "a timestamp": msgpack.packb(msgpack.Timestamp(1, 5)),
    "a timestamp verb": msgpack.packb({"verb": msgpack.Timestamp(2**40)}),
    "a bad timestamp": b"\xd7\xff" + b"\xff" * 8,
    "no such verb": msgpack.packb({"verb": "fire"}),
    "a long verb": msgpack.packb({"verb": "x" * 500_000}),
    "bad UTF-8": b"\x81\xa4verb\xa2\xff\xfe",
    "a surrogate": b"\x81\xa4verb\xa3\xed\xa0\x80",
    "deep": nested(500),
    "deeper": nested(1000),
    "deepest": nested(100_000),
    "deep in a value": in_map(nested(900)),
    "deeper in a value": in_map(nested(1010)),
    "deep in a cell": in_map(nested(1000), "swap", "cell"),
    "deep in a text": in_map(nested(1000), "mark", "text"),
    "a giant array": b"\xdd\xff\xff\xff\xff",
    "a giant map": b"\xdf\xff\xff\xff\xff",
    "a giant text": b"\xdb\xff\xff\xff\xffx",
    "a timestamp value": in_map(msgpack.packb(msgpack.Timestamp(1))),
    "a wide value": in_map(b"\xcf" + b"\xff" * 8),
    "a NaN": in_map(b"\xcb\x7f\xf8" + bytes(6)),
    "a NaN in single": in_map(b"\xca\x7f\xc0\x00\x00"),
    "megabyte": msgpack.packb({"verb": "mark", "text": "x" * 900_000}),
    "megabyte argument": msgpack.packb({"verb": "status", "x" * 900_000: 1}),
}


@pytest.mark.parametrize("kind", NO_REQUESTS)
def test_what_is_no_request_is_refused(server, kind):
    """It is answered with ok false and a short reason, and the server lives on."""
    with RawClient(server) as client:
        answer = client.tell(NO_REQUESTS[kind])
        assert answer["ok"] is False
        assert 0 < len(answer["error"]) < 1000
        assert client.tell(msgpack.packb({"verb": "status"}))["ok"] is True
    assert server.control.status()["state"] == "idle"


def test_a_req_is_answered_too(server):
    """A REQ socket gets its answers in turn, refusals included."""
    with RawClient(server, zmq.REQ) as client:
        for _ in range(3):
            assert client.tell(msgpack.packb({"verb": "status"}))["ok"]
            assert client.tell(b"\xc1")["ok"] is False
            assert client.tell(b"")["ok"] is False


def test_frames_before_the_request_come_back(server):
    """Whatever stands before the request's frame is echoed before the answer's."""
    with RawClient(server) as client:
        client.send(b"", b"my number 5", msgpack.packb({"verb": "status"}))
        *before, _ = client.socket.recv_multipart()
        assert before == [b"", b"my number 5"]
        client.send(b"")
        assert client.receive()["ok"] is False


def test_a_message_of_megabytes(server):
    """It may cost its sender the connection; everyone else is served."""
    with RawClient(server) as client:
        client.send(b"x" * 3_000_000)
        assert server.control.status()["ok"]


def test_a_client_that_leaves_before_its_answer(server):
    """Its answer is dropped, and the next client is served."""
    for verb in ("status", "arm", "disarm", "load"):
        client = RawClient(server)
        client.send(msgpack.packb({"verb": verb, **({"model": "leak"} if verb == "load" else {})}))
        client.socket.close(linger=int(1000 * PATIENCE_S))
        client.context.term()
    wait_until(lambda: server.control.status()["cells"][0]["prepared"] == "leak", "the load")
    assert server.control.disarm()["state"] == "idle"


def test_many_clients_at_once(server):
    """Each gets its own answers, in its own order."""
    found: list[list[str]] = []

    def steer(name):
        with Control(server.server.endpoints()["control"], timeout_s=PATIENCE_S) as control:
            found.append([control.mark(f"{name} {n}")["text"] for n in range(50)])

    threads = [threading.Thread(target=steer, args=(f"client {k}",)) for k in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(found) == [[f"client {k} {n}" for n in range(50)] for k in range(4)]


def test_the_clients_methods(serving):
    """Each verb through its method, on a server with a rig: states, values and samples agree."""
    server = serving()
    control = server.control
    with RawRig(server.server.endpoints()["loop"]) as rig:
        assert control.status()["seq"] is None
        assert control.arm()["state"] == "armed"
        assert rig.ask(0, -65.0).flags == LIVE
        answer = control.set("K.gmax_ns", 500)
        assert (answer["value"], answer["seq"]) == (500.0, 0)
        assert control.mark("here")["seq"] == 0
        assert control.load("na-squid")["model"] == "na-squid"
        assert control.swap()["model"] == "na-squid"
        assert control.disarm()["state"] == "idle"
        assert rig.ask(1, math.nan).flags == 0
        assert control.arm(force=True)["forced"] is True
        assert rig.ask(2, math.nan).flags == 8
        with pytest.raises(ControlError, match="tripped"):
            control.arm()
        assert control.reset()["state"] == "idle"
        status = wait_until(
            lambda: (s := control.status())["answered"] == 3 and s, "the last sample told"
        )
    cell = status["cells"][0]
    assert (cell["model"], cell["parameters"]["Na.gmax_ns"]) == ("na-squid", 3600.0)
    assert (status["seq"], status["trips"]) == (2, 1)
    assert status["service_nsec"]["max"] > 0
    assert control.stop()["ok"]
    server.thread.join(PATIENCE_S)
    assert server.result == 0


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("K.gmax_ns", math.nan),
        ("K.gmax_ns", math.inf),
        ("K.gmax_ns", 1e300),
        ("K.gmax_ns", 2**64 - 1),
        ("K.gmax_ns", 10**400),
        ("K.gmax_ns", True),
        ("K.gmax_ns", "5"),
        ("K.gmax_ns", [5.0]),
        ("K.gmax_ns", {"v": 5.0}),
        ("K.gmax_ns", {1, 2}),
        pytest.param("K.gmax_ns", object(), id="object"),
        ("K.gmax_ns", "\ud800"),
        ("\ud800.gmax_ns", 1.0),
        ("Q.gmax_ns", 1.0),
        ("K.n.instances", 1.0),
    ],
    ids=str,
)
def test_wrong_settings_raise_control_errors(server, key, value):
    """Whatever is set wrongly, the script gets a ControlError, and nothing changes."""
    before = server.control.status()["cells"][0]["parameters"]
    with pytest.raises(ControlError, match="set"):
        server.control.set(key, value)
    assert server.control.status()["cells"][0]["parameters"] == before


def test_refusals_raise_control_errors(server):
    """The message is the server's own: what, where, what to do."""
    with pytest.raises(ControlError, match=r"no model is named 'squid-axom'.*squid-axon"):
        server.control.load("squid-axom")
    with pytest.raises(ControlError, match=r"missing\.toml: no such file"):
        server.control.load("./missing.toml")
    with pytest.raises(ControlError, match="cell 'b' is not on this rig; its cells are a"):
        server.control.load("squid-axon", cell="b")
    with pytest.raises(ControlError, match="verb 'fire' is not known"):
        server.control.ask("fire")
    with pytest.raises(ControlError, match="1 to 1000 characters"):
        server.control.mark("")


def test_swap_needs_a_load(serving):
    """A swap with nothing prepared is refused and says what to do."""
    with pytest.raises(ControlError, match="load one first"):
        serving().control.swap()


def test_a_file_is_loaded_from_where_the_caller_stands(serving, tmp_path, monkeypatch):
    """A model file's path is relative to the client's folder, as a person at a shell means it."""
    server = serving()
    (tmp_path / "mine.toml").write_text(
        'title = "x"\nsource = "y"\ntemperature_c = 20\n'
        '[[conductance]]\nname = "own"\ngmax_ns = 1\nreversal_mv = 0\n'
    )
    monkeypatch.chdir(tmp_path)
    assert server.control.load("mine.toml")["model"] == "mine"


def test_loads_that_overlap(serving):
    """A load that meets another under way is refused; the first one still finishes."""
    server = serving()
    with RawClient(server) as client:
        for name in ("squid-axon", "na-squid"):
            client.send(msgpack.packb({"verb": "load", "model": name}))
        answers = [client.receive(), client.receive()]
    assert sorted(a["ok"] for a in answers) == [False, True]
    assert "under way" in next(a["error"] for a in answers if not a["ok"])
    assert server.control.status()["cells"][0]["prepared"] == "squid-axon"


def test_a_set_that_overtakes_a_swap_is_refused(serving):
    """Sent right behind a swap, a set never changes a conductance of the other model."""
    server = serving()
    server.control.load("leak")
    with RawClient(server) as client:
        client.send(msgpack.packb({"verb": "swap"}))
        client.send(msgpack.packb({"verb": "set", "key": "Na.gmax_ns", "value": 0.0}))
        answers = [client.receive(), client.receive()]
    assert sorted(a["ok"] for a in answers) == [False, True]
    assert server.control.status()["cells"][0]["parameters"]["leak.gmax_ns"] == 1.0
    assert server.server._memory.banks[1].gmax_ns[0] == 1.0


def test_an_order_confirmed_late_still_counts(serving, monkeypatch):
    """When the loop confirms a swap after its caller was told to wait no longer.

    The status still names the model that is in force, and loads go into the other bank.
    """
    server = serving()
    server.control.load("leak")
    monkeypatch.setattr(gatestep.server, "_ORDER_WAIT_S", -1.0)
    with RawClient(server) as client:
        answer = client.tell(msgpack.packb({"verb": "swap"}))
        assert answer["ok"] or "in time" in answer["error"]
    monkeypatch.setattr(gatestep.server, "_ORDER_WAIT_S", 3.0)
    wait_until(lambda: server.control.status()["cells"][0]["model"] == "leak", "the swap told")
    assert server.control.load("na-squid")["ok"]
    assert server.server._memory.cells[0].bank == 1
    assert server.server._memory.banks[0].conductances == 1


def test_a_flood_of_orders_never_stands_before_a_disarm(serving):
    """However many orders are sent at once, few wait in line.

    The rest are refused, and disarm goes through.
    """
    server = serving()
    server.control.arm()
    with RawClient(server) as client, RawClient(server) as calm:
        for n in range(800):
            client.send(msgpack.packb({"verb": "mark", "text": str(n)}))
        assert calm.tell(msgpack.packb({"verb": "disarm"}))["state"] == "idle"
        answers = [client.receive() for _ in range(800)]
    assert all(a["ok"] or "waiting already" in a["error"] for a in answers)
    assert sum(a["ok"] for a in answers) > 50
    assert server.control.status()["records_lost"] == 0


def test_no_server_is_a_link_error(tmp_path):
    """Without a server the client says where it asked and how to start one."""
    for endpoint in (f"ipc://{tmp_path}/nobody", "tcp://127.0.0.1:9"):
        with (
            Control(endpoint, timeout_s=0.2) as control,
            pytest.raises(LinkError, match=r"no gatestep server answers.*gatestep serve"),
        ):
            control.status()


@pytest.mark.parametrize("endpoint", ["", "nonsense", "tcp://", "tcp://127.0.0.1", "ftp://a:1"])
def test_what_is_no_endpoint_is_a_link_error(endpoint):
    """The error names the endpoint."""
    with pytest.raises(LinkError, match="control endpoint"):
        Control(endpoint)


def test_another_kind_of_socket_is_a_link_error(server):
    """Pointed at the loop's or the feed's socket, the client says that it is not the control's."""
    ends = server.server.endpoints()
    for name in ("loop", "feed"):
        with (
            Control(ends[name], timeout_s=0.5) as control,
            pytest.raises(LinkError, match=ends[name]),
        ):
            control.status()


@pytest.mark.parametrize(
    "answer", [b"", b"\xc1", b"\x93\x01", msgpack.packb([1]), msgpack.packb(5)]
)
def test_a_stranger_at_the_endpoint_is_a_link_error(tmp_path, answer):
    """What answers but is no gatestep server raises a LinkError, not a traceback."""
    context = zmq.Context()
    stranger = context.socket(zmq.ROUTER)
    endpoint = f"ipc://{tmp_path}/stranger"
    stranger.bind(endpoint)

    def speak():
        peer, _ = stranger.recv_multipart()
        stranger.send_multipart([peer, answer])

    thread = threading.Thread(target=speak)
    thread.start()
    with (
        Control(endpoint, timeout_s=PATIENCE_S) as control,
        pytest.raises(LinkError, match="stranger"),
    ):
        control.status()
    thread.join()
    context.destroy(linger=0)


def test_a_late_answer_is_not_taken_for_the_next(tmp_path):
    """After a time-out the answer that comes late does not answer the next request."""
    context = zmq.Context()
    slow = context.socket(zmq.ROUTER)
    endpoint = f"ipc://{tmp_path}/slow"
    slow.bind(endpoint)

    def speak():
        first, _ = slow.recv_multipart()
        second, body = slow.recv_multipart()
        slow.send_multipart([first, msgpack.packb({"ok": True, "verb": "first"})])
        time.sleep(0.05)
        slow.send_multipart([second, msgpack.packb({"ok": True, **msgpack.unpackb(body)})])

    thread = threading.Thread(target=speak)
    thread.start()
    with Control(endpoint, timeout_s=0.2) as control:
        with pytest.raises(LinkError):
            control.ask("first")
        control.timeout_s = PATIENCE_S
        assert control.ask("second")["verb"] == "second"
    thread.join()
    context.destroy(linger=0)


def test_certificates_that_are_none(tmp_path):
    """CURVE files that are missing or hold no secret key are errors that name them."""
    import zmq.auth

    public, secret = zmq.auth.create_certificates(tmp_path, "client")
    with pytest.raises(FileError, match="CURVE"):
        Control("tcp://127.0.0.1:9", curve_server=tmp_path / "no", curve_client=secret)
    with pytest.raises(FileError, match="no secret key"):
        Control("tcp://127.0.0.1:9", curve_server=public, curve_client=public)
