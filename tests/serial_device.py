"""A device on a serial line that can be unplugged, in Python or as the C library; a pty each."""

from __future__ import annotations

import ctypes
import os
import select
import time
import tty
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import msgpack
from framed_host import ANSWER, BYE, HELLO, SAMPLE, WELCOME, Frame, decode, encode

from gatestep.bridgehost import Bridge, Expected

PATIENCE_S = 30.0
INTERVAL_US = 20.0


class Pty:
    """A pty under a link of a fixed name: plugging in makes both, unplugging takes them away."""

    def __init__(self, folder: Path) -> None:
        self.path = folder / "device"
        self.master = -1
        self.plug()

    def plug(self) -> None:
        self.master, slave = os.openpty()
        tty.setraw(slave)
        self.path.symlink_to(os.ttyname(slave))
        # Held open, so that the line is up whether or not a bridge has it.
        self._slave = slave

    def unplug(self) -> None:
        self.path.unlink()
        os.close(self._slave)
        os.close(self.master)
        self.master = -1

    def close(self) -> None:
        if self.master >= 0:
            self.unplug()


class FakeDevice:
    """The device's end of the line, from SPEC.md alone."""

    def __init__(self, pty: Pty) -> None:
        self.pty, self.waiting = pty, b""

    def write(self, data: bytes) -> None:
        while data:
            assert select.select([], [self.pty.master], [], PATIENCE_S)[1], "the host does not read"
            data = data[os.write(self.pty.master, data[:512]) :]

    def send(self, kind: int, items: Any = None) -> None:
        self.write(encode(kind, items))

    def hello(self, cells: int = 1, interval_us: float = INTERVAL_US, major: int = 1) -> None:
        self.write(b"\0")
        self.send(HELLO, [major, 0, cells, interval_us, 1])

    def sample(self, seq: int, *v_mv: float) -> None:
        self.send(SAMPLE, [seq, 20 * seq, None, None, *v_mv])

    def hear(self, timeout_s: float = PATIENCE_S) -> Frame | None:
        """The next frame, which must be sound; None when none comes."""
        end = time.monotonic() + timeout_s
        while True:
            stuffed, found, rest = self.waiting.partition(b"\0")
            if found:
                self.waiting = rest
                if stuffed:
                    return decode(stuffed)
            elif not select.select([self.pty.master], [], [], max(0.0, end - time.monotonic()))[0]:
                return None
            else:
                self.waiting += os.read(self.pty.master, 65536)

    def wait(self, kind: int) -> Any:
        """The items of the next frame of a kind."""
        while True:
            frame = self.hear()
            assert frame is not None, f"no frame of kind {kind:#x}"
            if frame.kind == kind:
                return frame.items

    def join(self, cells: int = 1) -> None:
        """Say hello every 100 ms until welcome."""
        end = time.monotonic() + PATIENCE_S
        while time.monotonic() < end:
            self.hello(cells)
            until = time.monotonic() + 0.1
            while (frame := self.hear(max(0.0, until - time.monotonic()))) is not None:
                if frame.kind == WELCOME:
                    assert frame.items == [1, 0, cells]
                    return
                assert frame.kind == BYE
        raise AssertionError("never welcome")

    def ask(self, seq: int, *v_mv: float) -> Any:
        """Send a sample and wait for its answer."""
        self.sample(seq, *v_mv)
        frame = self.hear()
        while frame is not None and frame.kind == WELCOME:  # of another hello that was said
            frame = self.hear()
        assert frame is not None, f"no answer to {seq}"
        assert frame.kind == ANSWER, frame
        return frame.items


class Bench:
    """A pty, a device in Python and a bridge that serves it."""

    def __init__(self, folder: Path, endpoint: str, expected: Expected | None = None) -> None:
        self.said: list[str] = []
        self.pty = Pty(folder)
        self.device = FakeDevice(self.pty)
        self.bridge = Bridge(str(self.pty.path), 115_200, endpoint, self.said.append, expected)

    def heard(self, words: str) -> str | None:
        """What the bridge has said with these words in it."""
        return next((text for text in self.said if words in text), None)


@contextmanager
def bench(folder: Path, endpoint: str, expected: Expected | None = None) -> Iterator[Bench]:
    """A bridge at work; it must end without an error."""
    made = Bench(folder, endpoint, expected)
    made.bridge.start()
    try:
        yield made
    finally:
        made.bridge.halt()
        made.pty.close()


class CDevice:
    """The C library's device behind a pty, in virtual time: a tick passes when asked."""

    def __init__(self, pty: Pty, v_mv: Any) -> None:
        from firmware_build import NOW, READ, SEND, Config, Limits, Port, library

        self.library, self.pty, self.v_mv = library(), pty, v_mv
        self.tick, self.i_pa = 0, 0.0
        os.set_blocking(pty.master, False)
        self.port = Port(
            None, READ(self._read), READ(self._write), SEND(self._send), SEND(self._receive),
            NOW(lambda _: int(self.tick * INTERVAL_US)),
        )  # fmt: skip
        config = Config(1, INTERVAL_US, 0, 1_000_000, 0)
        config.cell[0] = Limits(1e6, 1e9, -150.0, 100.0)
        self.device = ctypes.create_string_buffer(self.library.shim_size(0))
        self._in, self._out = (ctypes.c_uint8 * 1024)(), (ctypes.c_uint8 * 1024)()
        self._taken = ctypes.create_string_buffer(4096 * self.library.shim_size(3))
        assert not self.library.shim_make(
            self.device, ctypes.byref(config), ctypes.byref(self.port), 1, self._in, self._out,
            ctypes.c_size_t(1024), self._taken, 4096,
        )  # fmt: skip
        assert not self.library.gsb_device_connect(self.device)

    def _read(self, _: Any, v_mv: Any, cells: int) -> int:
        v_mv[0] = self.v_mv(self.tick)
        return 0

    def _write(self, _: Any, i_pa: Any, cells: int) -> int:
        self.i_pa = i_pa[0]
        return 0

    def _send(self, _: Any, data: Any, size: int) -> int:
        try:
            return os.write(self.pty.master, bytes(data[:size]))
        except BlockingIOError:
            return 0

    def _receive(self, _: Any, data: Any, room: int) -> int:
        try:
            got = os.read(self.pty.master, room)
        except BlockingIOError:
            return 0
        ctypes.memmove(data, got, len(got))
        return len(got)

    def counter(self, name: str) -> int:
        from firmware_build import COUNTERS

        return int(self.library.shim_counter(self.device, COUNTERS.index(name)))

    def state(self) -> str:
        from firmware_build import STATES

        return STATES[self.library.shim_state(self.device)]

    def poll_until(self, true: Any) -> None:
        """Let it poll until something holds; no time passes for it."""
        end = time.monotonic() + PATIENCE_S
        while not true():
            assert time.monotonic() < end, (self.state(), self.library.shim_error(self.device))
            select.select([self.pty.master], [], [], 0.05)
            self.library.gsb_device_poll(self.device)

    def step(self) -> float:
        """One tick and its answer; the current that flowed from this tick on."""
        answers = self.counter("answers")
        assert self.library.gsb_device_tick(self.device) == 0
        flowing = self.i_pa
        self.poll_until(lambda: self.counter("answers") > answers)
        self.tick += 1
        return flowing


def pack(*items: Any) -> bytes:
    """A message's bytes."""
    return bytes(msgpack.packb(list(items)))
