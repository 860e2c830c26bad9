"""How tight: the widest common grade of one tolerance with which the boards still pass."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from modepair.circuits import Deck
from modepair.reports import ModePair
from modepair.reports.yields import Yield
from modepair.runner.analyses import Analyses, plan_analyses
from modepair.runner.batches import Batch
from modepair.runner.budgeting import budget_case
from modepair.runner.engine import locate_library
from modepair.runner.errors import RequestError
from modepair.runner.model_warnings import model_warnings
from modepair.runner.plans import DrawnCase, case_draws, drawn_case
from modepair.runner.pool import BatchSolver, worker_pool
from modepair.runner.specs import read_spec
from modepair.sweeps import Spec, Streams, Sweep, expand

__all__ = ["GRADES", "CaseGrades", "GradeYield", "Tightening", "tighten"]

GRADES = (0.01, 0.005, 0.0025, 0.001, 0.0005, 0.00025, 0.0001, 0.00005)
"""Preferred grades of resistor tolerance and matching, as relative bounds (common practice, no source)."""


@dataclass(frozen=True)
class GradeYield:
    """The yield with one grade.

    Attributes
    ----------
    grade : float
        Relative bound; zero for perfect parts.
    found : Yield
        Boards that pass the mask.
    """

    grade: float
    found: Yield


@dataclass(frozen=True)
class CaseGrades:
    """What the grades come to in one case.

    Attributes
    ----------
    case : int
        Its number.
    grades : tuple of GradeYield
        From the widest tried to the widest that passes, or all, and then perfect parts.
    widest : float or None
        The widest grade that passes; none where none does.
    limit : tuple of (str, float)
        Where none does: the largest contributions to rho that remain with perfect parts, at the frequency of the
        smallest margin, with their shares.
    limit_frequency_hz : float
        That frequency.
    """

    case: int
    grades: tuple[GradeYield, ...]
    widest: float | None
    limit: tuple[tuple[str, float], ...] = ()
    limit_frequency_hz: float = 0.0


@dataclass(frozen=True)
class Tightening:
    """What a search for a grade came to.

    Attributes
    ----------
    spec : Spec
        What was asked.
    sweep : Sweep
        Its cases.
    entry : int
        Index of the tolerance entry.
    key : str
        "matching" or "absolute": the value that was varied.
    share : float
        The yield asked for.
    cases : tuple of CaseGrades
        Each case.
    warnings : tuple of str
        What its op-amp models cannot show.
    """

    spec: Spec
    sweep: Sweep
    entry: int
    key: str
    share: float
    cases: tuple[CaseGrades, ...]
    warnings: tuple[str, ...] = ()


def tighten(
    spec: Spec | str | Path,
    entry: int,
    *,
    share: float | None = None,
    jobs: int | None = None,
    progress: Callable[[int, float], None] | None = None,
) -> Tightening:
    """Find the widest grade of one tolerance with which enough boards keep the mask.

    Parameters
    ----------
    spec : Spec, str or Path
        The spec, or its file; it must have tolerances and `limits.cmrr`.
    entry : int
        Index of the entry in `tolerance.parts`. Its matching is varied where it has one, since only that reaches
        rho to first order; else its absolute tolerance.
    share : float, optional
        The yield asked for; `limits.yield` where absent, else 0.99.
    jobs : int, optional
        Number of worker processes; the number of processors where absent.
    progress : callable, optional
        Called with the case and the grade about to be tried.

    Returns
    -------
    Tightening
        Every grade meets the same boards (common random numbers), so that grades differ by the tolerance alone.

    Raises
    ------
    SpecError
        If the spec cannot be used.
    RequestError
        If it has no such entry, no tolerances, no mask, or the entry is op-amps' CMRR.
    SimulationError
        If a board cannot be solved.
    """
    if not isinstance(spec, Spec):
        spec = read_spec(spec)
    tolerance, limits = spec.tolerance, spec.limits
    if tolerance is None:
        raise RequestError("the spec has no tolerance section, so there is nothing to tighten")
    if limits is None or limits.cmrr is None:
        raise RequestError("the spec has no limits.cmrr, so no board can pass or fail")
    if not 0 <= entry < len(tolerance.parts):
        raise RequestError(
            f"set must be 0 to {len(tolerance.parts) - 1}, an entry of tolerance.parts, not {entry}"
        )
    if tolerance.parts[entry].reciprocal:
        raise RequestError(
            f"tolerance.parts[{entry}] is op-amps' CMRR, which has no grades; choose another op-amp"
        )
    locate_library()
    sweep = expand(spec)
    analyses = plan_analyses(spec.frequency)
    mask_db = limits.cmrr.at(analyses.frequency_hz)
    has_matching = any(f"tolerance.parts[{entry}].matching" in block.tolerances for block in sweep.blocks)
    key = "matching" if has_matching else "absolute"
    wanted = share if share is not None else limits.yield_least or 0.99
    streams = Streams(tolerance)
    with worker_pool() as factory, BatchSolver(factory, jobs or os.cpu_count() or 1) as solver:
        search = _Search(streams, solver, analyses, mask_db, entry, key, wanted, progress)
        cases = tuple(search.case(drawn_case(sweep, case)) for case in range(1, sweep.count + 1))
        warnings = model_warnings(sweep, factory, jobs or os.cpu_count() or 1)
    return Tightening(spec, sweep, entry, key, wanted, cases, warnings)


@dataclass
class _Search:
    streams: Streams
    solver: BatchSolver
    analyses: Analyses
    mask_db: np.ndarray[tuple[int], np.dtype[np.float64]]
    entry: int
    key: str
    share: float
    progress: Callable[[int, float], None] | None

    def case(self, drawn: DrawnCase) -> CaseGrades:
        """Try grades from the widest; perfect parts where none passes."""
        bounds = [cause.bound for cause in drawn.causes if cause.entry == self.entry]
        # The common factor of a matched set keeps its bound, and no grade is wider than it.
        ceiling = max(bounds, default=0.0) if self.key == "matching" else np.inf
        tried = []
        for grade in (*(grade for grade in GRADES if grade <= ceiling), 0.0):
            if self.progress:
                self.progress(drawn.case, grade)
            found, place = self._yield(self._graded(drawn, grade))
            tried.append(GradeYield(grade, found))
            if grade and found.value >= self.share:
                return CaseGrades(drawn.case, tuple(tried), grade)
        if tried[-1].found.value >= self.share:
            return CaseGrades(drawn.case, tuple(tried), None)
        limit = self._limit(self._graded(drawn, 0.0), place)
        return CaseGrades(drawn.case, tuple(tried), None, limit, float(self.analyses.frequency_hz[place]))

    def _graded(self, drawn: DrawnCase, grade: float) -> DrawnCase:
        """Give the case another grade of the entry."""
        causes = tuple(
            replace(cause, bound=grade) if cause.entry == self.entry and not cause.common else cause
            for cause in drawn.causes
        )
        return replace(drawn, causes=causes)

    def _yield(self, drawn: DrawnCase) -> tuple[Yield, int]:
        """Yield of all boards, and where the smallest margin of all is."""
        passed = total = 0
        worst, place = np.inf, 0
        decks: dict[object, Deck] = {}

        def batches() -> Iterator[Batch]:
            for plan in case_draws(drawn, self.streams, 0, decks):
                yield plan.batch()

        for solved in self.solver.solve(batches(), self.analyses):
            total += len(solved.position)
            good = [
                i for i, position in enumerate(solved.position.tolist()) if position not in solved.failures
            ]
            if not good:
                continue
            pair = ModePair(self.analyses.frequency_hz, solved.gains[good, 0], solved.gains[good, 1])
            margin = pair.cmrr_db - self.mask_db
            passed += int((np.nanmin(margin, axis=1) >= 0).sum())
            if np.nanmin(margin) < worst:
                worst = float(np.nanmin(margin))
                place = int(np.unravel_index(np.nanargmin(margin), margin.shape)[1])
        return Yield(passed, total), place

    def _limit(self, drawn: DrawnCase, place: int) -> tuple[tuple[str, float], ...]:
        """Name what limits with perfect parts: the budget at the frequency of the smallest margin."""
        spot = float(self.analyses.frequency_hz[place])
        budget = budget_case(drawn, self.solver, self.analyses, [spot])
        contributions = budget.spots[0].contributions
        size = sum(abs(one.rho[0]) for one in contributions) or 1.0
        return tuple((one.name, abs(one.rho[0]) / size) for one in contributions[:3])
