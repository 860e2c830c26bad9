"""A budget run: from a spec to the error budget of its cases and a folder that holds it."""

from __future__ import annotations

import os
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from modepair.runner.analyses import plan_analyses
from modepair.runner.engine import locate_library
from modepair.runner.errors import RequestError
from modepair.runner.folder import run_folder
from modepair.runner.pool import BatchSolver, worker_pool
from modepair.runner.specs import read_spec
from modepair.sweeps import Spec, expand

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["BudgetRun", "run_budget"]


@dataclass(frozen=True)
class BudgetRun:
    """What a budget run came to.

    Attributes
    ----------
    folder : Path
        Where it was written.
    spec : Spec
        What was asked.
    budget, worst_case : DataFrame
        As `modepair.runner.worst_case` makes them.
    labels : dict of int to str
        For each case number what tells it apart.
    warnings : tuple of str
        What its op-amp models cannot show.
    """

    folder: Path
    spec: Spec
    budget: pd.DataFrame
    worst_case: pd.DataFrame
    labels: dict[int, str]
    warnings: tuple[str, ...] = ()


def run_budget(
    spec: Spec | str | Path,
    output: str | Path | None = None,
    *,
    case: int | None = None,
    jobs: int | None = None,
) -> BudgetRun:
    """Work out error budgets and write them to a folder.

    Parameters
    ----------
    spec : Spec, str or Path
        The spec, or its file; it must have spots.
    output : str or Path, optional
        The folder; `runs/<name of the spec's file>-budget` where absent.
    case : int, optional
        One case; all where absent.
    jobs : int, optional
        Number of worker processes; the number of processors where absent.

    Returns
    -------
    BudgetRun
        With `budget.csv`, `worst_case.csv`, `worst_boards.csv` and charts in its folder.

    Raises
    ------
    SpecError
        If the spec cannot be used.
    RequestError
        If it has no spots or no such case.
    SimulationError
        If a circuit cannot be solved.
    OutputError
        If the folder cannot be written.
    """
    started = datetime.now(UTC)
    if not isinstance(spec, Spec):
        spec = read_spec(spec)
    sweep = expand(spec)
    if not spec.frequency.spots:
        raise RequestError("a budget is worked out at spots, and the spec has none; give frequency.spots")
    if case is not None and not 1 <= case <= sweep.count:
        raise RequestError(f"case must be 1 to {sweep.count}, not {case}")
    locate_library()
    target = Path(output) if output is not None else Path("runs") / f"{Path(spec.path).stem}-budget"
    numbers = [case] if case is not None else list(range(1, sweep.count + 1))
    with (
        run_folder(target) as folder,
        worker_pool() as factory,
        BatchSolver(factory, jobs or os.cpu_count() or 1) as solver,
    ):
        solver.warm()
        from modepair.runner.budget_pages import case_labels, plot_budgets, write_budget
        from modepair.runner.model_warnings import model_warnings
        from modepair.runner.record import versions
        from modepair.runner.worst_case import budget_cases

        budgets = list(budget_cases(sweep, solver, plan_analyses(spec.frequency), numbers))
        labels = case_labels(sweep, numbers)
        budget, worst = write_budget(folder, budgets, None, labels)
        warnings = model_warnings(sweep, factory, jobs or os.cpu_count() or 1)
        plot_budgets(folder, budgets, labels, spec.title)
        folder.publish(
            {
                "title": spec.title,
                "spec_file": Path(spec.path).name,
                "spec_digest": spec.digest,
                "spec": spec.text,
                "warnings": list(warnings),
                "versions": versions(""),
                "started": started.isoformat(timespec="seconds"),
            }
        )
    return BudgetRun(folder.target, spec, budget, worst, labels, warnings)
