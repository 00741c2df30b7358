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
