"""`modepair budget`."""

from __future__ import annotations

import sys
from typing import Annotated

import typer

from modepair.runner.cli.options import AsJson, Folder, Jobs, SpecFile, print_warnings, shown_path

__all__ = ["budget_command"]


def budget_command(
    spec: SpecFile,
    case: Annotated[
        int | None, typer.Option("--case", min=1, metavar="N", help="One case; all if not given.")
    ] = None,
    output: Folder = None,
    jobs: Jobs = None,
    as_json: AsJson = False,
) -> None:
    """Tell which part costs how much rejection: contributions to rho, signed, and the worst board."""
    from modepair.runner.budget_run import run_budget

    result = run_budget(spec, output, case=case, jobs=jobs)
    if as_json:
        print(result.budget.to_json(orient="records", double_precision=15))
        return
    from modepair.reports.board_tables import print_budget
    from modepair.reports.tables import console_for

    console = console_for(sys.stdout)
    if result.spec.title:
        console.print(f"{result.spec.title}\n", markup=False)
    print_warnings(console, result.warnings)
    for number in result.worst_case["case"].unique().tolist():
        budget = result.budget[result.budget["case"] == number]
        worst = result.worst_case[result.worst_case["case"] == number]
        print_budget(console, budget, worst, result.labels[number])
    console.print(f"Folder: {shown_path(result.folder)}", markup=False, soft_wrap=True)
