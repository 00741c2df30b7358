"""Commands that steer a running server."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from .cliapp import CONTROL, CellName, CurveClient, CurveServer, Endpoint, Json, app


@app.command()
def status(
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Show the server's state, counters, service times and cells."""
    from .commands.steer import ask

    return ask("status", control, json_output, curve_server, curve_client)


@app.command()
def arm(
    control: Endpoint = CONTROL,
    force: Annotated[
        bool, typer.Option("--force", help="Arm although the check advises against it.")
    ] = False,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Let the models' currents flow."""
    from .commands.steer import ask

    return ask("arm", control, json_output, curve_server, curve_client, force=force)


@app.command()
def disarm(
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Go to 0 pA at once."""
    from .commands.steer import ask

    return ask("disarm", control, json_output, curve_server, curve_client)


@app.command()
def reset(
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Clear a trip; the loop is then idle."""
    from .commands.steer import ask

    return ask("reset", control, json_output, curve_server, curve_client)


@app.command()
def stop(
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Stop the server; its last answer is 0 pA."""
    from .commands.steer import ask

    return ask("stop", control, json_output, curve_server, curve_client)


@app.command()
def load(
    model: Annotated[str, typer.Argument(metavar="MODEL", help="A shipped model or a file.")],
    cell: CellName = None,
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Prepare a model beside the one in force; the loop runs on."""
    from .commands.steer import ask

    return ask("load", control, json_output, curve_server, curve_client, model=model, cell=cell)


@app.command()
def swap(
    cell: CellName = None,
    force: Annotated[
        bool, typer.Option("--force", help="Swap an armed loop against the check's advice.")
    ] = False,
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Put the prepared model in force between two samples."""
    from .commands.steer import ask

    return ask("swap", control, json_output, curve_server, curve_client, cell=cell, force=force)


@app.command("set")
def set_parameter(
    assignment: Annotated[str, typer.Argument(metavar="KEY=VALUE", help="As K.gmax_ns=120.")],
    cell: CellName = None,
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Change a parameter of the model in force."""
    from .commands.steer import ask, split_assignment

    key, value = split_assignment(assignment)
    return ask(
        "set", control, json_output, curve_server, curve_client, key=key, value=value, cell=cell
    )


@app.command()
def mark(
    text: Annotated[str, typer.Argument(metavar="TEXT", help="The note.")],
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Put a note at the present sample."""
    from .commands.steer import ask

    return ask("mark", control, json_output, curve_server, curve_client, text=text)


@app.command()
def run(
    plan: Annotated[Path, typer.Argument(metavar="PLAN.toml", help="The plan file.")],
    seed: Annotated[
        int | None, typer.Option(help="Of a shuffled order, in place of the plan's own.")
    ] = None,
    force: Annotated[
        bool, typer.Option("--force", help="Run although the check advises against it.")
    ] = False,
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Play a plan's sweeps on a running server: it arms, plays, records, and goes to 0 pA."""
    from .commands.run import run as body

    return body(plan, control, seed, force, json_output, (curve_server, curve_client))


@app.command()
def halt(
    control: Endpoint = CONTROL,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """End a plan that runs, at 0 pA; the model before it comes back."""
    from .commands.steer import ask

    return ask("halt", control, json_output, curve_server, curve_client)
