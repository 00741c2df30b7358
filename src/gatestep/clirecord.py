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


@app.command()
def export(
    journal: Annotated[Path, typer.Argument(metavar="JOURNAL", help="The journal's file.")],
    out: Annotated[Path, typer.Argument(metavar="OUT.nwb", help="The file to write.")],
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Put it in the place of a file that is there.")
    ] = False,
    replay: Annotated[
        bool, typer.Option("--replay", help="Replay first, and write the verdict into the file.")
    ] = False,
    json_output: Json = False,
) -> int:
    """Write a journal as NWB, the field's open format, for other programs and archives."""
    from .commands.export import export as body

    return body(journal, out, overwrite, replay, json_output)
