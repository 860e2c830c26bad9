"""Batches: the cases a worker solves in one go, on one deck. Light to import, since every worker does."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from modepair.circuits.deck import GAIN_NODES, TELLING_GAIN, Bias, Deck
from modepair.circuits.elements import GROUND
from modepair.runner.alterations import Alterations
from modepair.runner.analyses import Analyses
from modepair.runner.engine import Engine, engine
from modepair.runner.errors import EngineDeadError, SimulationError

__all__ = ["BATCH_CASES", "DRAWS_OF_BATCH", "Batch", "Solved", "check_biases", "solve_batch"]

BATCH_CASES = 128
"""Cases in a batch. The pivots of a solve depend, in the last digits, on the cases solved before on the same
deck; so batches are cut the same way whatever the number of processes, and each begins with a fresh load."""

DRAWS_OF_BATCH = 128
"""Draws in a batch, cut the same way for the same reason."""


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
    vectors : tuple of str
        The output nodes of the common-mode and the differential copy.
    """

    position: npt.NDArray[np.int64]
    deck: Deck
    values: npt.NDArray[np.float64]
    vectors: tuple[str, ...]

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
    lost : int
        Cases that cost the process they ran in.
    """

    position: npt.NDArray[np.int64]
    gains: npt.NDArray[np.complex128]
    failures: dict[int, str] = field(default_factory=dict)
    engine: str = ""
    lost: int = 0


def _unusable(batch: Batch) -> dict[int, str]:
    """Cases with values that ngspice must not see, since it would replace or misread them without a word."""
    names = batch.deck.names
    passive = np.array([name[0] in "RCL" for name in names], np.bool_)
    bad = ~np.isfinite(batch.values) | (passive & (batch.values <= 0))
    reasons = {}
    for row in np.flatnonzero(bad.any(axis=1)):
        column = int(bad[row].argmax())
        name, value = names[column], batch.values[row, column]
        reasons[int(batch.position[row])] = (
            f"element {name} would be {value:g}; it must be a finite number above zero"
        )
    return reasons


def check_biases(simulator: Engine, biases: Sequence[Bias]) -> None:
    """Check the operating point of the loaded circuit, if it has imported op-amps.

    Parameters
    ----------
    simulator : Engine
        The simulator, with the circuit loaded.
    biases : sequence of Bias
        What is to be checked.

    Raises
    ------
    SimulationError
        If there is no operating point, or a curve about it would mean nothing.
    """
    if not biases:
        return
    nodes = list(dict.fromkeys(node for bias in biases for node in bias.nodes if node != GROUND))
    try:
        found = simulator.operating_point([node.lower() for node in nodes])
    except EngineDeadError:
        raise
    except SimulationError as error:
        raise SimulationError(f"there is no operating point: {error}") from error
    volts = {GROUND: 0.0, **dict(zip(nodes, found.tolist(), strict=True))}
    for bias in biases:
        reason = bias.fault(*(volts[node] for node in bias.nodes))
        if reason:
            raise SimulationError(reason)


OwnGain = tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]
"""Size of a model's gain on the bench over frequency, shape (F,), and of its common-mode error; 0 if unknown."""

STILL_SHARE = 0.1
"""Share of its movement in common mode below which an op-amp's output counts as still in differential mode."""

STILL_VOLT = 1e-9
"""Movement per volt of drive below which an output tells nothing but round-off."""


def _own_gain(simulator: Engine, netlist: str, analyses: Analyses) -> OwnGain:
    nothing = np.zeros(analyses.frequency_hz.size)
    try:
        simulator.load(netlist, nonlinear=True)
        gain, common = np.abs(analyses.solve(simulator, GAIN_NODES))
    except EngineDeadError:
        raise
    except SimulationError:
        return nothing, nothing
    return gain, np.divide(common, gain, out=np.zeros_like(gain), where=gain > 0)


def _check_gains(
    biases: Sequence[Bias],
    own_gains: Mapping[str, OwnGain],
    volts: Mapping[str, npt.NDArray[np.complex128]],
) -> None:
    """Refuse a solve in which an imported op-amp's gain has gone.

    It is looked for in differential mode, and in common mode of an op-amp that has nothing to do otherwise, such as
    one that drives a guard; at the lowest frequency at which its output moves by half of the most that it does, since
    a capacitor in front may leave it still below.
    """
    for bias in biases:
        gain, error = own_gains[bias.reference]
        telling = gain >= TELLING_GAIN
        if not telling.any():
            continue
        still = np.zeros_like(gain, dtype=np.complex128)
        driven, common = (
            [still if node == GROUND else volts[node.lower()] for node in nodes]
            for nodes in (bias.driven, bias.nodes)
        )
        moved = [np.where(telling, np.abs(pins[2]), 0.0) for pins in (driven, common)]
        most = [float(one.max()) for one in moved]
        which = 1 if most[0] < STILL_SHARE * most[1] else 0
        if most[which] < STILL_VOLT:
            continue
        place = int(np.argmax(moved[which] >= 0.5 * most[which]))
        plus, minus, out = (complex(pin[place]) for pin in (driven, common)[which])
        reason = bias.gain_fault((plus, minus, out), float(gain[place]), float(error[place]))
        if reason:
            raise SimulationError(reason)


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
    failures = _unusable(batch)
    deck = batch.deck
    own_gains = {
        text: _own_gain(simulator, text, analyses) for text in {bias.reference for bias in deck.biases}
    }
    nodes = (node for bias in deck.biases for node in (*bias.driven, *bias.nodes))
    pins = list(dict.fromkeys(node.lower() for node in nodes if node != GROUND))
    vectors = (*batch.vectors, *(pin for pin in pins if pin not in batch.vectors))
    alterations = Alterations(deck)
    loaded: npt.NDArray[np.float64] | None = None
    for index, (position, values) in enumerate(zip(batch.position.tolist(), batch.values, strict=True)):
        if position in failures:
            continue
        try:
            if loaded is None:
                simulator.load(deck.text, nonlinear=deck.nonlinear)
                loaded = deck.values
            simulator.alter(alterations.between(loaded, values))
            loaded = values
            check_biases(simulator, deck.biases)
            solved = analyses.solve(simulator, vectors)
            if deck.biases:
                _check_gains(deck.biases, own_gains, dict(zip(vectors, solved, strict=True)))
            gains[index] = solved[:2]
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
