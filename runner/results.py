"""Results of a run as they come: curves to their file, figures to the table of cases, some curves kept to plot."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from contextlib import ExitStack
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from modepair.reports import ModePair, figures
from modepair.reports.figures import in_order_of_figures
from modepair.runner.batches import Solved
from modepair.runner.boards import Boards
from modepair.runner.collecting import in_order
from modepair.runner.curves import CurvesWriter
from modepair.runner.folder import RunFolder
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
    boards : Boards or None
        What the draws came to; none where nothing was drawn.
    """

    cases: pd.DataFrame
    kept: ModePair | None
    kept_case: npt.NDArray[np.int64]
    engine: str
    boards: Boards | None = None


class _Keeper:
    """Keeps evenly spaced curves, and those with the lowest and the highest CMRR."""

    def __init__(self, count: int) -> None:
        self.every = -(-count // KEPT_CURVES)
        self.gains: dict[int, npt.NDArray[np.complex128]] = {}
        self.extremes: dict[str, tuple[float, int, npt.NDArray[np.complex128]]] = {}

    def take(
        self, case: npt.NDArray[np.int64], gains: npt.NDArray[np.complex128], lowest_db: pd.Series[float]
    ) -> None:
        for index in np.flatnonzero((case - 1) % self.every == 0).tolist():
            self.gains[int(case[index])] = gains[index].copy()
        for name, sign in (("lowest", 1.0), ("highest", -1.0)):
            index = int((sign * lowest_db.to_numpy()).argmin())
            rank = sign * float(lowest_db.iloc[index])
            if name not in self.extremes or rank < self.extremes[name][0]:
                self.extremes[name] = (rank, int(case[index]), gains[index].copy())

    def kept(self) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.complex128]] | None:
        for _, number, gains in self.extremes.values():
            self.gains.setdefault(number, gains)
        if not self.gains:
            return None
        numbers = sorted(self.gains)
        return np.array(numbers), np.stack([self.gains[number] for number in numbers])


def collect(
    solved: Iterable[Solved],
    sweep: Sweep,
    frequency_hz: npt.NDArray[np.float64],
    folder: RunFolder,
    progress: Progress | None = None,
    *,
    draws: int = 0,
    only_draw: int = 0,
) -> Results:
    """Write curves and gather figures while results come in.

    Parameters
    ----------
    solved : iterable of Solved
        Batches; draw d of case c has the place (c - 1)(draws + 1) + d, where 0 is the nominal run.
    sweep : Sweep
        The sweep.
    frequency_hz : ndarray, shape (F,)
        The solved frequencies.
    folder : RunFolder
        Gets `curves.parquet`, and with draws `quantiles.parquet`.
    progress : callable, optional
        Called with the number of results so far and of all.
    draws : int
        Draws of each case.
    only_draw : int
        Number of the draw that stands in for the nominal run.

    Returns
    -------
    Results
        Memory grows with the table of cases only, not with curves or draws.
    """
    spec = sweep.spec
    stride = draws + 1
    total = sweep.count * stride
    keep_all = spec.tolerance is not None and spec.tolerance.keep == "curves"
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
                progress(done, total)
            yield batch

    with ExitStack() as stack:
        writer = stack.enter_context(CurvesWriter(folder.path("curves.parquet")))
        boards = stack.enter_context(Boards(sweep, frequency_hz, folder, draws)) if draws else None
        for chunk in in_order(counted(solved), total):
            case, draw = chunk.position // stride + 1, chunk.position % stride
            good = np.array([position not in chunk.failures for position in chunk.position.tolist()])
            nominal = draw == 0
            written = good & (nominal | keep_all)
            if written.any():
                writer.add(
                    case[written], draw[written] + only_draw, _pair(frequency_hz, chunk.gains[written])
                )
            if nominal.any():
                reasons = {
                    int(case[i]): chunk.failures[int(chunk.position[i])]
                    for i in np.flatnonzero(nominal & ~good)
                }
                tables.append(
                    _nominal_rows(
                        case[nominal],
                        chunk.gains[nominal],
                        reasons,
                        frequency_hz,
                        spec.frequency.spots,
                        keeper,
                        sweep.own_circuit[case[nominal] - 1],
                    )
                )
            if boards is not None:
                boards.add(case[~nominal], draw[~nominal], chunk.gains[~nominal], good[~nominal], chunk)
        cases = in_order_of_figures(pd.concat(tables, ignore_index=True))
        if boards is not None:
            cases = boards.joined(cases)
    if "above_floor" in cases:
        cases["above_floor"] = cases["above_floor"].fillna("")
    cases = sweep.frame().merge(cases, on="case", validate="one_to_one")
    kept = keeper.kept()
    if kept is None:
        return Results(cases, None, np.empty(0, np.int64), engine, boards)
    return Results(cases, _pair(frequency_hz, kept[1]), kept[0], engine, boards)


def _pair(frequency_hz: npt.NDArray[np.float64], gains: npt.NDArray[np.complex128]) -> ModePair:
    return ModePair(frequency_hz, gains[:, 0], gains[:, 1])


def _nominal_rows(
    case: npt.NDArray[np.int64],
    gains: npt.NDArray[np.complex128],
    reasons: dict[int, str],
    frequency_hz: npt.NDArray[np.float64],
    spots_hz: tuple[float, ...],
    keeper: _Keeper,
    own_circuit: npt.NDArray[np.bool_],
) -> pd.DataFrame:
    """Rows of the table of cases, with figures for those that did not fail."""
    table = pd.DataFrame({"case": case})
    good = np.array([number not in reasons for number in case.tolist()])
    if good.any():
        found = figures(_pair(frequency_hz, gains[good]), spots_hz, own_circuit[good])
        keeper.take(case[good], gains[good], found["cmrr_db_lowest"])
        table = table.join(found.set_axis(np.flatnonzero(good)))
    table["state"] = [
        f"failed: {reasons[number]}" if number in reasons else "done" for number in case.tolist()
    ]
    return table
