"""A serial line to a device: opened, set for the bridge, and opened again when it is back."""

from __future__ import annotations

import os
import select
import stat
import termios
import time
from typing import Any

from .closing import Closing
from .errors import LinkError, MissingExtraError

_WRITE_S = 0.2


class Line(Closing):
    """An open serial line, eight bits, no parity, one stop bit, raw.

    Two descriptors of one line. Reading blocks, with VMIN 1, so that a reading of nothing
    can only mean that the line was hung up; one asks ``poll`` first. Writing does not
    block, for a device that has stopped reading must not stop who writes.

    Parameters
    ----------
    device : str
        Such as ``/dev/ttyACM0`` or a link to it under ``/dev/serial/by-id``.
    baud : int
        What both ends are set to; a USB device ignores it.

    Raises
    ------
    MissingExtraError
        Without pyserial.
    LinkError
        When there is no such device, it is no terminal, or it cannot be opened.
    """

    def __init__(self, device: str, baud: int) -> None:
        self.device, self.baud = device, baud
        self._port = _open(device, baud)
        try:
            _set_reading(self._port.fd)
            self.low_latency = _ask_low_latency(self._port)
            self.writing = os.open(
                f"/proc/self/fd/{self._port.fd}", os.O_WRONLY | os.O_NOCTTY | os.O_NONBLOCK
            )
        except (OSError, termios.error) as fault:
            self._port.close()
            raise LinkError(f"{device}: cannot be set up ({fault.args[-1]})") from fault

    @property
    def reading(self) -> int:
        """The descriptor to read from."""
        return int(self._port.fd)

    def read(self, timeout_s: float) -> bytes:
        """What has come, after at most ``timeout_s``; empty when nothing has.

        Raises
        ------
        LinkError
            When the line is gone.
        """
        try:
            if not select.select([self.reading], [], [], timeout_s)[0]:
                return b""
            data = os.read(self.reading, 4096)
        except OSError as fault:
            raise LinkError(f"{self.device} is gone ({fault.strerror})") from fault
        if not data:
            raise LinkError(f"{self.device} is gone")
        return data

    def write(self, data: bytes, timeout_s: float = _WRITE_S) -> None:
        """Write all of it.

        Raises
        ------
        LinkError
            When the line is gone, or the device takes nothing for so long.
        """
        end = time.monotonic() + timeout_s
        while data:
            try:
                select.select([], [self.writing], [], max(0.0, end - time.monotonic()))
                data = data[os.write(self.writing, data) :]
            except BlockingIOError:
                if time.monotonic() > end:
                    raise LinkError(f"{self.device}: the device does not read") from None
            except OSError as fault:
                raise LinkError(f"{self.device} is gone ({fault.strerror})") from fault

    def close(self) -> None:
        """Let go of the line."""
        os.close(self.writing)
        self._port.close()


def _open(device: str, baud: int) -> Any:
    """The port as pyserial opens it, nobody else's meanwhile."""
    try:
        import serial
    except ImportError as fault:
        raise MissingExtraError("pyserial", "serial", "a serial line") from fault
    if os.path.exists(device) and not stat.S_ISCHR(os.stat(device).st_mode):
        raise LinkError(f"{device} is no serial device; give one such as /dev/ttyACM0")
    try:
        return serial.Serial(device, baud, exclusive=True)
    except ValueError as fault:
        raise LinkError(f"{device}: {baud} baud cannot be set ({fault})") from fault
    except (OSError, termios.error) as fault:
        raise LinkError(f"{device}: {_advice(device, fault)}") from fault


def _advice(device: str, fault: Exception) -> str:
    number = getattr(fault, "errno", None)
    if isinstance(fault, FileNotFoundError) or number == 2:
        return "no such device; is it plugged in? /dev/serial/by-id lists those that are"
    if isinstance(fault, PermissionError) or number == 13:
        return (
            f"not allowed; join the group that owns it (ls -l {device}; on Debian: "
            "adduser USER dialout) and log in again"
        )
    if number in (11, 16):
        return "in use by another program, maybe another bridge"
    return f"cannot be opened ({fault}); is it a serial device?"


def _set_reading(descriptor: int) -> None:
    """Blocking, and a reading returns when one byte is there; pyserial has neither."""
    settings = termios.tcgetattr(descriptor)
    settings[6][termios.VMIN] = 1
    settings[6][termios.VTIME] = 0
    termios.tcsetattr(descriptor, termios.TCSANOW, settings)
    os.set_blocking(descriptor, True)


def _ask_low_latency(port: Any) -> bool:
    """Some USB converters gather bytes for 16 ms unless asked not to; whether one was told."""
    try:
        port.set_low_latency_mode(True)
    except (OSError, ValueError, AttributeError, NotImplementedError):
        return False
    return True
