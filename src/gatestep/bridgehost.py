"""A serial device in a loop with a server: greeting, carrying, and coming back from losses.

The line is opened, the device told to say hello, and when it does, the server is connected
to and the device welcomed; :func:`gatestep.bridge.carry` does the rest. When the server goes,
the device is told so, and each of its hellos, four a second at most, is a new attempt. When
the device goes, the connection to the server ends, so that the loop knows, and the line is
opened again as soon as the device is there. No answer is ever made here: a device that gets
none goes to 0 pA by its own time-out.

Source: ``firmware_bridge/SPEC.md``, "How a line opens".
"""

from __future__ import annotations

import re
import socket
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np

from .bridge import SEND_BUFFER, Status, carry, make_memory, take_line, take_server
from .bridgefigures import percentiles
from .bridgeline import Line
from .dealer import connect
from .errors import LinkError
from .serialframes import MAJOR, MINOR, Kind, Reason, encode_frame

_ENDPOINT = re.compile(r"tcp://[^/]+:\d{1,5}|ipc://.+")
_CONNECT_S = 1.0
_BETWEEN_ATTEMPTS_S = 0.25
SAID_BEFORE_S = 0.08
"""A hello so soon after the welcome crossed it; devices repeat theirs every 0.1 s."""
_LOOK_FOR_DEVICE_S = 0.1
_MAX_CELLS = 8
_FOR_A_SERVER = 1
_COUNTERS = (
    "samples",
    "answers",
    "unserved",
    "dropped",
    "overtaken",
    "malformed",
    "garbled",
    "passed",
)


@dataclass(frozen=True)
class Hello:
    """What a device says of itself."""

    major: int
    minor: int
    cells: int
    interval_us: float
    features: int


@dataclass(frozen=True)
class Expected:
    """What a rig file says the device is; None where there is none to say."""

    cells: int | None = None
    interval_us: float | None = None


