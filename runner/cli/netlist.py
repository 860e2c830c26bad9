"""`modepair netlist`."""

from __future__ import annotations

import sys
from typing import Annotated

import typer

from modepair.runner.cli.options import Folder, SpecFile

__all__ = ["netlist_command"]


def netlist_command(
    spec: SpecFile,
    case: Annotated[
        int | None, typer.Option("--case", min=1, metavar="N", help="The case to write; case 1 if not given.")
    ] = None,
    output: Folder = None,
) -> None:
    """Write decks for the stand-alone simulator, `ngspice -b`.

    One case goes to the standard output. With -o, its deck goes to that folder, or, without --case, a deck for
    each structure of the sweep.
    """
    from modepair.runner.analyses import plan_analyses
    from modepair.runner.decks import case_deck, structure_decks
    from modepair.runner.plans import plan_batches
    from modepair.runner.specs import read_spec
    from modepair.sweeps import expand

    sweep = expand(read_spec(spec))
    if case is not None and case > sweep.count:
        raise typer.BadParameter(
            f"{case} is not a case; the spec has 1 to {sweep.count}", param_hint="--case"
        )
    plans, analyses = plan_batches(sweep), plan_analyses(sweep.spec.frequency)
    if output is None:
        sys.stdout.write(case_deck(sweep, plans, analyses, case or 1))
        return
    if case is not None:
        decks = {f"case-{case}.cir": case_deck(sweep, plans, analyses, case)}
    else:
        decks = structure_decks(sweep, plans, analyses)
    output.mkdir(parents=True, exist_ok=True)
    for name, text in decks.items():
        (output / name).write_text(text, encoding="utf-8")
        print(output / name)
