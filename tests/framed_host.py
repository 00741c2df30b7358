"""The host's end of a framed serial line, from SPEC.md alone: frames, and a model's supervisor."""

from __future__ import annotations

import binascii
import time
from collections.abc import Iterator
from typing import Any, NamedTuple

import msgpack
import numpy as np

HELLO, WELCOME, BYE, SAMPLE, ANSWER = 0x01, 0x02, 0x03, 0x10, 0x11
PARAMETER, ARM, DISARM, ALIVE, ASK, DONE, IS, TRACE = (*range(0x20, 0x25), *range(0x28, 0x2B))


class Frame(NamedTuple):
    kind: int
    items: Any


def cobs(data: bytes) -> bytes:
    """Stuffed bytes of up to 254 (Cheshire and Baker 1999)."""
    return b"".join(bytes([len(run) + 1]) + run for run in data.split(b"\0"))


def uncobs(data: bytes) -> bytes:
    runs, at = [], 0
    while at < len(data):
        runs.append(data[at + 1 : at + data[at]])
        at += data[at]
    return b"\0".join(runs)


def encode(kind: int, items: Any = None) -> bytes:
    """One frame; the check is CRC-16/CCITT-FALSE, which binascii has as crc_hqx."""
    body = bytes([kind]) + (b"" if items is None else msgpack.packb(items))
    check = binascii.crc_hqx(body, 0xFFFF)
    return cobs(body + check.to_bytes(2, "big")) + b"\0"


def decode(stuffed: bytes) -> Frame:
    body = uncobs(stuffed)
    assert binascii.crc_hqx(body[:-2], 0xFFFF) == int.from_bytes(body[-2:], "big")
    payload = body[1:-2]
    return Frame(body[0], msgpack.unpackb(payload) if payload else None)


class Host:
    """Reads and writes frames over something with ``recv`` and ``sendall``."""

    def __init__(self, line: Any, patience_s: float = 60.0) -> None:
        self.line, self.waiting, self.token = line, b"", 0
        self.patience_s = patience_s
        self.traces: list[Frame] = []

    def send(self, kind: int, items: Any = None) -> None:
        self.line.sendall(encode(kind, items))

    def frames(self) -> Iterator[Frame]:
        """Frames as they come; ends when patience does."""
        end = time.monotonic() + self.patience_s
        while time.monotonic() < end:
            *whole, self.waiting = self.waiting.split(b"\0")
            for k, stuffed in enumerate(whole):
                if stuffed:
                    self.waiting = b"\0".join([*whole[k + 1 :], self.waiting])
                    yield decode(stuffed)
                    break
            else:
                received = self.line.recv(4096)
                assert received, "the device is gone"
                self.waiting += received

    def wait(self, kind: int) -> Frame:
        """The next frame of a kind; traces on the way are kept."""
        for frame in self.frames():
            if frame.kind == TRACE:
                self.traces.append(frame)
            if frame.kind == kind:
                return frame
        raise AssertionError(f"no frame of kind {kind:#x} in {self.patience_s} s")

    def order(self, kind: int, *arguments: Any) -> int:
        """Give an order; the code of its ``done``."""
        self.token += 1
        self.send(kind, [self.token, *arguments])
        done = self.wait(DONE)
        assert done.items[0] == self.token
        return done.items[1]

    def ask(self, index: int) -> list[Any]:
        """``[index, count, name, value]`` of a parameter."""
        self.token += 1
        self.send(ASK, [self.token, index])
        token, *rest = self.wait(IS).items
        assert token == self.token
        return rest

    def settled(self, traces: int) -> np.ndarray:
        """Voltages and currents of so many further traces, telling the device we are here."""
        rows = []
        for k in range(traces):
            if k % 10 == 0:
                self.send(ALIVE)
            rows.append(self.wait(TRACE).items)
        return np.array(rows, dtype=float)
