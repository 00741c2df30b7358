"""The supervisor of a model that runs on the device itself, over its serial line.

The device steps the model and bounds its current; here its parameters are read and set, it
is armed and disarmed, told that somebody is there, and its thinned samples are taken.

Source: ``firmware_bridge/SPEC.md``, "A model on the device".
"""

from __future__ import annotations

import secrets
import time
from collections.abc import Callable
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Self

import msgpack

from .bridgehost import SAID_BEFORE_S, Hello, read_hello
from .bridgeline import Line
from .errors import ControlError, LinkError
from .serialframes import MAJOR, MINOR, Deframer, Frame, Kind, Reason, encode_frame

STATES = ("disarmed", "armed", "tripped")
ALIVE_S = 0.03
"""How often the device is told that we are there: for time-outs from 0.1 s on."""
EVERY = "trace.every_ticks"
_MODEL = 2
_GREETING_S = 5.0
_BETWEEN_GOODBYES_S = 0.25
_ANSWER_S = 0.25
_TRIES = 8
_CODES = {
    1: "no such parameter, or a value that it cannot have",
    3: "what was ordered cannot be read",
    10: "the voltage is outside its window",
    11: "its converter cannot be read",
    12: "its converter cannot be written",
    15: "its clock is not right",
    17: "it was stopped, or the line was lost, before it could",
}


@dataclass(frozen=True)
class Trace:
    """One thinned sample of the device."""

    seq: int
    t_us: int
    state: int
    v_mv: tuple[float, ...]
    i_pa: tuple[float, ...]


@dataclass
class Parameter:
    """A parameter of the model on the device."""

    index: int
    name: str
    value: float


