"""Budgets as files of a run folder."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import pandas as pd

from modepair.reports import write_plot
from modepair.reports.budget_plots import SpotContributions, plot_budget_shares, plot_budget_spots
from modepair.runner.analyses import Analyses
from modepair.runner.budgeting import CaseBudget
from modepair.runner.folder import RunFolder
from modepair.runner.pool import BatchSolver
from modepair.runner.results import Results
from modepair.runner.worst_case import MOST_CASES, board_table, budget_cases, budget_table, worst_case_table
from modepair.sweeps import Sweep

__all__ = ["case_labels", "plot_budgets", "work_out_worst_case", "write_budget"]

PLOTTED_CASES = 24
"""Cases for which charts are drawn."""


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


def plot_budgets(
    folder: RunFolder, budgets: Sequence[CaseBudget], labels: Mapping[int, str], title: str
) -> None:
    """Draw bars at the spots and shares over frequency, for up to `PLOTTED_CASES` cases.

    Parameters
    ----------
    folder : RunFolder
        Gets `budget-case-1-spots.png`, `budget-case-1-shares.png` and so on, and the same as SVG.
    budgets : sequence of CaseBudget
        The cases.
    labels : mapping of int to str
        For each case number what tells it apart.
    title : str
        Title of the spec.
    """
    for one in budgets[:PLOTTED_CASES]:
        name, label = f"budget-case-{one.drawn.case}", labels[one.drawn.case]
        spots = [
            SpotContributions(spot.frequency_hz, spot.contributions, abs(spot.worst)) for spot in one.spots
        ]
        if any(spot.contributions for spot in spots):
            bars = plot_budget_spots(spots, title=title, subtitle=label)
            write_plot(bars, folder.path(f"{name}-spots"))
            if len(one.frequency_hz) < 2:
                continue
            shares = plot_budget_shares(one.frequency_hz, one.contributions, title=title, subtitle=label)
            write_plot(shares, folder.path(f"{name}-shares"))


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
