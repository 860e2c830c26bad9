"""Options and arguments that several commands share, and their exit statuses."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

__all__ = ["FAILING", "SIMULATION_FAILED", "USAGE", "AsJson", "Folder", "Jobs", "SpecFile", "shown_path"]

FAILING = 1
USAGE = 2
SIMULATION_FAILED = 3

SpecFile = Annotated[Path, typer.Argument(metavar="SPEC", help="Sweep spec, a YAML file.")]
Folder = Annotated[Path | None, typer.Option("-o", "--output", metavar="DIR", help="Output folder.")]
Jobs = Annotated[
    int | None,
    typer.Option(
        "--jobs", min=1, max=1024, metavar="N", help="Worker processes; all processors if not given."
    ),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON for a script instead of a table.")]


def shown_path(path: Path) -> Path:
    """Write a path as the user would from here."""
    here = Path.cwd()
    return path.relative_to(here) if path.is_relative_to(here) else path
