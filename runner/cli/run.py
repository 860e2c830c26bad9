"""`modepair run`."""

from __future__ import annotations

import json
import sys
from typing import TYPE_CHECKING, Annotated

import typer

from modepair.runner.cli.options import (
    SIMULATION_FAILED,
    AsJson,
    Folder,
    Jobs,
    SpecFile,
    print_warnings,
    shown_path,
)
from modepair.runner.cli.progress import progress_bar

if TYPE_CHECKING:
    from modepair.runner.sweep import Run

__all__ = ["run_command"]


def run_command(
    spec: SpecFile,
    output: Folder = None,
    jobs: Jobs = None,
    as_json: AsJson = False,
    draw: Annotated[
        int | None, typer.Option("--draw", min=1, metavar="N", help="Run that one of the drawn boards alone.")
    ] = None,
    resume: Annotated[
        bool,
        typer.Option(
            "--resume", help="Go on from where a run was killed or stopped; from the start if none was."
        ),
    ] = False,
    time_limit: Annotated[
        float | None,
        typer.Option(
            "--time-limit", min=0.1, metavar="S", help="Seconds that a case may take; 30 if not given."
        ),
    ] = None,
    page: Annotated[
        bool, typer.Option("--page", help="Write report.html too: one file that opens without a network.")
    ] = False,
) -> None:
    """Run a sweep: curves, figures, plots and decks go to a run folder."""
    # The plots' process takes longest to be ready: it starts before the rest is imported.
    from modepair.runner.curve_plots import draughting

    with draughting() as drawing, progress_bar() as progress:
        from modepair.runner.sweep import run

        result = run(
            spec,
            output,
            jobs=jobs,
            progress=progress,
            draw=draw,
            page=page,
            resume=resume,
            time_limit_s=time_limit,
            drawing=drawing,
        )
    if as_json:
        print(_as_json(result))
    else:
        _print_run(result)
    if result.failed:
        raise typer.Exit(SIMULATION_FAILED)


def _print_run(result: Run) -> None:
    from modepair.reports.tables import console_for, print_cases

    spec = result.spec
    console = console_for(sys.stdout)
    if spec.title:
        console.print(f"{spec.title}\n", markup=False)
    print_warnings(console, result.warnings)
    band = (spec.frequency.start, spec.frequency.stop)
    print_cases(
        console, result.cases, spec.axes, spec.frequency.spots, band, str(result.folder / "cases.csv")
    )
    if "draws" in result.cases:
        from modepair.reports.board_tables import print_boards
        from modepair.runner.pages import board_claim

        claim = board_claim(result.cases)
        print_boards(console, result.cases, spec.axes, spec.frequency.spots, claim)
        console.print()
    if len(result.verdicts):
        from modepair.reports.verdicts import case_names, overall

        verdict = overall(result.verdicts, case_names(result.cases, spec.axes)[1])
        console.print(f"Verdict: {verdict}\n", markup=False, soft_wrap=True)
    console.print(f"Run folder: {shown_path(result.folder)}", markup=False, soft_wrap=True)


def _as_json(result: Run) -> str:
    rows = json.loads(result.cases.to_json(orient="records", double_precision=15))
    content = {
        "folder": str(result.folder),
        "failed": result.failed,
        "warnings": list(result.warnings),
        "cases": rows,
    }
    return json.dumps(content, indent=2, ensure_ascii=False)
