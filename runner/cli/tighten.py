"""`modepair tighten`."""

from __future__ import annotations

import json
import sys
from typing import TYPE_CHECKING, Annotated

import typer

from modepair.runner.cli.options import FAILING, AsJson, Jobs, SpecFile, print_warnings

if TYPE_CHECKING:
    from modepair.runner.tighten import Tightening

__all__ = ["tighten_command"]


def tighten_command(
    spec: SpecFile,
    entry: Annotated[
        int, typer.Option("--set", min=0, metavar="N", help="Entry of tolerance.parts, from 0.")
    ],
    share: Annotated[
        str | None,
        typer.Option(
            "--yield",
            metavar="SHARE",
            help="Yield asked for, such as 95 %; limits.yield if not given, else 99 %.",
        ),
    ] = None,
    jobs: Jobs = None,
    as_json: AsJson = False,
) -> None:
    """Find the widest common grade of one tolerance with which enough boards still pass."""
    from modepair.runner.cli.progress import note_on_terminal
    from modepair.runner.tighten import tighten
    from modepair.sweeps import RefusedError
    from modepair.sweeps.quantities import FRACTION

    wanted = None
    if share is not None:
        try:
            wanted = FRACTION.parse(share)
        except RefusedError as error:
            raise typer.BadParameter(error.message("--yield"), param_hint="--yield") from error
    with note_on_terminal() as note:
        result = tighten(spec, entry, share=wanted, jobs=jobs, progress=note)
    if as_json:
        print(json.dumps(_plain(result), indent=2))
    else:
        _print(result)
    if any(case.widest is None for case in result.cases):
        raise typer.Exit(FAILING)


def _print(result: Tightening) -> None:
    from modepair.reports.board_tables import percent_text
    from modepair.reports.readings import frequency_text
    from modepair.reports.tables import Column, console_for, print_columns
    from modepair.reports.yields import draws_needed
    from modepair.runner.budget_pages import case_labels

    console = console_for(sys.stdout)
    print_warnings(console, result.warnings)
    parts = " ".join(result.spec.tolerance.parts[result.entry].of) if result.spec.tolerance else ""
    console.print(
        f"{result.key} of {parts}: the widest grade with which {percent_text(result.share)} % of boards pass",
        markup=False,
    )
    labels = case_labels(result.sweep, [case.case for case in result.cases])
    for case in result.cases:
        console.print(f"\n{labels[case.case]}\n", markup=False)
        intervals = [grade.found.interval for grade in case.grades]
        print_columns(
            console,
            [],
            [
                Column(
                    "grade\n",
                    [f"{100 * grade.grade:g} %" if grade.grade else "perfect" for grade in case.grades],
                ),
                Column("yield\n%", [percent_text(grade.found.value) for grade in case.grades]),
                Column(
                    "95 % sure of\n%",
                    [f"{percent_text(low)} to {percent_text(high)}" for low, high in intervals],
                ),
            ],
        )
        if case.widest is not None:
            told = f"{100 * case.widest:g} % is tight enough."
            low, _ = case.grades[-1].found.interval
            if low < result.share < 1.0:
                told = (
                    f"{100 * case.widest:g} % is tight enough for the boards drawn, which show a yield of "
                    f"{percent_text(low)} % for all; to show {percent_text(result.share)} % takes at least "
                    f"{draws_needed(result.share):,} draws."
                )
        elif not case.limit:
            told = "No common grade is tight enough, though perfect parts would be."
        else:
            causes = ", ".join(f"{name} ({100 * share:.0f} %)" for name, share in case.limit if share >= 0.01)
            told = (
                "No grade is tight enough, not even perfect parts. What limits then, at "
                f"{frequency_text(case.limit_frequency_hz)}: {causes}."
            )
        console.print(f"\n{told}", markup=False)


def _plain(result: Tightening) -> dict[str, object]:
    return {
        "entry": result.entry,
        "key": result.key,
        "yield": result.share,
        "cases": [
            {
                "case": case.case,
                "widest": case.widest,
                "grades": [
                    {"grade": grade.grade, "passed": grade.found.passed, "drawn": grade.found.drawn}
                    for grade in case.grades
                ],
                "limited_by": [name for name, _ in case.limit],
            }
            for case in result.cases
        ],
    }
