"""A run: from a sweep spec to a run folder."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator, Sequence
from contextlib import nullcontext
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from functools import cached_property
from heapq import merge
from importlib import import_module
from pathlib import Path
from threading import Thread
from typing import TYPE_CHECKING

from modepair.runner.allowances import TIME_LIMIT_S
from modepair.runner.analyses import plan_analyses
from modepair.runner.batches import BATCH_CASES, DRAWS_OF_BATCH
from modepair.runner.curve_plots import Draughting, draughting
from modepair.runner.engine import locate_library
from modepair.runner.folder import run_folder
from modepair.runner.pool import BatchSolver, ExecutorFactory, worker_pool
from modepair.runner.specs import read_spec
from modepair.sweeps import Spec, Streams, Sweep, expand

if TYPE_CHECKING:
    import pandas as pd

    from modepair.reports.baselines import Baseline
    from modepair.runner.results import Progress

__all__ = ["Run", "run"]


@dataclass(frozen=True)
class Run:
    """What a run left behind.

    Attributes
    ----------
    folder : Path
        The run folder.
    spec : Spec
        What was asked.
    cases : DataFrame
        A row per case: `case`, a column per axis, the figures, and `state`.
    verdicts : DataFrame
        A row per case and judged quantity, as in verdicts.csv; no rows where nothing is judged.
    changes : sequence of str
        What else differs from what the baseline came from.
    warnings : sequence of str
        What its op-amp models cannot show, for the top of every page.
    """

    folder: Path
    spec: Spec
    cases: pd.DataFrame
    verdicts: pd.DataFrame
    changes: Sequence[str] = ()
    warnings: Sequence[str] = ()

    @cached_property
    def curves(self) -> pd.DataFrame:
        """A row per solved case, draw and frequency; read from the run folder."""
        import pandas as pd

        return pd.read_parquet(self.folder / "curves.parquet")

    @property
    def failed(self) -> int:
        """Number of failed cases."""
        return int((self.cases["state"] != "done").sum())


def run(
    spec: Spec | str | Path,
    output: str | Path | None = None,
    *,
    jobs: int | None = None,
    progress: Progress | None = None,
    executors: ExecutorFactory | None = None,
    draw: int | None = None,
    resume: bool = False,
    time_limit_s: float | None = None,
    baseline: Baseline | None = None,
    page: bool = False,
    drawing: Draughting | None = None,
) -> Run:
    """Run a sweep and write its run folder.

    Parameters
    ----------
    spec : Spec, str or Path
        The spec, or its file.
    output : str or Path, optional
        The run folder; `runs/<name of the spec's file>` where absent.
    jobs : int, optional
        Number of worker processes; the number of processors where absent.
    progress : callable, optional
        Called with the number of results so far and of all.
    executors : callable, optional
        Makes a `concurrent.futures.Executor` of so many workers, in place of local processes.
    draw : int, optional
        Run that one of the spec's draws alone, in place of nominal parts and all draws; the run folder is then
        `runs/<name>-draw-<draw>` where `output` is absent.
    resume : bool
        Go on from where a run of the same into the same folder was killed or stopped, to the same bytes; from the
        beginning where there is none.
    time_limit_s : float, optional
        Seconds after which a case is given up; 30 and some more by the number of frequencies where absent.
    baseline : Baseline, optional
        Curves accepted earlier, to compare with.
    page : bool
        Whether to write `report.html` too, which takes about two seconds more; never of one draw.
    drawing : Draughting, optional
        Draws the curves, where it was started before; a process beside this one that is started here where absent.

    Returns
    -------
    Run
        With a row for each case; a case that failed says why, and the others are complete.

    Raises
    ------
    SpecError
        If the spec cannot be used.
    EngineMissingError
        If there is no ngspice library.
    OutputError
        If the run folder cannot be written, another run is writing it, or what is there to resume is of another
        spec, other op-amp data or other versions.
    RequestError
        If the spec has no such draw.
    """
    started = datetime.now(UTC)
    clock = time.perf_counter()
    if not isinstance(spec, Spec):
        spec = read_spec(spec)
    locate_library()
    nominal = sweep = expand(spec)
    name = Path(spec.path).stem
    if draw is not None:
        from modepair.runner.redraw import board_sweep, board_table

        sweep, name = board_sweep(nominal, draw), f"{name}-draw-{draw}"
    draws = int(spec.tolerance.draws) if spec.tolerance and draw is None else 0
    target = Path(output) if output is not None else Path("runs") / name
    workers = min(jobs or os.cpu_count() or 1, _least_batches(sweep, draws))
    with (
        run_folder(target, resume=resume) as folder,
        worker_pool() as local,
        BatchSolver(executors or local, workers, time_limit_s or TIME_LIMIT_S) as solver,
        nullcontext(drawing) if drawing else draughting(beside=executors is None) as draughtsman,
    ):
        solver.warm()
        # What follows takes a while to import, in which the workers start.
        from modepair.runner.decks import write_decks
        from modepair.runner.journal import Journal, run_key
        from modepair.runner.judging import judge_run
        from modepair.runner.measuring import measured_section, write_measured
        from modepair.runner.plans import Plan, plan_batches, plan_draws
        from modepair.runner.record import provenance, run_record
        from modepair.runner.results import collect

        analyses = plan_analyses(spec.frequency)
        plans = plan_batches(sweep, draws + 1)
        drawn = plan_draws(sweep, Streams(spec.tolerance)) if spec.tolerance and draws else ()
        ordered: Iterator[Plan] = merge(plans, drawn, key=lambda plan: int(plan.position[0]))
        kinds = _kinds(sweep)
        # The pages are needed last and take long to import: it is done while the workers solve.
        pages = ["modepair.runner.pages", *(["modepair.runner.board_pages"] if draws else [])]
        Thread(target=lambda: [import_module(name) for name in pages], daemon=True).start()
        with Journal(folder, run_key(sweep, plans, analyses, draws, draw or 0)) as journal:
            batches = journal.batches(ordered)
            solved = solver.solve(batches, analyses, lambda position: kinds[position // (draws + 1)])
            results = collect(
                journal.recorded(solved),
                sweep,
                analyses.frequency_hz,
                folder,
                progress,
                draws=draws,
                only_draw=draw or 0,
            )
        from modepair.runner.pages import begin_curves, write_pages

        curves = begin_curves(folder, sweep, results, draughtsman)
        judged = judge_run(
            sweep,
            results.cases,
            folder.path("curves.parquet"),
            baseline=baseline,
            engine=results.engine,
            draw=draw or 0,
        )
        results = replace(results, cases=judged.cases)
        results.cases.to_csv(folder.path("cases.csv"), index=False, chunksize=500)
        if len(judged.verdicts):
            judged.verdicts.to_csv(folder.path("verdicts.csv"), index=False)
        worst = None
        if draws:
            from modepair.runner.budget_pages import work_out_worst_case

            worst = work_out_worst_case(folder, sweep, solver, analyses, results)
        if draw is not None:
            board_table(nominal, sweep).to_csv(folder.path("board.csv"), index=False)
        write_decks(folder, sweep, plans, analyses)
        from modepair.runner.model_warnings import model_warnings

        warnings = model_warnings(sweep, executors or local, workers)
        measured = write_measured(folder, spec, results.cases) if draw is None else results.cases[:0]
        origin = provenance(spec, results.engine, started)
        write_pages(
            folder,
            sweep,
            results,
            origin,
            judged,
            curves,
            measured_section(measured, spec, results.cases),
            worst,
            warnings,
        )
        if page and draw is None:
            from modepair.runner.report import write_report

            write_report(folder, spec, results.cases, judged.verdicts, origin, baseline, warnings)
        folder.publish(run_record(sweep, results, started, time.perf_counter() - clock, warnings))
    return Run(folder.target, spec, results.cases, judged.verdicts, judged.changes, warnings)


def _least_batches(sweep: Sweep, draws: int) -> int:
    """Number of batches there are at least, and so of workers that have something to do."""
    nominal = sum(-(-len(block.case) // BATCH_CASES) for block in sweep.blocks)
    return nominal + sweep.count * -(-draws // DRAWS_OF_BATCH)


def _kinds(sweep: Sweep) -> list[int]:
    """Number the kinds of cases, by topology and op-amps: one kind for each block."""
    kinds = [0] * sweep.count
    for number, block in enumerate(sweep.blocks):
        for case in block.case.tolist():
            kinds[case - 1] = number
    return kinds
