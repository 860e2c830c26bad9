"""Results of a run as they come: curves to their file, figures to the table of cases, some curves kept to plot."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pandas as pd

from modepair.reports import ModePair, figures
from modepair.runner.batches import Solved
from modepair.runner.collecting import in_order
from modepair.runner.curves import CurvesWriter
from modepair.sweeps import Sweep

__all__ = ["Progress", "Results", "collect"]

Progress = Callable[[int, int], None]

KEPT_CURVES = 400
"""Curves kept in memory for plots; of more cases, every so many."""


@dataclass(frozen=True)
class Results:
    """What a run came to.

    Attributes
    ----------
    cases : DataFrame
        A row per case: `case`, a column per axis, the figures, `state`.
    kept : ModePair or None
        Gains of the cases kept for plots, shape (k, F); none where every case failed.
    kept_case : ndarray of int, shape (k,)
        Their case numbers.
    engine : str
        Version of ngspice.
    """

    cases: pd.DataFrame
    kept: ModePair | None
    kept_case: npt.NDArray[np.int64]
    engine: str


class _Keeper:
    """Keeps evenly spaced curves, and those with the lowest and the highest CMRR."""

    def __init__(self, count: int) -> None:
        self.every = -(-count // KEPT_CURVES)
        self.gains: dict[int, npt.NDArray[np.complex128]] = {}
        self.extremes: dict[str, tuple[float, int, npt.NDArray[np.complex128]]] = {}

    def take(
        self, case: npt.NDArray[np.int64], gains: npt.NDArray[np.complex128], lowest_db: pd.Series[float]
    ) -> None:
        for index in np.flatnonzero((case - 1) % self.every == 0):
            self.gains[int(case[index])] = gains[index].copy()
        for name, sign in (("lowest", 1.0), ("highest", -1.0)):
            index = int((sign * lowest_db.to_numpy()).argmin())
            rank = sign * float(lowest_db.iloc[index])
            if name not in self.extremes or rank < self.extremes[name][0]:
                self.extremes[name] = (rank, int(case[index]), gains[index].copy())

    def kept(self) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.complex128]] | None:
        for _, case, gains in self.extremes.values():
            self.gains.setdefault(case, gains)
        if not self.gains:
            return None
        case = np.array(sorted(self.gains))
        return case, np.stack([self.gains[number] for number in case.tolist()])


def collect(
    solved: Iterable[Solved],
    sweep: Sweep,
    frequency_hz: npt.NDArray[np.float64],
    curves: Path,
    progress: Progress | None = None,
) -> Results:
    """Write curves and gather figures while results come in.

    Parameters
    ----------
    solved : iterable of Solved
        Batches of a nominal sweep: position p is case p + 1.
    sweep : Sweep
        The sweep.
    frequency_hz : ndarray, shape (F,)
        The solved frequencies.
    curves : Path
        The curves file to write.
    progress : callable, optional
        Called with the number of results so far and of all.

    Returns
    -------
    Results
        Memory grows with the table of cases only, not with their curves.
    """
    spots = sweep.spec.frequency.spots
    keeper = _Keeper(sweep.count)
    tables: list[pd.DataFrame] = []
    engine = ""

    def counted(source: Iterable[Solved]) -> Iterable[Solved]:
        nonlocal engine
        done = 0
        for batch in source:
            engine = engine or batch.engine
            done += len(batch.position)
            if progress:
                progress(done, sweep.count)
            yield batch

    with CurvesWriter(curves) as writer:
        for chunk in in_order(counted(solved), sweep.count):
            case = chunk.position + 1
            good = np.array([position not in chunk.failures for position in chunk.position.tolist()])
            table = pd.DataFrame({"case": case})
            if good.any():
                gains = chunk.gains[good]
                pair = ModePair(frequency_hz, gains[:, 0], gains[:, 1])
                writer.add(case[good], np.zeros(int(good.sum()), np.int64), pair)
                found = figures(pair, spots)
                keeper.take(case[good], gains, found["cmrr_db_lowest"])
                table = table.join(found.set_axis(np.flatnonzero(good)))
            table["state"] = [
                f"failed: {chunk.failures[place]}" if place in chunk.failures else "done"
                for place in chunk.position.tolist()
            ]
            tables.append(table)
    cases = pd.concat(tables, ignore_index=True)
    if "above_floor" in cases:
        cases["above_floor"] = cases["above_floor"].fillna("")
    cases = sweep.frame().merge(cases, on="case", validate="one_to_one")
    kept = keeper.kept()
    if kept is None:
        return Results(cases, None, np.empty(0, np.int64), engine)
    return Results(cases, ModePair(frequency_hz, kept[1][:, 0], kept[1][:, 1]), kept[0], engine)
