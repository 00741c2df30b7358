"""The serial bridge and an emulated Cortex-M4F, whose line is a pty: rig and supervised model."""

from __future__ import annotations

import re
import subprocess
import threading
from collections.abc import Iterator
from contextlib import contextmanager

from conftest import wait_until
from test_firmware_m4f import LONGEST_S, check_exchange, command, image, serve

from gatestep.bridgehost import Bridge


@contextmanager
def on_a_pty(name: str, *clock: str) -> Iterator[tuple[str, subprocess.Popen[str]]]:
    """An image running, and the device that its line is."""
    process = subprocess.Popen(
        command(image(name), "pty", clock),
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )
    try:
        assert process.stdout is not None
        told = re.search(r"/dev/\S+", process.stdout.readline())
        assert told is not None
        yield told[0], process
    finally:
        process.kill()
        process.wait()


def test_two_thousand_samples_through_the_bridge(serving):
    """Each is answered with the float64 kernel's current for its voltage, rounded to float32."""
    server = serve(serving)
    said: list[str] = []
    with on_a_pty("serial_rig") as (device, process):
        console: list[str] = []
        reader = threading.Thread(target=lambda: console.append(process.stdout.read()))
        reader.start()
        bridge = Bridge(device, 115_200, server.server.endpoints()["loop"], said.append)
        bridge.start()
        reader.join(LONGEST_S)
        wait_until(lambda: any("is gone" in text for text in said), "the image has ended")
        figures = bridge.figures()
        bridge.halt()
    check_exchange(console[0], server)
    assert (figures["samples"], figures["answers"]) == (2000, 2000)
    assert [figures[k] for k in ("dropped", "overtaken", "damaged", "malformed")] == [0] * 4
    for way, found in figures["added_nsec"].items():
        print(way, {name: f"{value / 1000:.1f} us" for name, value in found.items()})