class Supervisor:
    """Greets a device and supervises its model until closed.

    Parameters
    ----------
    line : Line
        Stays the caller's.
    take : callable
        Given every thinned sample as it comes.

    Raises
    ------
    LinkError
        When nothing answers, what answers has no model or another version of the framing.
    """

    def __init__(self, line: Line, take: Callable[[Trace], None]) -> None:
        self._line, self._take = line, take
        self._deframer = Deframer()
        # No token of whoever was here before: the device would take it for a repeat.
        self._token = secrets.randbelow(1 << 30)
        self._alive_s = self._welcomed_s = 0.0
        self._answered = False
        self.state: str | None = None
        self.hello = self._greet()
        self.parameters = self._ask_all()

    @property
    def damaged(self) -> int:
        """Frames that were dropped."""
        return self._deframer.damaged

    def set(self, name: str, value: float) -> None:
        """Set a parameter, such as ``K.gmax_ns``; the device keeps it as float32.

        Raises
        ------
        ControlError
            When there is none of that name, or the device refuses the value.
        LinkError
            When the device is gone or does not answer.
        """
        if name not in self.parameters:
            known = ", ".join(self.parameters)
            raise ControlError(f"set: the device has no {name!r}; it has {known}")
        parameter = self.parameters[name]
        self._order(Kind.PARAMETER, f"set {name}={value:g}", parameter.index, float(value))
        self.parameters[name] = self._ask(parameter.index)[0]

    def arm(self) -> None:
        """Let the model's current flow; raises as :meth:`set` does."""
        self._order(Kind.ARM, "arm")

    def disarm(self) -> None:
        """Go to 0 pA, and out of a trip; raises as :meth:`set` does."""
        self._order(Kind.DISARM, "disarm")

    def attend(self, seconds: float) -> None:
        """Be there for so long: take samples, tell the device that we are.

        Raises
        ------
        LinkError
            When the device is gone or has started anew.
        """
        end = time.monotonic() + seconds
        while (left := end - time.monotonic()) > 0:
            self._frames(min(left, ALIVE_S))

    def close(self) -> None:
        """Disarm and say goodbye, each if the device still hears it."""
        try:
            self.disarm()
        finally:
            self._line.write(b"\0" + _frame(Kind.BYE, int(Reason.HOST_STOPS)))

    def _greet(self) -> Hello:
        end = time.monotonic() + _GREETING_S
        said_s = 0.0
        while (now := time.monotonic()) < end:
            # A device that runs from before says hello only to a bye, and one may be lost.
            if now - said_s >= _BETWEEN_GOODBYES_S:
                self._line.write(b"\0" + encode_frame(Kind.BYE))
                said_s = now
            for frame in self._frames(0.1):
                hello = read_hello(frame.payload) if frame.kind == Kind.HELLO else None
                if hello is not None:
                    self._check(hello)
                    self._welcome(hello.cells)
                    return hello
        raise LinkError(
            f"{self._line.device}: no hello in {_GREETING_S:g} s; is it the right device, "
            f"and does it run at {self._line.baud} baud?"
        )

    def _welcome(self, cells: int) -> None:
        self._welcomed_s = time.monotonic()
        self._line.write(_frame(Kind.WELCOME, MAJOR, MINOR, cells))

    def _hello_again(self, hello: Hello | None) -> None:
        """Before its first answer, a hello crossed the welcome or asks for one that was lost."""
        if hello is None:
            return
        if self._answered:
            raise LinkError(
                f"{self._line.device} has started anew: it is disarmed, and its parameters "
                "are those of its firmware; begin again"
            )
        if self._welcomed_s and time.monotonic() - self._welcomed_s > SAID_BEFORE_S:
            self._welcome(hello.cells)

    def _check(self, hello: Hello) -> None:
        device = self._line.device
        if hello.major != MAJOR:
            self._line.write(_frame(Kind.BYE, int(Reason.VERSION)))
            raise LinkError(
                f"{device}: speaks framing {hello.major}.{hello.minor}, this is {MAJOR}.{MINOR}; "
                "build its firmware with this version's device library"
            )
        if not hello.features & _MODEL:
            raise LinkError(f"{device}: has no model of its own; use gatestep bridge {device}")

    def _ask_all(self) -> dict[str, Parameter]:
        first, count = self._ask(0)
        found = [first, *(self._ask(k)[0] for k in range(1, count))]
        return {parameter.name: parameter for parameter in found}

    def _ask(self, index: int) -> tuple[Parameter, int]:
        """A parameter, and how many there are."""
        items = self._exchange(Kind.ASK, Kind.IS, "ask for a parameter", index)
        if len(items) < 5 or not isinstance(items[3], str):
            raise LinkError(f"{self._line.device}: what it says of parameter {index} is none")
        return Parameter(index, items[3], float(items[4])), int(items[2])

    def _order(self, kind: Kind, words: str, *arguments: Any) -> None:
        items = self._exchange(kind, Kind.DONE, words, *arguments)
        code = items[1] if len(items) > 1 else None
        if code != 0:
            why = _CODES.get(code, "see gsb_error.h") if isinstance(code, int) else "no code"
            raise ControlError(f"{words}: the device refuses it (error {code}: {why})")

    def _exchange(self, kind: Kind, reply: Kind, words: str, *arguments: Any) -> list[Any]:
        """Send an order until it is answered: the device does one of a token only once."""
        self._token += 1
        for _ in range(_TRIES):
            self._line.write(_frame(kind, self._token, *arguments))
            end = time.monotonic() + _ANSWER_S
            while (left := end - time.monotonic()) > 0:
                for frame in self._frames(min(left, ALIVE_S)):
                    items = _items(frame)
                    if frame.kind in {reply, Kind.DONE} and items[:1] == [self._token]:
                        self._answered = True
                        if frame.kind == reply:
                            return items
                        raise ControlError(f"{words}: the device refuses it ({items[1:]})")
        raise LinkError(f"{words}: {self._line.device} does not answer; take it off the cell")

    def _frames(self, timeout_s: float) -> list[Frame]:
        """What comes within a time; thinned samples among it are taken."""
        now = time.monotonic()
        if self._welcomed_s and now - self._alive_s >= ALIVE_S:
            self._alive_s = now
            self._line.write(encode_frame(Kind.ALIVE))
        frames = self._deframer.feed(self._line.read(timeout_s))
        for frame in frames:
            if frame.kind == Kind.TRACE and (trace := read_trace(frame.payload)) is not None:
                self.state = STATES[trace.state] if trace.state < len(STATES) else "unknown"
                self._take(trace)
            elif frame.kind == Kind.HELLO:
                self._hello_again(read_hello(frame.payload))
        return frames

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        try:
            self.close()
        except (LinkError, ControlError):
            # What ended the supervision before says more.
            if fault is None:
                raise


def _frame(kind: Kind, *items: Any) -> bytes:
    return encode_frame(kind, msgpack.packb(list(items)))


def _items(frame: Frame) -> list[Any]:
    """The items of a frame's array; none when it is no array."""
    try:
        items = msgpack.unpackb(frame.payload)
    except (ValueError, TypeError, msgpack.exceptions.UnpackException):
        return []
    return items if isinstance(items, list) else []


def read_trace(payload: bytes) -> Trace | None:
    """A thinned sample, or None when the bytes are none."""
    items = _items(Frame(Kind.TRACE, payload))
    whole = [type(item) is int and item >= 0 for item in items[:3]]
    numbers = items[3:]
    if len(items) < 5 or len(numbers) % 2 or not all(whole):
        return None
    if not all(type(number) in (int, float) for number in numbers):
        return None
    values = tuple(float(number) for number in numbers)
    return Trace(items[0], items[1], items[2], values[::2], values[1::2])
