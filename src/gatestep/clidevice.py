"""Commands for devices on a serial line."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from .cliapp import Json, app

Device = Annotated[str, typer.Argument(metavar="DEVICE", help="Such as /dev/ttyACM0.")]
Baud = Annotated[int, typer.Option("--baud", min=1, help="A USB device ignores it.")]
BAUD = 115_200


@app.command()
def bridge(
    device: Device,
    baud: Baud = BAUD,
    server: Annotated[
        str | None,
        typer.Option("--server", metavar="ENDPOINT", help="The server's loop endpoint."),
    ] = None,
    rig: Annotated[
        Path | None,
        typer.Option("--rig", metavar="RIG.toml", help="Its rig file: endpoint, cells, tick."),
    ] = None,
    json_output: Json = False,
) -> int:
    """Put a device on a serial line into the loop with a server, until stopped."""
    from .commands.bridge import bridge as body

    return body(device, baud, server, rig, json_output)


@app.command()
def supervise(
    device: Device,
    baud: Baud = BAUD,
    assignments: Annotated[
        list[str] | None,
        typer.Option("--set", metavar="NAME=VALUE", help="As K.gmax_ns=120; may be repeated."),
    ] = None,
    every: Annotated[
        int | None,
        typer.Option(
            "--every",
            metavar="TICKS",
            min=0,
            help="One sample in so many; 0: none; else ten a second.",
        ),
    ] = None,
    arm: Annotated[bool, typer.Option("--arm", help="Arm at once.")] = False,
    trace: Annotated[
        Path | None, typer.Option("--trace", metavar="FILE", help="Write its samples as CSV.")
    ] = None,
    seconds: Annotated[float | None, typer.Option("--seconds", help="End after so long.")] = None,
    json_output: Json = False,
) -> int:
    """Watch over a model that runs on the device: set, arm, disarm, log; disarmed at the end.

    Lines on stdin are orders: arm, disarm, set NAME=VALUE, show, stop.
    """
    from .commands.supervise import supervise as body

    return body(device, baud, assignments or [], every, arm, trace, seconds, json_output)
