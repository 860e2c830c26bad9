"""Solves a stage with the tool's own deck and engine, at any frequencies, for the tests to compare."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from modepair.circuits import COPIES, OUTPUT, BuiltStage, netlist, structures
from modepair.reports import ModePair
from modepair.runner.engine import engine

Complex = npt.NDArray[np.complex128]


def _solve(text: str, frequency_hz: npt.ArrayLike) -> Complex:
    simulator = engine()
    simulator.load(text)
    vectors = [f"{OUTPUT}_{copy}" for copy in COPIES]
    columns = [
        simulator.analyse(f"ac lin 1 {f!r} {f!r}", np.array([f]), vectors)
        for f in np.atleast_1d(np.asarray(frequency_hz, float)).tolist()
    ]
    return np.concatenate(columns, axis=1)


def solve(topology: str, parts: Mapping[str, float], frequency_hz: npt.ArrayLike) -> ModePair:
    """Common-mode and differential gain of one stage, each frequency an analysis of its own."""
    (structure,) = structures(BuiltStage(topology), dict(parts), 1)
    common, differential = _solve(structure.text(0), frequency_hz)
    return ModePair(np.atleast_1d(np.asarray(frequency_hz, float)), common, differential)


def solve_drives(
    topology: str, parts: Mapping[str, float], frequency_hz: npt.ArrayLike, plus: float, minus: float
) -> Complex:
    """Output for any two generator amplitudes."""
    (structure,) = structures(BuiltStage(topology), dict(parts), 1)
    drives: dict[str, tuple[float, float]] = dict.fromkeys(COPIES, (plus, minus))
    return _solve(netlist(structure.elements(np.array([0])), drives=drives), frequency_hz)[0]


def solve_cases(
    topology: str, parts: Mapping[str, float | Sequence[float]], frequency_hz: npt.ArrayLike
) -> ModePair:
    """Gains of many cases, part values given as arrays, each case loaded afresh."""
    arrays = {name: np.atleast_1d(np.asarray(value, float)) for name, value in parts.items()}
    count = max(len(array) for array in arrays.values())
    full = {name: np.broadcast_to(array, (count,)) for name, array in arrays.items()}
    pairs = [
        solve(topology, {name: float(array[row]) for name, array in full.items()}, frequency_hz)
        for row in range(count)
    ]
    return ModePair(
        pairs[0].frequency_hz,
        np.array([pair.common_gain for pair in pairs]),
        np.array([pair.differential_gain for pair in pairs]),
    )
