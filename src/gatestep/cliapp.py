"""The application and the arguments that its commands share."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

ORDER = (
    "demo",
    "serve",
    "check",
    "simrig",
    "status",
    "arm",
    "disarm",
    "reset",
    "stop",
    "load",
    "swap",
    "set",
    "mark",
    "run",
    "halt",
    "journal",
    "replay",
    "report",
    "export",
    "models",
    "curves",
    "bench",
    "bridge",
    "supervise",
    "firmware",
)
"""Commands as the help lists them: what is needed first stands first."""


class InOrder(TyperGroup):
    """Lists its commands in :data:`ORDER`."""

    def list_commands(self, ctx: Any) -> list[str]:
        """Names of the commands, those that the order lacks at the end."""
        places = {name: place for place, name in enumerate(ORDER)}
        return sorted(super().list_commands(ctx), key=lambda name: places.get(name, len(places)))


app = typer.Typer(
    name="gatestep",
    cls=InOrder,
    help="Give a live cell a conductance it does not have: a measured voltage in, "
    "a model's current out, in real time.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
bench_app = typer.Typer(help="Measure on this machine.", no_args_is_help=True)
app.add_typer(bench_app, name="bench")

Json = Annotated[bool, typer.Option("--json", help="Print JSON for programs.")]
RigFile = Annotated[Path, typer.Argument(metavar="RIG.toml", help="The rig file.")]
CellName = Annotated[
    str | None, typer.Option("--cell", help="Which cell; not needed where there is one.")
]
Endpoint = Annotated[
    str, typer.Option("--control", metavar="ENDPOINT", help="The server's control endpoint.")
]
CurveServer = Annotated[
    Path | None, typer.Option("--curve-server", help="The server's public CURVE certificate.")
]
CurveClient = Annotated[
    Path | None, typer.Option("--curve-client", help="Our secret CURVE certificate.")
]
CONTROL = "tcp://127.0.0.1:5791"


def _show_version(wanted: bool) -> None:
    if wanted:
        from . import __version__

        print(f"gatestep {__version__}")
        raise typer.Exit


@app.callback()
def options(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version."),
    ] = False,
) -> None:
    """Give a live cell a conductance it does not have.

    A measured voltage in, a model's current out, in real time.
    """
