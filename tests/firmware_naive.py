"""The device by its description, in plain Python: what the C library is held against.

Written from ``gsb_rig.h``, ``gsb_error.h`` and ``SPEC.md``. It keeps every sample and every
answer, parses whole streams by slicing, and is given the log of what the port's callbacks
saw: which bytes came, and when and how each write went.
"""

from __future__ import annotations

import binascii
from collections import deque
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np
import zmtp_reference as rfc

HELLO_US = 100_000
IDLE, GREETING, RUNNING, SILENT = range(4)
LIVE = 1
ENDS_LINK = ("link", "protocol", "peer", "greeting")

F32 = np.float32


@dataclass(frozen=True)
class Setting:
    """What a device was configured with; one entry a cell in the lists."""

    serial: bool
    on_arrival: bool
    interval_us: int
    silence_us: int
    limit_pa: tuple[float, ...]
    slew_pa_per_ms: tuple[float, ...]
    window_mv: tuple[float, float]
    room: int
    ring: int
    greeting_us: int = 0

    @property
    def cells(self) -> int:
        return len(self.limit_pa)

    @property
    def silence_ticks(self) -> int:
        """Ticks without a valid answer that are no silence yet."""
        return -(-self.silence_us // self.interval_us) + 1


def cobs(data: bytes) -> bytes:
    """COBS of fewer than 254 bytes."""
    return b"".join(bytes([len(run) + 1]) + run for run in data.split(b"\0"))


def frame(kind: int, payload: bytes) -> bytes:
    """A serial frame."""
    body = bytes([kind]) + payload
    return cobs(body + binascii.crc_hqx(body, 0xFFFF).to_bytes(2, "big")) + b"\0"


def unframe(between: bytes) -> tuple[int, bytes] | None:
    """Kind and payload of what stands between two zeros; None when it is damaged."""
    out = b""
    while between:
        code, run, between = between[0], between[1 : between[0]], between[between[0] :]
        if len(run) < code - 1:
            return None
        out += run + (b"\0" if code < 255 and between else b"")
    if not 3 <= len(out) <= 253 or binascii.crc_hqx(out, 0xFFFF):
        return None
    return out[0], out[1:-2]


def read_answer(data: bytes, cells: int) -> tuple[int | None, int, list[np.float32]] | None:
    """``(seq, flags, currents)`` of an answer, None when it is none."""
    try:
        items = msgpack.unpackb(data, strict_map_key=False)
    except (ValueError, TypeError, msgpack.exceptions.UnpackException):
        return None
    if not isinstance(items, list) or len(items) < 3:
        return None
    short = len(items) == 3 and items[0] is None
    wholes = items[1:3] if short else items[:3]
    if not short and len(items) != 3 + cells:
        return None
    if not all(type(w) is int and 0 <= w < 2**63 for w in wholes):
        return None
    if not all(type(i) in (int, float) for i in items[3:]):
        return None
    with np.errstate(over="ignore", under="ignore"):
        return items[0], items[1], [F32(float(i)) for i in items[3:]]


class MismatchError(AssertionError):
    """The library did something else than its description."""


class Naive:
    """The device. ``now`` is its clock as the log has let it see it."""

    def __init__(self, setting: Setting, now: int) -> None:
        self.set, self.now = setting, now
        self.state, self.broken, self.opened = IDLE, True, False
        self.taken: dict[int, int] = {}
        self.next_seq, self.valid_from, self.newest = 0, 0, -1
        self.due_nsec: int | None = None
        self.ticked: int | None = None
        self.unanswered = 0
        self.since = 0
        self.i_pa = [F32(0)] * setting.cells
        self.waiting: tuple[int, list[np.float32] | None] | None = None
        self.applied: int | None = None
        self.changed, self.heard, self.greeted = 0, 0, now
        self.in_force: int | None = None
        self.lag_us: int | None = None
        self.due = self.fresh = True
        self.out, self.stream = b"", b""
        self.phase = ""
        self.log: deque[Any] = deque()

    # ---- the output ----

    def zero(self) -> None:
        self.i_pa = [F32(0)] * self.set.cells
        self.waiting = self.applied = self.in_force = self.lag_us = None
        self.due = self.fresh = True
        self.changed, self.valid_from = self.now, self.next_seq

    def fault(self, what: str) -> None:
        self.zero()
        if what in ENDS_LINK:
            self.since = self.now
            self.state, self.broken, self.opened = IDLE, True, False

    def apply(self, seq: int, currents: list[np.float32] | None) -> None:
        """Let an answer flow; one without currents is not live and waits for no slew limit."""
        span = F32(min(self.now - self.changed, self.set.interval_us))
        clipped = False
        if currents is None:
            self.i_pa = [F32(0)] * self.set.cells
        for k, asked in enumerate(currents or []):
            step = F32(self.set.slew_pa_per_ms[k]) * span * F32(1e-3)
            limit, last = F32(self.set.limit_pa[k]), self.i_pa[k]
            low, high = max(last - step, -limit), min(last + step, limit)
            self.i_pa[k] = min(max(asked, low), high)
            clipped = clipped or bool(self.i_pa[k] != asked)
        self.changed, self.waiting = self.now, None
        self.due = self.fresh = True
        self.applied = None if clipped else seq

    def write(self) -> None:
        """Follow the log's writes: one at least for what is new, and one more if it fails."""
        for _ in range(2):
            if not (self.due and (self.fresh or (self.log and self.log[0][0] == "write"))):
                return
            kind, i_pa, after, sound = self.take("write")
            self.fresh = False
            if [F32(i) for i in i_pa] != self.i_pa:
                raise MismatchError(f"{kind}: {i_pa} written, {self.i_pa} expected")
            self.now = after
            if sound:
                self.due = False
                self.in_force = self.applied
                taken = None if self.applied is None else self.taken[self.applied]
                self.lag_us = None if taken is None else after - taken
            else:
                self.fault("output")
                self.fresh = False

    def take(self, kind: str) -> Any:
        if not self.log or self.log[0][0] != kind:
            raise MismatchError(f"{kind} expected, the log goes on with {list(self.log)[:1]}")
        return self.log.popleft()

    # ---- what the caller calls ----

    def begin(self, now: int, log: list[Any]) -> None:
        self.now, self.log = now, deque(log)

    def end(self) -> None:
        if self.log:
            raise MismatchError(f"not expected: {self.log[0]}")

    def init(self, log: list[Any]) -> None:
        self.begin(self.now, log)
        self.write()
        self.end()

    def connect(self, now: int, log: list[Any]) -> None:
        self.begin(now, log)
        self.zero()
        self.state, self.broken, self.opened = GREETING, False, False
        self.since = now
        self.stream, self.phase, self.greeted = b"", "greeting", now
        self.out = b""
        if self.set.serial:
            self.put(b"\0")
            self.hello()
        else:
            self.put(rfc.greeting())
        self.write()
        self.send()
        self.end()

    def tick(self, now: int, v_mv: list[float], log: list[Any]) -> None:
        self.begin(now, log)
        sample = [0, now, self.in_force, self.lag_us, *(float(F32(v)) for v in v_mv)]
        self.unanswered += 1
        self.check_time()
        seq = sample[0] = self.count(now)
        self.next_seq, self.taken[seq] = seq + 1, now
        still, self.ticked = self.ticked == now, now
        low, high = self.set.window_mv
        if still:
            self.fault("clock")
        elif not all(low <= v <= high for v in v_mv):
            self.fault("voltage")
        elif self.waiting and self.state == RUNNING:
            self.apply(*self.waiting)
        self.write()
        if self.opened:
            data = msgpack.packb(sample, use_single_float=True)
            sent = frame(0x10, data) if self.set.serial else rfc.frame(data)
            if not self.put(sent):
                self.fault("room")
                self.write()
            else:
                self.send()
        self.end()

    def count(self, now: int) -> int:
        """The number of a tick: the nearest of a schedule that goes after the clock."""
        interval = 1000 * self.set.interval_us
        if self.due_nsec is None:
            self.due_nsec = 1000 * now
        past = max(0, (1000 * now - self.due_nsec + interval // 2) // interval)
        off = 1000 * now - (self.due_nsec + past * interval)
        # An eighth of what the tick is off, to the whole nanosecond towards 0.
        self.due_nsec += (past + 1) * interval + (off // 8 if off > 0 else -(-off // 8))
        return self.next_seq + past

    def poll(self, now: int, log: list[Any]) -> None:
        self.begin(now, log)
        self.check_time()
        self.write()
        while not self.broken and self.log and self.log[0][0] in ("received", "gone"):
            kind, data = self.log.popleft()
            if kind == "gone":
                self.fault("link")
                self.write()
                break
            self.stream += data
            while not self.broken and self.step():
                self.write()
            self.write()
        if self.state == GREETING and self.now - self.greeted >= HELLO_US:
            self.greeted = self.now
            if self.set.serial:
                self.hello()
        self.send()
        self.end()

    # ---- the link ----

    def put(self, data: bytes) -> bool:
        if len(self.out) + len(data) > self.set.room:
            return False
        self.out += data
        return True

    def hello(self) -> None:
        items = [1, 0, self.set.cells, float(self.set.interval_us), 1]
        self.put(frame(1, msgpack.packb(items, use_single_float=True)))

    def send(self) -> None:
        if not self.out or self.broken:
            return
        _, data = self.take("sent")
        if data is None:
            self.fault("link")
            self.write()
            return
        if not self.out.startswith(data):
            raise MismatchError(f"sent {data.hex(' ')}, expected {self.out.hex(' ')}")
        self.out = self.out[len(data) :]

    def step(self) -> bool:
        """One event of the stream; False when nothing more is whole."""
        if self.set.serial:
            between, zero, rest = self.stream.partition(b"\0")
            if zero:
                self.stream = rest
                self.serial_frame(between)
            return bool(zero)
        return self.zmtp_step()

    def serial_frame(self, between: bytes) -> None:
        if not between:
            return
        found = unframe(between)
        if found is None:
            self.fault("frame")
            self.write()
            return
        kind, payload = found
        if kind == 0x11 and self.opened:
            self.answer(payload)
        elif kind == 0x02:
            self.welcome(payload)
        elif kind == 0x03:
            self.opened = False
            self.hello()
            self.zero()
            self.state, self.since = GREETING, self.now

    def welcome(self, payload: bytes) -> None:
        """Only sound ones are sent here, or those of another number of cells."""
        major, _, cells = msgpack.unpackb(payload)
        self.opened = (major, cells) == (1, self.set.cells)
        if self.opened:
            self.run()
        else:
            self.fault("another number of cells")
            self.state, self.since = GREETING, self.now

    def run(self) -> None:
        self.zero()
        self.state, self.heard, self.unanswered = RUNNING, self.now, 0

    def zmtp_step(self) -> bool:
        if self.phase == "greeting":
            if len(self.stream) < 64:
                return False
            self.stream, self.phase = self.stream[64:], "ready"
            self.put(rfc.ready(b"DEALER"))
            return True
        split = rfc._split(self.stream)
        if split is None:
            return False
        if isinstance(split, str):
            raise MismatchError("the fake host keeps to ZMTP's framing")
        _, body, self.stream = split
        if self.phase == "ready":
            self.phase, self.opened = "open", True
            self.run()
        else:
            self.answer(body)
        return True

    # ---- answers ----

    def check_time(self) -> None:
        late = self.now - self.heard >= self.set.silence_us
        if self.state == RUNNING and (late or self.unanswered > self.set.silence_ticks):
            self.state = SILENT
            self.fault("silence")
        elif self.state == GREETING and 0 < self.set.greeting_us <= self.now - self.since:
            self.fault("greeting")

    def answer(self, data: bytes) -> None:
        found = read_answer(data, self.set.cells)
        if found is None:
            self.fault("message")
            self.write()
            return
        seq, flags, currents = found
        self.check_time()
        if self.state not in (RUNNING, SILENT):
            return
        if seq is None:
            self.fault("rejected")
        elif flags & LIVE and not all(np.isfinite(i) for i in currents):
            self.fault("not finite")
        elif seq >= self.next_seq:
            self.fault("sequence")
        elif seq > self.newest and seq >= self.valid_from:
            self.newer(seq, currents if flags & LIVE else None)

    def newer(self, seq: int, currents: list[np.float32] | None) -> None:
        if self.next_seq - seq > self.set.ring:
            return
        if seq not in self.taken:
            self.fault("sequence")
            return
        if self.now - self.taken[seq] >= self.set.silence_us:
            return
        if self.next_seq - seq > self.set.silence_ticks:
            return
        self.newest, self.heard, self.state, self.unanswered = seq, self.now, RUNNING, 0
        if self.set.on_arrival or (currents is None and any(self.i_pa)):
            self.apply(seq, currents)
        else:
            self.waiting = (seq, currents)
