"""A fake board, line and host around the real C library, all faults drawn from one seed.

The line drops, delays, reorders, duplicates, truncates and corrupts; converters saturate,
stick, go non-finite and fail; the clock wraps; ticks come late or not at all.
"""

from __future__ import annotations

import ctypes
import math
import random
from dataclasses import dataclass
from typing import Any

import msgpack
import zmtp_reference as rfc
from firmware_build import NOW, READ, SEND, STATES, Config, Limits, Port, library
from firmware_naive import Setting, frame, unframe

WRAP = 2**32
CLOCK_RATES = (0.0, 0.1, 0.7, 0.999, 1.0, 1.0, 1.00005, 1.01, 3.0)
RAIL = math.nan  # what gsb_adc_mv gives at either end of the range


@dataclass(frozen=True)
class Rates:
    """How often each thing goes wrong, 0 to 1."""

    drop: float = 0.0
    duplicate: float = 0.0
    corrupt: float = 0.0
    truncate: float = 0.0
    delay: float = 0.0
    """Share of answers that take longer, up to three silence time-outs; so they reorder."""
    nonsense: float = 0.0
    """Share of answers that a server would never send."""
    input_fault: float = 0.0
    output_fault: float = 0.0
    missed_tick: float = 0.0
    lost_link: float = 0.0
    stall: float = 0.0
    """Share of sends that take nothing."""
    odd_clock: float = 0.0
    """Share of ticks from which on the device's clock runs at another rate, or stands still."""


class Converter:
    """Voltages that wander, and now and then do what voltages should not."""

    def __init__(self, rng: random.Random, rates: Rates, cells: int) -> None:
        self.rng, self.rates = rng, rates
        self.v_mv = [-65.0] * cells
        self.stuck = 0

    def read(self) -> list[float] | None:
        if self.stuck:
            self.stuck -= 1
            return list(self.v_mv)
        self.v_mv = [rng_mv(self.rng) for _ in self.v_mv]
        if self.rng.random() < self.rates.input_fault:
            return self._faulty()
        return list(self.v_mv)

    def _faulty(self) -> list[float] | None:
        fault = self.rng.choice(["stick", "rail", "infinite", "window", "broken"])
        if fault == "broken":
            return None
        if fault == "stick":
            self.stuck = self.rng.randrange(1, 30)
            return list(self.v_mv)
        wrong = {"rail": RAIL, "infinite": -math.inf, "window": 250.0}[fault]
        place = self.rng.randrange(len(self.v_mv))
        return [wrong if k == place else v for k, v in enumerate(self.v_mv)]

    def write(self) -> bool:
        return self.rng.random() >= self.rates.output_fault


def rng_mv(rng: random.Random) -> float:
    """A voltage that float32 holds."""
    return rng.randrange(-90_00, 40_00) / 128.0 + 0.0


class Line:
    """What the host sends, on its way to the device."""

    def __init__(self, rng: random.Random, rates: Rates, setting: Setting) -> None:
        self.rng, self.rates, self.setting = rng, rates, setting
        self.clear()

    def clear(self) -> None:
        self.units: list[tuple[int, int, bytes]] = []
        self.come = b""
        self.gone = False
        self._sent = 0

    def send(self, now: int, payload: bytes, kind: int = 0x11) -> None:
        """Send one answer, or another frame of a serial line."""
        if self.rng.random() < self.rates.drop:
            return
        for _ in range(1 + (self.rng.random() < self.rates.duplicate)):
            unit = self._unit(kind, payload)
            delay = self.rng.randrange(0, self.setting.interval_us)
            if self.rng.random() < self.rates.delay:
                delay = self.rng.randrange(0, 3 * self.setting.silence_us)
            self._sent += 1
            self.units.append((now + delay, self._sent, unit))

    def _unit(self, kind: int, payload: bytes) -> bytes:
        if not self.setting.serial:
            # A stream keeps its framing; what is in the frames may still be anything.
            return rfc.frame(self._damaged(payload))
        return self._damaged(frame(kind, payload))

    def _damaged(self, data: bytes) -> bytes:
        if self.rng.random() < self.rates.corrupt:
            at = self.rng.randrange(len(data))
            data = data[:at] + bytes([self.rng.randrange(256)]) + data[at + 1 :]
        if self.rng.random() < self.rates.truncate:
            data = data[: self.rng.randrange(1, len(data) + 1)]
        return data

    def plain(self, now: int, data: bytes) -> None:
        """Send bytes as they are: a greeting."""
        self.units.append((now, 0, data))

    def receive(self, now: int, room: int) -> bytes | None:
        """What has come by now, None at the end of the connection."""
        due = sorted(unit for unit in self.units if unit[0] <= now)
        self.units = [unit for unit in self.units if unit[0] > now]
        self.come += b"".join(data for _, _, data in due)
        if self.gone and not self.come:
            return None
        taken, self.come = self.come[:room], self.come[room:]
        return taken


