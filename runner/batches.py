"""Batches: the cases a worker solves in one go, on one deck."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from modepair.circuits import COPIES, OUTPUT, Deck, Structure, structures
from modepair.runner.analyses import Analyses
from modepair.runner.engine import Engine, engine
from modepair.runner.errors import EngineDeadError, SimulationError
from modepair.sweeps import Sweep

__all__ = ["BATCH_CASES", "Batch", "BatchPlan", "Solved", "plan_batches", "solve_batch"]

BATCH_CASES = 64
"""Cases in a batch. The pivots of a solve depend, in the last digits, on the cases solved before on the same
deck; so batches are cut the same way whatever the number of processes, and each begins with a fresh load."""

VECTORS = tuple(f"{OUTPUT}_{copy}" for copy in COPIES)


@dataclass(frozen=True)
class Batch:
    """Cases of one structure, as a worker takes them.

    Attributes
    ----------
    position : ndarray of int, shape (k,)
        Their places in the order of results, ascending, from 0.
    deck : Deck
        Their deck.
    values : ndarray, shape (k, m)
        Their element values.
    """

    position: npt.NDArray[np.int64]
    deck: Deck
    values: npt.NDArray[np.float64]

    def part(self, start: int, stop: int) -> Batch:
        """Some of the cases, as a batch of their own."""
        return replace(self, position=self.position[start:stop], values=self.values[start:stop])


@dataclass(frozen=True)
class Solved:
    """What came of a batch.

    Attributes
    ----------
    position : ndarray of int, shape (k,)
        Places in the order of results.
    gains : ndarray, shape (k, 2, F)
        Complex common-mode and differential gain of each case; NaN where it failed.
    failures : dict of int to str
        Reason for each position that failed.
    engine : str
        Version of ngspice; empty where none ran.
    """

    position: npt.NDArray[np.int64]
    gains: npt.NDArray[np.complex128]
    failures: dict[int, str] = field(default_factory=dict)
    engine: str = ""


@dataclass(frozen=True)
class BatchPlan:
    """A batch not yet worked out: a structure, its deck, and the rows of it."""

    position: npt.NDArray[np.int64]
    structure: Structure
    deck: Deck
    rows: npt.NDArray[np.int64]

    def batch(self) -> Batch:
        """Work out the element values."""
        return Batch(self.position, self.deck, self.structure.values(self.rows))


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


def _unusable(deck: Deck, values: npt.NDArray[np.float64]) -> str | None:
    """Reason why ngspice must not see these values: it would replace or misread them without a word."""
    for commands, value in zip(deck.commands, values.tolist(), strict=True):
        element = commands[0].split()[1]
        if not np.isfinite(value) or (element[0] in "rc" and value <= 0):
            name = element.rpartition("_")[0].upper()
            return f"element {name} would be {value:g}; it must be a finite number above zero"
    return None


def _alterations(deck: Deck, old: npt.NDArray[np.float64], new: npt.NDArray[np.float64]) -> Iterator[str]:
    for index in np.flatnonzero(old != new):
        value = repr(float(new[index]))
        for command in deck.commands[index]:
            yield command + value


def solve_batch(batch: Batch, analyses: Analyses, simulator: Engine | None = None) -> Solved:
    """Solve the cases of a batch, each in both drives.

    Parameters
    ----------
    batch : Batch
        The cases.
    analyses : Analyses
        What to run on each.
    simulator : Engine, optional
        The engine; this process's own where absent.

    Returns
    -------
    Solved
        Every case, solved or with its reason.

    Raises
    ------
    EngineDeadError
        If the simulator is beyond use.
    """
    simulator = simulator or engine()
    gains = np.full((len(batch.position), 2, analyses.frequency_hz.size), np.nan, np.complex128)
    failures: dict[int, str] = {}
    loaded: npt.NDArray[np.float64] | None = None
    for index, (position, values) in enumerate(zip(batch.position.tolist(), batch.values, strict=True)):
        reason = _unusable(batch.deck, values)
        if reason:
            failures[position] = reason
            continue
        try:
            if loaded is None:
                simulator.load(batch.deck.text)
                loaded = batch.deck.values
            simulator.alter(list(_alterations(batch.deck, loaded, values)))
            loaded = values
            gains[index] = analyses.solve(simulator, VECTORS)
        except EngineDeadError:
            raise
        except SimulationError as error:
            failures[position] = str(error)
            loaded = None
            continue
        if not gains[index, 1].all():
            gains[index] = np.nan
            failures[position] = "the stage passes no differential signal at some frequency"
    return Solved(batch.position, gains, failures, simulator.version)
