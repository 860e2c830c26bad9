"""Plans: a sweep cut into batches."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from modepair.circuits import COPIES, OUTPUT, Deck, Structure, structures
from modepair.runner.batches import Batch
from modepair.sweeps import Sweep

__all__ = ["BATCH_CASES", "BatchPlan", "plan_batches"]

BATCH_CASES = 64
"""Cases in a batch. The pivots of a solve depend, in the last digits, on the cases solved before on the same
deck; so batches are cut the same way whatever the number of processes, and each begins with a fresh load."""

VECTORS = tuple(f"{OUTPUT}_{copy}" for copy in COPIES)


@dataclass(frozen=True)
class BatchPlan:
    """A batch not yet worked out: a structure, its deck, and the rows of it."""

    position: npt.NDArray[np.int64]
    structure: Structure
    deck: Deck
    rows: npt.NDArray[np.int64]

    def batch(self) -> Batch:
        """Work out the element values."""
        return Batch(self.position, self.deck, self.structure.values(self.rows), VECTORS)


def plan_batches(sweep: Sweep) -> list[BatchPlan]:
    """Cut a sweep into batches.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec.

    Returns
    -------
    list of BatchPlan
        By the first case of each. A batch holds cases of one structure, one topology and one choice of
        op-amps.
    """
    plans = []
    decks: dict[object, Deck] = {}
    for block in sweep.blocks:
        for structure in structures(block.topology, block.parts, len(block.case)):
            deck = decks.get(structure.key) or decks.setdefault(structure.key, structure.deck())
            for start in range(0, len(structure.rows), BATCH_CASES):
                rows = structure.rows[start : start + BATCH_CASES]
                plans.append(BatchPlan(block.case[rows] - 1, structure, deck, rows))
    return sorted(plans, key=lambda plan: int(plan.position[0]))