class Host:
    """The server's end: reads samples, answers with currents of every kind."""

    def __init__(self, rng: random.Random, rates: Rates, line: Line, setting: Setting) -> None:
        self.rng, self.rates, self.line, self.setting = rng, rates, line, setting
        self.samples: list[list[Any]] = []
        self.open(0)

    def open(self, now: int) -> None:
        self.stream = b""
        self.phase = "greeting"
        self.line.clear()
        if not self.setting.serial:
            self.line.plain(now, rfc.greeting() + rfc.ready(b"ROUTER"))

    def hear(self, now: int, data: bytes) -> None:
        self.stream += data
        if self.setting.serial:
            while b"\0" in self.stream:
                between, _, self.stream = self.stream.partition(b"\0")
                self._frame(now, between)
            return
        if self.phase == "greeting" and len(self.stream) >= len(rfc.greeting(b"NULL")) + 43:
            assert self.stream.startswith(rfc.OPENING)
            self.stream, self.phase = self.stream[len(rfc.OPENING) :], "open"
        while self.phase == "open" and isinstance(split := rfc._split(self.stream), tuple):
            flags, body, self.stream = split
            assert flags == 0
            self._sample(now, body)

    def _frame(self, now: int, between: bytes) -> None:
        if not between:
            return
        kind, payload = unframe(between) or (None, b"")
        if kind == 0x01:
            cells = self.setting.cells + (self.rng.random() < self.rates.nonsense)
            self.line.send(now, msgpack.packb([1, 0, cells]), 0x02)
        elif kind == 0x10:
            self._sample(now, payload)
        else:
            raise AssertionError(f"a device sent {between.hex()}")

    def _sample(self, now: int, data: bytes) -> None:
        sample = msgpack.unpackb(data)
        self.samples.append(sample)
        if self.setting.serial and self.rng.random() < self.rates.lost_link / 4:
            self.line.send(now, b"", 0x03)
        if self.setting.serial and self.rng.random() < self.rates.nonsense:
            self.line.send(now, b"\x90", self.rng.choice([0x00, 0x77, 0x80, 0xFF]))
        self.line.send(now, self._answer(sample))

    def _answer(self, sample: list[Any]) -> bytes:
        seq, flags = sample[0], 1
        currents: list[Any] = [self._current(limit) for limit in self.setting.limit_pa]
        if self.rng.random() >= self.rates.nonsense:
            return msgpack.packb([seq, flags, 850, *currents])
        wrong = self.rng.choice(
            ["seq", "nan", "infinite", "huge", "cells", "idle", "malformed", "old", "noise"]
        )
        if wrong == "malformed":
            return msgpack.packb([None, 128, 0])
        if wrong == "noise":
            return self.rng.randbytes(self.rng.randrange(1, 40))
        if wrong == "cells":
            currents.append(1.0)
        if wrong in ("nan", "infinite", "huge"):
            currents[-1] = {"nan": math.nan, "infinite": math.inf, "huge": 1e300}[wrong]
        seq = {"seq": seq + self.rng.randrange(1, 9), "old": max(0, seq - 3)}.get(wrong, seq)
        return msgpack.packb([seq, 0 if wrong == "idle" else flags, 850, *currents])

    def _current(self, limit_pa: float) -> float:
        """Mostly within the limit, now and then up to three times beyond."""
        beyond = 3.0 if self.rng.random() < 0.1 else 0.9
        return self.rng.uniform(-beyond, beyond) * limit_pa


