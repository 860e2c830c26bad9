"""The progress bar on a terminal."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from modepair.runner.results import Progress

__all__ = ["note_on_terminal", "progress_bar"]


@contextmanager
def progress_bar() -> Iterator[Progress | None]:
    """Show a bar on a terminal; nothing where the error stream is no terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (
        TextColumn("solving"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("cases, time left"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("solving", total=None)
        yield lambda done, count: bar.update(task, completed=done, total=count)


@contextmanager
def note_on_terminal() -> Iterator[Callable[[int, float], None] | None]:
    """Show on a terminal which case and grade is being tried; nothing where the error stream is no terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console

    with Console(stderr=True).status("") as status:
        yield lambda case, grade: status.update(
            f"case {case}: {f'{100 * grade:g} %' if grade else 'perfect parts'}"
        )
