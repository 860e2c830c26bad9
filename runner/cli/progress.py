"""The progress bar on a terminal."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from modepair.runner.results import Progress

__all__ = ["progress_bar"]


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