class Bridge:
    """Carries samples and answers between a device and a server until it is halted.

    Parameters
    ----------
    device, baud
        As for :class:`gatestep.bridgeline.Line`.
    endpoint : str
        The server's loop endpoint, without CURVE.
    say : callable
        Told in words of everything that happens.
    expected : Expected
        A device with another number of cells is refused, another tick is told of.

    Raises
    ------
    MissingExtraError, LinkError
        As :class:`gatestep.bridgeline.Line` does: the device must be there to begin with; and
        for an endpoint that is none.
    """

    def __init__(
        self,
        device: str,
        baud: int,
        endpoint: str,
        say: Callable[[str], None],
        expected: Expected | None = None,
    ) -> None:
        if not _ENDPOINT.fullmatch(endpoint):
            raise LinkError(f"endpoint {endpoint!r} is not tcp://ADDRESS:PORT or ipc://PATH")
        self.device, self.baud, self.endpoint, self._say = device, baud, endpoint, say
        self._expected = expected or Expected()
        self._memory = make_memory()
        self._line: Line | None = Line(device, baud)
        self._server: socket.socket | None = None
        self._attempt_s = self._welcomed_s = self._goodbye_s = -1e9
        self._told = ""
        self._state, self.openings, self.connections = "greeting", 0, 0
        self._fault: BaseException | None = None
        self._memory.bridge[0].halt = 1
        carry(self._memory)  # compiles it, before anyone waits
        self._memory.bridge[0].halt = 0
        self._thread = threading.Thread(target=self._work, name="bridge")

    def start(self) -> None:
        """Begin, on a thread of its own."""
        self._thread.start()

    @property
    def running(self) -> bool:
        """Whether it still carries or waits for whom it could carry for."""
        return self._thread.is_alive()

    def halt(self) -> None:
        """Say goodbye to the device, which then is at 0 pA, and end.

        Raises
        ------
        BaseException
            What ended the bridge before, if anything did.
        """
        self._memory.bridge[0].halt = 1
        if self._thread.ident is not None:
            self._thread.join()
        self._close_server()
        self._close_line()
        if self._fault is not None:
            raise self._fault

    def figures(self) -> dict[str, Any]:
        """State, counters since the start, and the latency added in each direction, in ns."""
        bridge = self._memory.bridge[0]
        return {
            "device": self.device,
            "baud": self.baud,
            "endpoint": self.endpoint,
            "state": self._state,
            "openings": self.openings,
            "connections": self.connections,
            **{name: int(bridge[name]) for name in _COUNTERS},
            "damaged": int(self._memory.unframer[0].damaged),
            "added_nsec": {
                "to_server": percentiles(np.array(bridge.sample_counts)),
                "to_device": percentiles(np.array(bridge.answer_counts)),
            },
        }

    # ---- on the bridge's own thread ----

    def _work(self) -> None:
        try:
            while not self._halted:
                if self._line is None and not self._look_for_device():
                    time.sleep(_LOOK_FOR_DEVICE_S)
                    continue
                self._serve_line()
        except BaseException as fault:  # noqa: BLE001, RUF100 - told to whoever halts
            self._fault = fault

    @property
    def _halted(self) -> bool:
        return bool(self._memory.bridge[0].halt)

    def _look_for_device(self) -> bool:
        """Open the line if it is there again."""
        try:
            self._line = Line(self.device, self.baud)
        except LinkError as fault:
            # A device that is just being made may not be ours yet.
            self._say_once(str(fault))
            return False
        self._say(f"{self.device} is back")
        return True

    def _serve_line(self) -> None:
        """Everything from the line's opening until it is gone."""
        line = self._line
        assert line is not None
        self.openings += 1
        self._state = "greeting"
        take_line(self._memory, line.reading, line.writing)
        self._say_goodbye(None)
        while True:
            status = Status(carry(self._memory))
            if status == Status.CONTROL:
                self._control()
            elif status == Status.SERVER_GONE:
                self._lose_server()
            else:
                break
        if status == Status.HALTED:
            self._take_leave(line)
        else:
            self._lose_line()

    def _take_leave(self, line: Line) -> None:
        """Our last words; those before are dropped, and a 0 ends what was half written."""
        self._state = "stopped"
        try:
            line.write(b"\0" + _goodbye(Reason.HOST_STOPS))
        except LinkError as fault:
            self._say(f"the device could not be told goodbye: {fault}")

    def _lose_line(self) -> None:
        self._say(f"{self.device} is gone; waiting for it to come back")
        self._state = "no device"
        self._close_server()
        self._close_line()

    def _lose_server(self) -> None:
        self._close_server()
        self._say(f"{self.endpoint}: the server is gone; the device is told to go to 0 pA")
        self._state, self._told = "no server", ""
        self._say_goodbye(Reason.SERVER_GONE)

    def _control(self) -> None:
        """A hello or a goodbye has come, or a sample of a device that is not welcome."""
        unframer = self._memory.unframer[0]
        body = unframer.bytes[: unframer.length - 2].tobytes()
        if body[0] == Kind.SAMPLE:
            self._repeat_goodbye()
        elif body[0] == Kind.BYE:
            if self._server is not None:
                self._say("the device said goodbye; its connection to the server ends")
            self._close_server()
            self._state = "greeting"
        elif (hello := read_hello(body[1:])) is None:
            self._say_once("the device's hello cannot be read")
        elif (refusal := self._refusal(hello)) is not None:
            self._refuse(*refusal)
        else:
            self._welcome(hello)

    def _refusal(self, hello: Hello) -> tuple[Reason, str] | None:
        """Why a device cannot be served, if it cannot."""
        if hello.major != MAJOR:
            return Reason.VERSION, (
                f"the device speaks framing {hello.major}.{hello.minor}, this is {MAJOR}.{MINOR}; "
                "build its firmware with this version's device library"
            )
        if not hello.features & _FOR_A_SERVER:
            return Reason.NONE, (
                "the device has a model of its own and takes no samples for a server; "
                "use gatestep supervise"
            )
        wanted = self._expected.cells
        if not 1 <= hello.cells <= _MAX_CELLS or (wanted is not None and hello.cells != wanted):
            return Reason.CELLS, (
                f"the device has {hello.cells} cells, "
                + (f"the rig file {wanted}" if wanted is not None else f"1 to {_MAX_CELLS} can be")
            )
        return None

    def _refuse(self, reason: Reason, why: str) -> None:
        """No for an answer; not to every hello, for each goodbye brings another."""
        if not self._may_try():
            return
        self._say_once(f"refused: {why}")
        self._close_server()
        self._say_goodbye(reason)

    def _repeat_goodbye(self) -> None:
        """The last one was lost, or its samples are older: without a bye it never says hello."""
        if time.monotonic() - self._goodbye_s >= _BETWEEN_ATTEMPTS_S:
            self._say_goodbye(None)

    def _say_goodbye(self, reason: Reason | None) -> None:
        """A goodbye on its way, after a 0 that ends what was damaged before it."""
        self._goodbye_s = time.monotonic()
        self._put(b"\0" + (encode_frame(Kind.BYE) if reason is None else _goodbye(reason)))

    def _may_try(self) -> bool:
        now = time.monotonic()
        if now - self._attempt_s < _BETWEEN_ATTEMPTS_S:
            return False
        self._attempt_s = now
        return True

    def _welcome(self, hello: Hello) -> None:
        """Connect to the server and welcome the device.

        After samples, a hello is of a device that has started anew. Before any, it was said
        before the welcome came, and a second welcome would only void what the device has
        begun; or, if some time has passed, the welcome was lost.
        """
        if self._server is None or self._memory.bridge[0].since_welcome:
            if self._server is not None:
                self._say("the device has started anew")
            if not self._connect(hello):
                return
        elif time.monotonic() - self._welcomed_s < SAID_BEFORE_S:
            return
        self._welcomed_s = time.monotonic()
        self._put(encode_frame(Kind.WELCOME, msgpack.packb([MAJOR, MINOR, hello.cells])))
        self._memory.bridge[0].welcomed = 1
        self._state = "carrying"

    def _connect(self, hello: Hello) -> bool:
        self._close_server()
        if not self._may_try():
            return False
        try:
            self._server = connect(self.endpoint, _CONNECT_S)
        except (LinkError, ValueError, OverflowError) as fault:  # the last two: of its address
            self._state = "no server"
            self._say_once(f"{fault}; tried again at each hello of the device")
            self._say_goodbye(Reason.SERVER_GONE)
            return False
        self._server.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, SEND_BUFFER)
        take_server(self._memory, self._server.fileno())
        self.connections += 1
        self._told = ""
        self._say(f"{self.device}: {_described(hello)}, in a loop with {self.endpoint}")
        self._compare_tick(hello)
        return True

    def _compare_tick(self, hello: Hello) -> None:
        wanted = self._expected.interval_us
        if wanted is not None and abs(hello.interval_us - wanted) > 0.01 * wanted:
            self._say(
                f"the device's tick is {hello.interval_us:g} µs and the rig file's {wanted:g} µs; "
                "the server will trip: make them the same"
            )

    def _put(self, frames: bytes) -> None:
        """Frames on their way to the device, after what is half written and before all else."""
        bridge = self._memory.bridge[0]
        bridge.held_answer = 0
        end = int(bridge.line_end)
        if end + len(frames) > bridge.outgoing.size:
            return  # a device that has read nothing for so long hears nothing
        bridge.outgoing[end : end + len(frames)] = np.frombuffer(frames, np.uint8)
        bridge.line_end = end + len(frames)

    def _close_server(self) -> None:
        take_server(self._memory, -1)
        if self._server is not None:
            self._server.close()
            self._server = None

    def _close_line(self) -> None:
        take_line(self._memory, -1, -1)
        if self._line is not None:
            self._line.close()
            self._line = None

    def _say_once(self, text: str) -> None:
        """Say what is tried over and over only when it has changed."""
        if text != self._told:
            self._say(text)
            self._told = text


def _goodbye(reason: Reason) -> bytes:
    return encode_frame(Kind.BYE, msgpack.packb([int(reason)]))


def _described(hello: Hello) -> str:
    cells = "one cell" if hello.cells == 1 else f"{hello.cells} cells"
    return f"a device with {cells} at {hello.interval_us:g} µs"


def read_hello(payload: bytes) -> Hello | None:
    """What a hello says, or None when it is none; items that are not known are passed over."""
    try:
        items = msgpack.unpackb(payload)
    except (ValueError, TypeError, msgpack.exceptions.UnpackException):
        return None
    if not isinstance(items, list) or len(items) < 5:
        return None
    whole = [type(item) is int and item >= 0 for item in (*items[:3], items[4])]
    if not all(whole) or type(items[3]) not in (int, float):
        return None
    return Hello(items[0], items[1], items[2], float(items[3]), items[4])
