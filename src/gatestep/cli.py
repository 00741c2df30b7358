"""The command line. Bodies are in :mod:`gatestep.commands`, imported when called."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

import typer

from . import clidevice, clirecord, clisteer  # noqa: F401 - their commands
from .cliapp import CurveClient, CurveServer, Json, RigFile, app, bench_app


@app.command()
def serve(
    rig: RigFile,
    arm: Annotated[bool, typer.Option("--arm", help="Arm at once.")] = False,
    force: Annotated[
        bool, typer.Option("--force", help="Arm although the check advises against it.")
    ] = False,
    json_output: Json = False,
) -> int:
    """Run a server until it is stopped; it starts idle, at 0 pA."""
    from .commands.serve import serve as body

    return body(rig, arm, force, json_output)


@app.command()
def models(json_output: Json = False) -> int:
    """List the shipped models with their sources."""
    from .commands.models import list_models

    return list_models(json_output) or 0


@app.command()
def curves(
    model: Annotated[str, typer.Argument(metavar="MODEL", help="A shipped model or a file.")],
    at: Annotated[str | None, typer.Option("--at", metavar="MV,MV,...", help="Voltages.")] = None,
    figure: Annotated[
        Path | None, typer.Option("--figure", help="Draw to this PNG or SVG file.")
    ] = None,
    json_output: Json = False,
) -> int:
    """Print or draw a model's steady states and time constants."""
    from .commands.models import show_curves

    return show_curves(model, at, figure, json_output) or 0


@app.command()
def firmware(
    model: Annotated[str, typer.Argument(metavar="MODEL", help="A shipped model or a file.")],
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="The folder to write.")],
    rows: Annotated[int, typer.Option("--rows", help="Rows of the table.")] = 2049,
    interval_us: Annotated[
        float, typer.Option("--interval-us", metavar="US", help="The device's tick.")
    ] = 50.0,
    json_output: Json = False,
) -> int:
    """Write a model as C for a microcontroller, with its errors and a self-test."""
    from .commands.firmware import write_firmware

    return write_firmware(model, out, rows, interval_us, json_output)


@app.command()
def simrig(
    rig: RigFile,
    seconds: Annotated[float | None, typer.Option("--seconds", help="How long to run.")] = None,
    pace: Annotated[str | None, typer.Option("--pace", help="lockstep or real.")] = None,
    seed: Annotated[int | None, typer.Option("--seed", help="For noise, jitter and drops.")] = None,
    out: Annotated[Path | None, typer.Option("--out", help="Save the trace as .npz.")] = None,
    wait: Annotated[
        float, typer.Option("--wait", metavar="S", help="Wait so long for the server.")
    ] = 3.0,
    curve_server: CurveServer = None,
    curve_client: CurveClient = None,
    json_output: Json = False,
) -> int:
    """Run the simulated rig of a rig file as a client of a running server."""
    from .commands.simrig import simulate

    simulate(
        rig,
        seconds,
        out,
        json_output,
        pace=pace,
        seed=seed,
        curve_secret=curve_client,
        curve_server=curve_server,
        wait_s=wait,
    )
    return 0


@app.command()
def check(rig: RigFile, json_output: Json = False) -> int:
    """Check files, host and what the loop can carry, before anything is armed."""
    from .commands.check import check as body

    return body(rig, json_output)


@bench_app.command("step")
def bench_step(
    rounds: Annotated[int, typer.Option("--rounds", help="Alternating rounds.")] = 200,
    ticks: Annotated[int, typer.Option("--ticks", help="Ticks in each round.")] = 20_000,
    figure: Annotated[
        Path | None, typer.Option("--figure", help="Draw to this PNG or SVG file.")
    ] = None,
    json_output: Json = False,
) -> int:
    """Measure the model's step, beside the same squid axon written in C."""
    from .commands.bench import bench_step as body

    return body(rounds, ticks, figure, json_output)


