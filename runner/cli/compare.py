"""`modepair compare`."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from modepair.runner.cli.options import SIMULATION_FAILED, AsJson, Folder, Jobs, print_warnings, shown_path
from modepair.runner.cli.progress import progress_bar

if TYPE_CHECKING:
    from modepair.reports.comparison import Comparison
    from modepair.runner.sweep import Run

__all__ = ["compare_command"]


def compare_command(
    runs: Annotated[
        list[Path],
        typer.Argument(metavar="SPEC_OR_RUN...", help="Specs, which are run first, or run folders."),
    ],
    by: Annotated[
        list[str] | None,
        typer.Option(
            "--by",
            metavar="AXIS",
            help="Axis whose values are the candidates; topology and op-amps if not given.",
        ),
    ] = None,
    accuracy: Annotated[
        float, typer.Option("--accuracy", min=0.0, metavar="DB", help="Least difference that ranks.")
    ] = 0.1,
    output: Folder = None,
    jobs: Jobs = None,
    as_json: AsJson = False,
) -> None:
    """Rank candidates by what each keeps in its worst condition.

    Of one sweep the candidates are its op-amps and topologies, of several sweeps these as well. They are ranked by
    their smallest margin to the CMRR mask, by yield where boards were drawn, or without a mask by their lowest
    CMRR over the band of the spots. With -o, the folder gets comparison.csv, comparison.md and report.html.
    """
    from modepair.runner.comparing import compare_runs

    opened = [_open(path, jobs) for path in runs]
    compared = compare_runs(opened, tuple(by or ()), accuracy)
    written = []
    if output is not None:
        from modepair.runner.report import write_comparison

        written = write_comparison(output, compared)
    if as_json:
        print(_as_json(compared.comparison))
    else:
        from modepair.reports.ranking import print_ranking
        from modepair.reports.tables import console_for

        title = opened[0].spec.title if len(opened) == 1 else ""
        console = console_for(sys.stdout)
        print_warnings(console, dict.fromkeys(text for run in opened for text in run.warnings))
        print_ranking(console, compared.comparison, opened[0].spec.frequency.spots, title)
        for path in written:
            print(shown_path(path))
    if any(run.failed for run in opened):
        raise typer.Exit(SIMULATION_FAILED)


def _open(path: Path, jobs: int | None) -> Run:
    """Open a run folder; run a spec."""
    if not path.is_file():
        from modepair.runner.reading import open_run

        return open_run(path)
    from modepair.runner.sweep import run

    with progress_bar() as progress:
        return run(path, jobs=jobs, progress=progress)


def _as_json(comparison: Comparison) -> str:
    from modepair.reports.ranking import finding, ranking_csv

    said = finding(comparison)
    content = {
        "headline": said.headline,
        "meets_mask": said.met,
        "accuracy_db": comparison.accuracy_db,
        "candidates": json.loads(ranking_csv(comparison).to_json(orient="records", double_precision=15)),
    }
    return json.dumps(content, indent=2, ensure_ascii=False)