class Board:
    """The C library on a fake board. ``log`` is what its callbacks saw in the last call.

    ``now`` is the true time; the device sees its own clock, which ``set_clock`` makes run at
    another rate.
    """

    def __init__(self, setting: Setting, rng: random.Random, rates: Rates, now: int) -> None:
        self.setting, self.rng, self.rates = setting, rng, rates
        self.now, self.start, self.log = now, now, []  # type: ignore[var-annotated]
        self.rate, self._clock_from = 1.0, (now, 0)
        self.fault: BaseException | None = None
        self.converter = Converter(rng, rates, setting.cells)
        self.line = Line(rng, rates, setting)
        self.host = Host(rng, rates, self.line, setting)
        self.v_mv: list[float] = []
        self.written: list[tuple[int, list[float]]] = []
        self._c = library()
        self._port = Port(
            None,
            READ(self._guard(self._read)),
            READ(self._guard(self._write)),
            SEND(self._guard(self._send)),
            SEND(self._guard(self._receive)),
            NOW(self._guard(lambda _: (self.start + self.age) % WRAP)),
        )
        self._make()

    def _make(self) -> None:
        setting, c = self.setting, self._c
        config = Config(setting.cells, setting.interval_us, setting.on_arrival)
        config.silence_us, config.greeting_us = setting.silence_us, setting.greeting_us
        for k in range(setting.cells):
            config.cell[k] = Limits(
                setting.limit_pa[k], setting.slew_pa_per_ms[k], *setting.window_mv
            )
        self.config = config
        self._memory = [
            ctypes.create_string_buffer(size)
            for size in (c.shim_size(0), setting.room, setting.room, setting.ring * c.shim_size(3))
        ]
        device, into, out, taken = self._memory
        self.device = ctypes.byref(device)
        made = c.shim_make(
            self.device, ctypes.byref(config), ctypes.byref(self._port), setting.serial,
            into, out, ctypes.c_size_t(setting.room), taken, setting.ring,
        )  # fmt: skip
        # Where the very first write fails, its error is told and the device still works.
        assert made in (0, -12), made

    def _guard(self, callback: Any) -> Any:
        def guarded(*given: Any) -> int:
            try:
                return callback(*given)
            except BaseException as fault:  # C cannot pass it on
                self.fault = self.fault or fault
                return -1

        return guarded

    def _read(self, _: Any, v_mv: Any, cells: int) -> int:
        read = self.converter.read()
        self.v_mv = [math.nan] * cells if read is None else read
        for k, value in enumerate(self.v_mv):
            v_mv[k] = value
        return -1 if read is None else 0

    def _write(self, _: Any, i_pa: Any, cells: int) -> int:
        sound = self.converter.write()
        values = list(i_pa[:cells])
        self.written.append((self.now, values))
        self.now += self.rng.randrange(0, 3)
        self.log.append(("write", values, self.age, sound))
        return 0 if sound else -1

    def _send(self, _: Any, data: Any, size: int) -> int:
        if self.line.gone:
            self.log.append(("sent", None))
            return -1
        count = 0 if self.rng.random() < self.rates.stall else size
        if self.rng.random() < self.rates.stall:
            count //= 2
        taken = bytes(data[:count])
        self.log.append(("sent", taken))
        self.host.hear(self.now, taken)
        return count

    def _receive(self, _: Any, data: Any, room: int) -> int:
        come = self.line.receive(self.now, room)
        if come is None:
            self.log.append(("gone", None))
            return -1
        for k, byte in enumerate(come):
            data[k] = byte
        self.log.append(("received", come))
        return len(come)

    def _call(self, name: str) -> list[Any]:
        self.log = []
        getattr(self._c, name)(self.device)
        if self.fault:
            raise self.fault
        return self.log

    def connect(self) -> list[Any]:
        self.host.open(self.now)
        return self._call("gsb_device_connect")

    def tick(self) -> list[Any]:
        return self._call("gsb_device_tick")

    def poll(self) -> list[Any]:
        return self._call("gsb_device_poll")

    @property
    def age(self) -> int:
        """Its clock without the wrap, from when it was made."""
        from_now, from_age = self._clock_from
        return from_age + int((self.now - from_now) * self.rate)

    def set_clock(self, rate: float) -> None:
        """From now on its clock runs at so many times the true rate."""
        self._clock_from = self.now, self.age
        self.rate = rate

    @property
    def state(self) -> str:
        return STATES[self._c.shim_state(self.device)]

    @property
    def broken(self) -> bool:
        return bool(self._c.shim_broken(self.device))

    def counter(self, which: int) -> int:
        return self._c.shim_counter(self.device, which)
