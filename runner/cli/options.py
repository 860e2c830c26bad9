"""Options and arguments that several commands share, and their exit statuses."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

if TYPE_CHECKING:
    from rich.console import Console

__all__ = [
    "FAILING",
    "SIMULATION_FAILED",
    "USAGE",
    "AsJson",
    "Folder",
    "Jobs",
    "SpecFile",
    "print_warnings",
    "shown_path",
]

FAILING = 1
USAGE = 2
SIMULATION_FAILED = 3

SpecFile = Annotated[Path, typer.Argument(metavar="SPEC", help="Sweep spec, a YAML file.")]
Folder = Annotated[Path | None, typer.Option("-o", "--output", metavar="DIR", help="Output folder.")]
Jobs = Annotated[
    int | None,
    typer.Option(
        "--jobs",
        min=1,
        max=1024,
        metavar="N",
        help="Worker processes, beside one that draws; all processors if not given.",
    ),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON for a script instead of a table.")]


def print_warnings(console: Console, warnings: Iterable[str]) -> None:
    """Print what op-amp models cannot show, at the top of what a command prints."""
    told = False
    for text in warnings:
        console.print(f"WARNING {text}", style="red", markup=False, soft_wrap=True)
        told = True
    if told:
        console.print()


def shown_path(path: Path) -> Path:
    """Write a path as the user would from here."""
    here = Path.cwd()
    return path.relative_to(here) if path.is_relative_to(here) else path