@bench_app.command("loop")
def bench_loop(
    rig: RigFile,
    seconds: Annotated[
        float,
        typer.Option("--seconds", metavar="S", help="At the tick rate, and again flat out."),
    ] = 5.0,
    rounds: Annotated[int, typer.Option("--rounds", help="Alternating rounds in all.")] = 5,
    load: Annotated[
        bool, typer.Option("--load", help="Again with every core kept busy, side by side.")
    ] = False,
    burners: Annotated[
        int | None, typer.Option("--burners", help="Busy threads, if not one a core.")
    ] = None,
    spin: Annotated[
        bool, typer.Option("--spin", help="Never sleep while an answer is awaited.")
    ] = False,
    realtime: Annotated[
        bool, typer.Option("--realtime", help="Keep sampling whatever the load, like a device.")
    ] = False,
    figure: Annotated[
        Path | None, typer.Option("--figure", help="Draw to this PNG or SVG file.")
    ] = None,
    save: Annotated[
        Path | None, typer.Option("--save", metavar="FILE", help="Write the result as JSON.")
    ] = None,
    compare: Annotated[
        Path | None, typer.Option("--compare", metavar="FILE", help="A result to set beside it.")
    ] = None,
    json_output: Json = False,
) -> int:
    """Measure round trips, jitter and service times of a rig file's loop.

    The running server is measured when it is idle and no rig holds it; without one, a
    private server is started, armed with no cell, and ended. In each round the client
    samples by the clock, then flat out. Two results differ in a percentile where the
    medians of their rounds lie further apart than the two half-ranges together.
    """
    from .commands.bench_loop import bench_loop as body

    return body(
        rig, seconds, rounds, load, burners, spin, realtime, figure, save, compare, json_output
    )


@bench_app.command("fidelity")
def bench_fidelity(
    quick: Annotated[bool, typer.Option("--quick", help="Fewer points; some seconds.")] = False,
    scenario: Annotated[
        list[str] | None,
        typer.Option("--scenario", metavar="NAME", help="Only this one; may be given again."),
    ] = None,
    figure: Annotated[
        Path | None, typer.Option("--figure", help="Draw to this PNG or SVG file.")
    ] = None,
    save: Annotated[
        Path | None, typer.Option("--save", metavar="FILE", help="Write the result as JSON.")
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option("--scheduler", metavar="ADDRESS", help="Run on a dask scheduler's workers."),
    ] = None,
    json_output: Json = False,
) -> int:
    """Measure how true a loop is, plain and anticipating, over ticks, delays and faults.

    Simulated cells in a loop without sockets are held to a continuous solution of the same
    equations. The figures belong to the program, not to the machine that it runs on.
    """
    from .commands.bench_fidelity import bench_fidelity as body

    return body(quick, scenario or (), figure, save, scheduler, json_output)


@app.command()
def demo(
    seconds: Annotated[
        float, typer.Option("--seconds", metavar="S", help="Length in the rig's time.")
    ] = 1.2,
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Where files go.")] = Path(
        "gatestep-demo"
    ),
    json_output: Json = False,
) -> int:
    """Give a simulated cell conductances through a real loop, and draw what happens."""
    from .commands.demo import demo as body

    return body(seconds, out, json_output)


def main() -> None:
    """Entry point: run a command, and word every expected fault on one line of stderr."""
    from .errors import GatestepError

    try:
        result = app(standalone_mode=False)
    except typer.Exit as done:
        sys.exit(done.exit_code)
    except (KeyboardInterrupt, typer.Abort):
        print("gatestep: interrupted", file=sys.stderr)
        sys.exit(130)
    except GatestepError as fault:
        print(f"gatestep: {fault}", file=sys.stderr)
        sys.exit(1)
    except Exception as fault:
        show = getattr(fault, "show", None)
        if show is None:
            raise
        show(file=sys.stderr)
        sys.exit(int(getattr(fault, "exit_code", 2)))
    sys.exit(int(result or 0))
