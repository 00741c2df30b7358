"""A progress bar on stderr, for commands that may take over a second."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

Progress = Callable[[int, int], None]


@contextmanager
def bar(title: str) -> Iterator[Progress]:
    """Show how far work is, where someone sees it: call with what is done, and of how much."""
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as RichProgress

    console = Console(stderr=True)
    columns = (TextColumn(title), BarColumn(), TextColumn("{task.percentage:3.0f} %"))
    shown = RichProgress(
        *columns,
        TimeRemainingColumn(),
        console=console,
        transient=True,
        disable=not console.is_terminal,
    )
    with shown:
        task = shown.add_task(title, total=None)
        yield lambda done, of: shown.update(task, completed=done, total=max(of, 1))
