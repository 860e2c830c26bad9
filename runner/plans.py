"""Plans: a sweep cut into batches."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
import numpy.typing as npt

from modepair.circuits import COPIES, OUTPUT, BuiltStage, Deck, Structure, built_stage, structures
from modepair.runner.batches import BATCH_CASES, DRAWS_OF_BATCH, Batch
from modepair.sweeps import Streams, Sweep, Variate, boards, variates

__all__ = [
    "BatchPlan",
    "DrawnCase",
    "Plan",
    "case_draws",
    "drawn_case",
    "plan_batches",
    "plan_draws",
]

VECTORS = tuple(f"{OUTPUT}_{copy}" for copy in COPIES)


class Plan(Protocol):
    """A batch not yet worked out."""

    @property
    def position(self) -> npt.NDArray[np.int64]:
        """Its results' places, ascending."""

    def batch(self) -> Batch:
        """Work out the element values."""


@dataclass(frozen=True)
class BatchPlan:
    """A batch of nominal cases, not yet worked out: their numbers, a structure, its deck, and the rows of it."""

    case: npt.NDArray[np.int64]
    position: npt.NDArray[np.int64]
    structure: Structure
    deck: Deck
    rows: npt.NDArray[np.int64]

    def batch(self) -> Batch:
        """Work out the element values."""
        return Batch(self.position, self.deck, self.structure.values(self.rows), VECTORS)


def plan_batches(sweep: Sweep, stride: int = 1) -> list[BatchPlan]:
    """Cut the nominal cases of a sweep into batches.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec.
    stride : int
        Distance of two cases in the order of results: 1, or one more than the draws of each.

    Returns
    -------
    list of BatchPlan
        By the first case of each. A batch holds cases of one structure, one topology and one choice of
        op-amps.
    """
    plans = []
    decks: dict[object, Deck] = {}
    for block in sweep.blocks:
        for structure in structures(built_stage(sweep.spec, block), block.parts, len(block.case)):
            deck = decks.get(structure.key) or decks.setdefault(structure.key, structure.deck())
            for start in range(0, len(structure.rows), BATCH_CASES):
                rows = structure.rows[start : start + BATCH_CASES]
                case = block.case[rows]
                plans.append(BatchPlan(case, (case - 1) * stride, structure, deck, rows))
    return sorted(plans, key=lambda plan: int(plan.position[0]))


@dataclass(frozen=True)
class DrawnCase:
    """A case and what varies in it.

    Attributes
    ----------
    case : int
        Its number.
    stage : BuiltStage
        Its stage.
    parts : mapping of str to float
        Its nominal part values.
    causes : tuple of Variate
        What varies.
    """

    case: int
    stage: BuiltStage
    parts: Mapping[str, float]
    causes: tuple[Variate, ...]


def drawn_case(sweep: Sweep, case: int) -> DrawnCase:
    """Gather one case's nominal parts and variates.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec, with a tolerance section or without.
    case : int
        Case number.

    Returns
    -------
    DrawnCase
        Without variates where the spec has no tolerances.
    """
    block = next(block for block in sweep.blocks if case in block.case)
    row = int(np.searchsorted(block.case, case))

    def at_row(values: Mapping[str, float | npt.NDArray[np.float64]]) -> dict[str, float]:
        return {
            name: float(value[row]) if isinstance(value, np.ndarray) else value
            for name, value in values.items()
        }

    parts = at_row(block.parts)
    tolerance = sweep.spec.tolerance
    causes = variates(tolerance, at_row(block.tolerances), parts) if tolerance else ()
    return DrawnCase(case, built_stage(sweep.spec, block), parts, causes)


@dataclass(frozen=True)
class DrawPlan:
    """Some draws of a case, not yet drawn."""

    position: npt.NDArray[np.int64]
    drawn: DrawnCase
    streams: Streams
    start: int
    decks: dict[object, Deck] = field(repr=False)

    def batch(self) -> Batch:
        """Draw the boards and work out their element values."""
        count = len(self.position)
        errors = self.streams.errors(self.drawn.causes, self.start, self.start + count)
        parts = boards(self.drawn.parts, self.drawn.causes, errors)
        # Tolerances below 100 % leave every part on its side of zero, so all boards of a case share a structure.
        (structure,) = structures(self.drawn.stage, parts, count)
        deck = self.decks.get(structure.key) or self.decks.setdefault(structure.key, structure.deck())
        return Batch(self.position, deck, structure.values(structure.rows), VECTORS)


def plan_draws(sweep: Sweep, streams: Streams) -> Iterator[DrawPlan]:
    """Cut the draws of all cases into batches.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec, with a tolerance section.
    streams : Streams
        Its random numbers.

    Yields
    ------
    DrawPlan
        Case by case; draw d of case c has the place (c - 1)(draws + 1) + d, behind the nominal run's.
    """
    decks: dict[object, Deck] = {}
    for case in range(1, sweep.count + 1):
        first = (case - 1) * (streams.draws + 1) + 1
        yield from case_draws(drawn_case(sweep, case), streams, first, decks)


def case_draws(
    drawn: DrawnCase, streams: Streams, first: int, decks: dict[object, Deck]
) -> Iterator[DrawPlan]:
    """Cut the draws of one case into batches.

    Parameters
    ----------
    drawn : DrawnCase
        The case.
    streams : Streams
        Its random numbers.
    first : int
        Place of draw 1 in the order of results.
    decks : dict
        Decks by structure, kept from one case to the next.

    Yields
    ------
    DrawPlan
        In the order of the draws.
    """
    for start in range(0, streams.draws, DRAWS_OF_BATCH):
        count = min(DRAWS_OF_BATCH, streams.draws - start)
        yield DrawPlan(first + np.arange(start, start + count), drawn, streams, start, decks)
