"""Budgets as files of a run folder."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import pandas as pd

from modepair.runner.analyses import Analyses
from modepair.runner.budgeting import CaseBudget
from modepair.runner.folder import RunFolder
from modepair.runner.pool import BatchSolver
from modepair.runner.results import Results
from modepair.runner.worst_case import MOST_CASES, board_table, budget_cases, budget_table, worst_case_table
from modepair.sweeps import Sweep

__all__ = ["case_labels", "work_out_worst_case", "write_budget"]


def write_budget(
    folder: RunFolder,
    budgets: Sequence[CaseBudget],
    quantiles: pd.DataFrame | None,
    labels: Mapping[int, str],
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Write `budget.csv`, `worst_case.csv` and, with tolerances, `worst_boards.csv`.

    Parameters
    ----------
    folder : RunFolder
        Where to.
    budgets : sequence of CaseBudget
        The cases.
    quantiles : DataFrame or None
        Content of `quantiles.parquet`, where draws were solved.
    labels : mapping of int to str
        For each case number what tells it apart.

    Returns
    -------
    budget, worst_case : DataFrame
        What the first two files hold.
    """
    budget, worst = budget_table(budgets), worst_case_table(budgets, quantiles)
    budget.to_csv(folder.path("budget.csv"), index=False)
    worst.to_csv(folder.path("worst_case.csv"), index=False)
    if any(one.drawn.causes for one in budgets):
        board_table(budgets).to_csv(folder.path("worst_boards.csv"), index=False)
    return budget, worst


def case_labels(sweep: Sweep, cases: Sequence[int]) -> dict[int, str]:
    """Name cases by their number and what tells them apart."""
    labels = {}
    for case in cases:
        values = ", ".join(f"{path} {text}" for path, text in sweep.axis_labels(case).items())
        labels[case] = f"Case {case}{': ' + values if values else ''}"
    return labels


def work_out_worst_case(
    folder: RunFolder, sweep: Sweep, solver: BatchSolver, analyses: Analyses, results: Results
) -> pd.DataFrame | None:
    """Work out budget and worst case of a run with draws, and write them.

    Parameters
    ----------
    folder : RunFolder
        The run folder; its `quantiles.parquet` has been written.
    sweep : Sweep
        What was asked.
    solver : BatchSolver
        Where circuits are solved.
    analyses : Analyses
        The frequencies.
    results : Results
        What the run came to.

    Returns
    -------
    DataFrame or None
        As `worst_case_table`; none where the spec has no spots, too many cases, or none that could be solved.
    """
    done = results.cases.loc[results.cases["state"] == "done", "case"].tolist()
    if not sweep.spec.frequency.spots or not done or len(done) > MOST_CASES:
        return None
    budgets = list(budget_cases(sweep, solver, analyses, done, skip_unsolved=True))
    if not budgets:
        return None
    quantiles = pd.read_parquet(folder.path("quantiles.parquet"))
    return write_budget(folder, budgets, quantiles, case_labels(sweep, done))[1]
