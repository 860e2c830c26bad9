"""`modepair check`."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from modepair.runner.cli.options import FAILING, SIMULATION_FAILED, AsJson, Folder, Jobs, SpecFile
from modepair.runner.cli.progress import progress_bar

if TYPE_CHECKING:
    from modepair.runner.checking import Check

__all__ = ["check_command"]


def check_command(
    spec: SpecFile,
    output: Folder = None,
    baseline: Annotated[
        Path | None,
        typer.Option(
            "--baseline",
            metavar="FILE",
            help="Curves accepted earlier; the spec's name with .baseline.txt beside it, if not given.",
        ),
    ] = None,
    allow: Annotated[
        str | None,
        typer.Option("--allow", metavar="DB", help="Smallest fall of CMRR that counts, such as '0.5 dB'."),
    ] = None,
    accept: Annotated[
        bool, typer.Option("--accept", help="Accept the curves as they are now: write the baseline.")
    ] = False,
    jobs: Jobs = None,
    as_json: AsJson = False,
) -> None:
    """Run a sweep and judge it against the spec's limits, and against curves accepted earlier.

    Exit status 1 where a case fails, or where it cannot be shown that it passes.
    """
    from modepair.runner.checking import check

    allow_db = None if allow is None else _decibels(allow)
    with progress_bar() as progress:
        result = check(
            spec, output, baseline=baseline, allow_db=allow_db, accept=accept, jobs=jobs, progress=progress
        )
    if as_json:
        print(_as_json(result))
    else:
        _print_check(result)
    if result.run.failed:
        raise typer.Exit(SIMULATION_FAILED)
    if not result.passed:
        raise typer.Exit(FAILING)


def _decibels(text: str) -> float:
    from math import log10

    from modepair.sweeps import RefusedError
    from modepair.sweeps.quantities import DECIBELS

    try:
        return round(20 * log10(DECIBELS.parse(text)), 9)
    except RefusedError as refusal:
        raise typer.BadParameter(
            f"{refusal.what}; --allow takes 0 dB or more, such as '0.5 dB'", param_hint="--allow"
        ) from refusal


def _print_check(result: Check) -> None:
    from modepair.reports.tables import console_for
    from modepair.reports.verdicts import print_verdicts
    from modepair.runner.cli.options import print_warnings, shown_path

    console = console_for(sys.stdout)
    run = result.run
    if run.spec.title:
        console.print(f"{run.spec.title}\n", markup=False, soft_wrap=True)
    print_warnings(console, run.warnings)
    if len(run.verdicts):
        changes = run.changes if not result.passed else ()
        print_verdicts(console, run.verdicts, run.cases, run.spec.axes, changes)
    if result.accepted and result.baseline:
        console.print(f"Accepted: {shown_path(result.baseline)}", markup=False, soft_wrap=True)
    console.print(f"Run folder: {shown_path(run.folder)}", markup=False, soft_wrap=True)


def _as_json(result: Check) -> str:
    rows = json.loads(result.run.verdicts.to_json(orient="records", double_precision=15))
    content = {
        "folder": str(result.run.folder),
        "passed": result.passed,
        "failed": result.run.failed,
        "warnings": list(result.run.warnings),
        "baseline": str(result.baseline) if result.baseline else None,
        "accepted": result.accepted,
        "verdicts": rows,
        "changes": list(result.run.changes),
    }
    return json.dumps(content, indent=2, ensure_ascii=False)
