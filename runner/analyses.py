"""The analyses that solve a frequency plan: a sweep over the grid, then the spots that are not on it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from modepair.runner.engine import Engine
    from modepair.sweeps import Frequency

__all__ = ["Analyses", "plan_analyses", "spot_analyses"]

Frequencies = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Analyses:
    """AC analyses that together solve a plan's frequencies.

    Attributes
    ----------
    frequency_hz : ndarray, shape (F,)
        All frequencies, ascending.
    commands : tuple of (str, ndarray, ndarray)
        For each analysis its command, the frequencies it solves, and the place of each of these in
        `frequency_hz`, or -1 for one that is not wanted.
    """

    frequency_hz: Frequencies
    commands: tuple[tuple[str, Frequencies, npt.NDArray[np.int64]], ...]

    def solve(self, engine: Engine, vectors: Sequence[str]) -> npt.NDArray[np.complex128]:
        """Run the analyses on the loaded circuit.

        Parameters
        ----------
        engine : Engine
            The simulator, with a circuit loaded.
        vectors : sequence of str, length v
            Node names.

        Returns
        -------
        ndarray, shape (v, F)
            Complex node voltages.

        Raises
        ------
        SimulationError
            As `Engine.analyse`.
        """
        if len(self.commands) == 1:
            # One sweep solves the whole grid, and nothing needs to be put in order.
            command, frequencies, _ = self.commands[0]
            return engine.analyse(command, frequencies, vectors)
        result = np.empty((len(vectors), self.frequency_hz.size), np.complex128)
        for command, frequencies, places in self.commands:
            solved = engine.analyse(command, frequencies, vectors)
            wanted = places >= 0
            result[:, places[wanted]] = solved[:, wanted]
        return result


def plan_analyses(frequency: Frequency) -> Analyses:
    """Turn a spec's frequencies into analyses.

    Parameters
    ----------
    frequency : Frequency
        Start, stop, points per decade, and spots, which are solved at their exact values.

    Returns
    -------
    Analyses
        A single sweep where all spots lie on the grid. Spots off the grid cost an analysis for each pair.

    Notes
    -----
    A linear sweep of two points comes back with one in some versions of ngspice, so a pair of spots is
    solved with a third point half-way, which is dropped.
    """
    everything = np.asarray(frequency.frequency_hz)
    grid = np.asarray(frequency.grid_hz)
    if grid.size > 1:
        sweep = f"ac dec {frequency.points_per_decade:g} {float(grid[0])!r} {float(grid[-1])!r}"
    else:
        sweep = f"ac lin 1 {float(grid[0])!r} {float(grid[0])!r}"
    commands = [(sweep, grid, np.array([np.abs(everything - f).argmin() for f in grid]))]
    spots = [float(f) for f in frequency.off_grid_spots_hz]
    for pair in (spots[i : i + 2] for i in range(0, len(spots), 2)):
        places = [int(np.searchsorted(everything, f)) for f in pair]
        if len(pair) == 2:
            frequencies = np.array([pair[0], 0.5 * (pair[0] + pair[1]), pair[1]])
            places.insert(1, -1)
        else:
            frequencies = np.array(pair)
        command = f"ac lin {frequencies.size} {pair[0]!r} {pair[-1]!r}"
        commands.append((command, frequencies, np.array(places)))
    return Analyses(everything, tuple(commands))


def spot_analyses(spots_hz: Sequence[float]) -> Analyses:
    """Solve some frequencies and no others.

    Parameters
    ----------
    spots_hz : sequence of float, length F
        Frequencies in hertz, ascending.

    Returns
    -------
    Analyses
        One analysis for each.
    """
    commands = tuple(
        (f"ac lin 1 {float(f)!r} {float(f)!r}", np.array([float(f)]), np.array([place]))
        for place, f in enumerate(spots_hz)
    )
    return Analyses(np.array(spots_hz, dtype=np.float64), commands)
