"""Solving circuits given as part values, outside a sweep's own order."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
import numpy.typing as npt

from modepair.circuits import BuiltStage, Deck, structures
from modepair.reports import ModePair
from modepair.runner.analyses import Analyses
from modepair.runner.batches import BATCH_CASES, Batch
from modepair.runner.errors import SimulationError
from modepair.runner.plans import VECTORS
from modepair.runner.pool import BatchSolver

__all__ = ["solve_rows"]

Value = float | npt.NDArray[np.float64]


def solve_rows(
    solver: BatchSolver,
    stage: BuiltStage,
    parts: Mapping[str, Value],
    count: int,
    analyses: Analyses,
    decks: dict[object, Deck],
) -> ModePair:
    """Solve circuits of one stage.

    Parameters
    ----------
    solver : BatchSolver
        Where they are solved.
    stage : BuiltStage
        Their stage.
    parts : mapping of str to float or ndarray, shape (n,)
        Part values in SI units.
    count : int
        Number of circuits n.
    analyses : Analyses
        What to run on each.
    decks : dict
        Decks by structure, kept from one call to the next.

    Returns
    -------
    ModePair
        Gains of shape (n, F).

    Raises
    ------
    SimulationError
        If one of them fails.
    """

    def batches() -> Iterator[Batch]:
        for structure in structures(stage, parts, count):
            deck = decks.get(structure.key) or decks.setdefault(structure.key, structure.deck())
            for start in range(0, len(structure.rows), BATCH_CASES):
                rows = structure.rows[start : start + BATCH_CASES]
                yield Batch(rows, deck, structure.values(rows), VECTORS)

    gains = np.empty((count, 2, analyses.frequency_hz.size), np.complex128)
    for solved in solver.solve(batches(), analyses):
        if solved.failures:
            raise SimulationError(next(iter(solved.failures.values())))
        gains[solved.position] = solved.gains
    return ModePair(analyses.frequency_hz, gains[:, 0], gains[:, 1])
