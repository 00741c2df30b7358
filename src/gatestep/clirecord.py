"""Commands that read a journal."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from .cliapp import Json, app


@app.command()
def journal(
    path: Annotated[Path, typer.Argument(metavar="JOURNAL", help="The journal's file.")],
    events: Annotated[bool, typer.Option("--events", help="List every event.")] = False,
    json_output: Json = False,
) -> int:
    """Show what a journal holds: samples, models, lateness, trips, and what is lost."""
    from .commands.journal import show_journal

    return show_journal(path, json_output, events)


@app.command()
def replay(
    journal: Annotated[Path, typer.Argument(metavar="JOURNAL", help="A journal of a run.")],
    json_output: Json = False,
) -> int:
    """Compute every recorded current again and compare, bit for bit."""
    from .commands.replay import replay as body

    return body(journal, json_output)


@app.command()
def report(
    journal: Annotated[Path, typer.Argument(metavar="JOURNAL", help="The journal's file.")],
    figure: Annotated[
        Path | None, typer.Option("--figure", metavar="DIR", help="Draw figures into this folder.")
    ] = None,
    table: Annotated[
        Path | None, typer.Option("--csv", metavar="FILE", help="Write a line a sweep as CSV.")
    ] = None,
    json_output: Json = False,
) -> int:
    """Measure each sweep of a journal: spikes and their shapes, resistance, charge, lateness."""
    from .commands.report import report as body

    return body(journal, figure, table, json_output)
