"""Decks as files, which the stand-alone simulator runs to the same curves."""

from __future__ import annotations

from collections.abc import Iterable

from modepair.circuits import standalone
from modepair.runner.analyses import Analyses
from modepair.runner.folder import RunFolder
from modepair.runner.plans import BatchPlan
from modepair.sweeps import Sweep

__all__ = ["case_deck", "structure_decks", "write_decks"]


def case_deck(sweep: Sweep, plans: Iterable[BatchPlan], analyses: Analyses, case: int) -> str:
    """Write the deck of one case.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    plans : iterable of BatchPlan
        Its batches.
    analyses : Analyses
        Its analyses.
    case : int
        Case number.

    Returns
    -------
    str
        A deck for `ngspice -b`.

    Raises
    ------
    ValueError
        If there is no such case.
    """
    for plan in plans:
        if case in plan.case:
            row = int(plan.rows[int((plan.case == case).argmax())])
            commands = [command for command, _, _ in analyses.commands]
            labels = ", ".join(f"{path} {text}" for path, text in sweep.axis_labels(case).items())
            comment = f"case {case}{': ' + labels if labels else ''}"
            return standalone(plan.structure.text(row), commands, comment)
    raise ValueError(f"case must be 1 to {sweep.count}, not {case}")


def structure_decks(sweep: Sweep, plans: Iterable[BatchPlan], analyses: Analyses) -> dict[str, str]:
    """Write a deck for each structure, with the values of its first case.

    Parameters
    ----------
    sweep, plans, analyses
        As for `case_deck`.

    Returns
    -------
    dict of str to str
        File name, such as "three-opamp-1.cir", to deck.
    """
    plans = list(plans)
    decks: dict[str, str] = {}
    seen = set()
    for plan in plans:
        if plan.structure.key in seen:
            continue
        seen.add(plan.structure.key)
        topology = plan.structure.stage.topology
        number = 1 + sum(name.startswith(f"{topology}-") for name in decks)
        decks[f"{topology}-{number}.cir"] = case_deck(sweep, [plan], analyses, int(plan.case[0]))
    return decks


def write_decks(folder: RunFolder, sweep: Sweep, plans: Iterable[BatchPlan], analyses: Analyses) -> None:
    """Write the decks of all structures into a run folder."""
    for name, text in structure_decks(sweep, plans, analyses).items():
        folder.write_text(f"decks/{name}", text)
