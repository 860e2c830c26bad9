"""Worst case and budget of a sweep, as tables: extreme value, root-sum-square, and what the draws met."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import pandas as pd

from modepair.circuits import Deck
from modepair.runner.analyses import Analyses
from modepair.runner.budgeting import CaseBudget, budget_case
from modepair.runner.errors import SimulationError
from modepair.runner.plans import drawn_case
from modepair.runner.pool import BatchSolver
from modepair.runner.redraw import signed_parts
from modepair.sweeps import Sweep

__all__ = ["MOST_CASES", "board_table", "budget_cases", "budget_table", "worst_case_table"]

BUDGET_COLUMNS = (
    "case",
    "frequency_hz",
    "rank",
    "cause",
    "kind",
    "rho_re",
    "rho_im",
    "share",
    "alone_db",
    "without_db",
    "without_summed_db",
    "floor_db",
)

MOST_CASES = 200
"""Cases for which a run with tolerances works out budget and worst case."""


def budget_cases(
    sweep: Sweep,
    solver: BatchSolver,
    analyses: Analyses,
    cases: Sequence[int],
    *,
    skip_unsolved: bool = False,
) -> Iterator[CaseBudget]:
    """Work out the budgets of some cases.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    solver : BatchSolver
        Where circuits are solved.
    analyses : Analyses
        The frequencies; the spec's spots among them.
    cases : sequence of int
        Case numbers.
    skip_unsolved : bool
        Whether to pass over a case near which a circuit cannot be solved.

    Yields
    ------
    CaseBudget
        For each case.

    Raises
    ------
    SimulationError
        If a circuit near a case cannot be solved, unless such cases are passed over.
    """
    decks: dict[object, Deck] = {}
    for case in cases:
        try:
            yield budget_case(drawn_case(sweep, case), solver, analyses, sweep.spec.frequency.spots, decks)
        except SimulationError:
            if not skip_unsolved:
                raise


def budget_table(budgets: Sequence[CaseBudget]) -> pd.DataFrame:
    """List every contribution at every spot.

    Parameters
    ----------
    budgets : sequence of CaseBudget
        The cases.

    Returns
    -------
    DataFrame
        A row per case, spot and cause, by falling size: `case`, `frequency_hz`, `rank`, `cause`, `kind`, `rho_re`,
        `rho_im` (V/V, signed as on the worst board), `share` (of the sum of sizes), `alone_db` (CMRR if it were
        the only one), `without_db` (CMRR of the worst board without it, solved, for the first five) and
        `without_summed_db` (the same from the sum), and `floor_db`, the highest CMRR that the solve can tell, which
        stands for what is above it.
    """
    rows = []
    for budget in budgets:
        for spot in budget.spots:
            size = sum(abs(one.rho[0]) for one in spot.contributions)
            for rank, one in enumerate(spot.contributions):
                rho = complex(one.rho[0])
                solved = rank < len(spot.without)
                rows.append(
                    {
                        "case": budget.drawn.case,
                        "frequency_hz": spot.frequency_hz,
                        "rank": rank + 1,
                        "cause": one.name,
                        "kind": one.kind,
                        "rho_re": rho.real,
                        "rho_im": rho.imag,
                        "share": abs(rho) / size if size else 0.0,
                        "alone_db": spot.level_db(rho),
                        "without_db": spot.level_db(spot.without[rank]) if solved else None,
                        "without_summed_db": spot.level_db(spot.without_summed[rank]) if solved else None,
                        "floor_db": spot.floor_db,
                    }
                )
    return pd.DataFrame(rows, columns=list(BUDGET_COLUMNS))


def worst_case_table(budgets: Sequence[CaseBudget], quantiles: pd.DataFrame | None) -> pd.DataFrame:
    """Put the trade's three ways to a worst case side by side.

    Parameters
    ----------
    budgets : sequence of CaseBudget
        The cases.
    quantiles : DataFrame or None
        Content of `quantiles.parquet`, where draws were solved.

    Returns
    -------
    DataFrame
        A row per case and spot: `case`, `frequency_hz`, `nominal_db`, `extreme_value_db` (the worst board, solved),
        `root_sum_square_db`, `drawn_p1_db`, `drawn_lowest_db`, `lowest_draw`, and the check of the budget:
        `sum_db` (CMRR from the phasor sum of all contributions) and `residual` (what the sum leaves of the solved
        rho, as a share; NaN where this is below the floor). `floor_db` as in the budget.
    """
    rows = []
    for budget in budgets:
        for spot in budget.spots:
            row: dict[str, object] = {
                "case": budget.drawn.case,
                "frequency_hz": spot.frequency_hz,
                "nominal_db": spot.level_db(spot.nominal),
                "extreme_value_db": spot.level_db(spot.worst),
                "root_sum_square_db": spot.level_db(spot.root_sum_square),
                "drawn_p1_db": None,
                "drawn_lowest_db": None,
                "lowest_draw": None,
                "sum_db": spot.level_db(spot.estimate),
                "residual": spot.residual,
                "floor_db": spot.floor_db,
            }
            if quantiles is not None:
                here = quantiles[
                    (quantiles["case"] == budget.drawn.case)
                    & ((quantiles["frequency_hz"] / spot.frequency_hz - 1).abs() < 1e-9)
                ]
                if len(here):
                    row["drawn_p1_db"] = float(here["cmrr_db_p1"].iloc[0])
                    row["drawn_lowest_db"] = float(here["cmrr_db_lowest"].iloc[0])
                    row["lowest_draw"] = int(here["lowest_draw"].iloc[0])
            rows.append(row)
    return pd.DataFrame(rows)


def board_table(budgets: Sequence[CaseBudget]) -> pd.DataFrame:
    """List the parts of the worst boards: boards to build and measure.

    Parameters
    ----------
    budgets : sequence of CaseBudget
        The cases, with tolerances.

    Returns
    -------
    DataFrame
        A row per case, spot and part that has a tolerance: `case`, `frequency_hz`, `part`, `nominal`, `board` (SI
        units; a CMRR is the signed ratio).
    """
    rows = []
    for budget in budgets:
        moved = dict.fromkeys(part for cause in budget.drawn.causes for part in cause.parts)
        for spot, board in zip(budget.spots, budget.worst_boards, strict=True):
            rows += [
                {
                    "case": budget.drawn.case,
                    "frequency_hz": spot.frequency_hz,
                    "part": part,
                    "nominal": signed_parts(budget.drawn.parts).get(part),
                    "board": signed_parts(board)[part],
                }
                for part in moved
            ]
    return pd.DataFrame(rows)
