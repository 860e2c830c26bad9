"""Boards: what the draws of each case come to, gathered while they are solved."""

from __future__ import annotations

from dataclasses import dataclass, field
from types import TracebackType

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from modepair.reports import ModePair, spot_column
from modepair.reports.figures import gain_index, spot_indices
from modepair.reports.quantiles import DrawQuantiles
from modepair.reports.yields import Yield
from modepair.runner.batches import Solved
from modepair.runner.folder import RunFolder
from modepair.sweeps import Sweep

__all__ = ["Boards", "CaseBoards"]

PLOTTED_CASES = 6
"""Cases whose boards are plotted: those with the lowest first percentile."""


@dataclass
class CaseBoards:
    """The boards of one case, for figures and plots.

    Attributes
    ----------
    case : int
        Its number.
    drawn, passed : int
        Boards solved; boards that keep the mask.
    reasons : list of str
        Why draws failed, with their numbers.
    worst_draw : int
        The board with the smallest margin to the mask; without a mask, with the lowest CMRR at the first spot, or at
        the lowest frequency.
    worst_margin_db : float
        Its margin, or its CMRR there.
    worst_gains : ndarray, shape (2, F)
        Its gains.
    rho : list of ndarray, each shape (n, S)
        Error ratio at the spots, V/V, in single precision; of the case that rejects least only.
    table : DataFrame
        Quantiles over frequency.
    """

    case: int
    drawn: int = 0
    passed: int = 0
    reasons: list[str] = field(default_factory=list)
    worst_draw: int = 0
    worst_margin_db: float = np.inf
    worst_gains: npt.NDArray[np.complex128] | None = None
    rho: list[npt.NDArray[np.complex64]] = field(default_factory=list)
    table: pd.DataFrame = field(default_factory=pd.DataFrame)


class Boards:
    """Gathers draws, case after case; use it as a context manager.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    frequency_hz : ndarray, shape (F,)
        The solved frequencies.
    folder : RunFolder
        Gets `quantiles.parquet`.
    draws : int
        Draws of each case.

    Attributes
    ----------
    plotted : list of CaseBoards
        The cases to plot, with all they need; the one that rejects least goes first.
    """

    def __init__(
        self, sweep: Sweep, frequency_hz: npt.NDArray[np.float64], folder: RunFolder, draws: int
    ) -> None:
        limits = sweep.spec.limits
        self.draws = draws
        self.frequency_hz = frequency_hz
        self.plotted: list[CaseBoards] = []
        self._mask_db = limits.cmrr.at(frequency_hz) if limits and limits.cmrr else None
        self._own_circuit = sweep.own_circuit
        self._spots = sweep.spec.frequency.spots
        self._columns = spot_indices(frequency_hz, self._spots)
        self._quantiles = DrawQuantiles(frequency_hz, folder.path("draws.partial"))
        self._path = folder.path("quantiles.parquet")
        self._writer: pq.ParquetWriter | None = None
        self._rows: list[dict[str, object]] = []
        self._current: CaseBoards | None = None

    def __enter__(self) -> Boards:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._quantiles.__exit__(kind, error, trace)
        if self._writer is not None:
            self._writer.close()

    def add(
        self,
        case: npt.NDArray[np.int64],
        draw: npt.NDArray[np.int64],
        gains: npt.NDArray[np.complex128],
        good: npt.NDArray[np.bool_],
        chunk: Solved,
    ) -> None:
        """Add draws in order.

        Parameters
        ----------
        case, draw : ndarray of int, shape (n,)
            Which they are.
        gains : ndarray, shape (n, 2, F)
            Their gains.
        good : ndarray of bool, shape (n,)
            Which did not fail.
        chunk : Solved
            Where the reasons of those that failed are.
        """
        for number in np.unique(case).tolist():
            here = case == number
            current = self._current
            if current is None:
                current = self._current = CaseBoards(number)
            first = (number - 1) * (self.draws + 1)
            current.reasons += [f"draw {d}: {chunk.failures[first + d]}" for d in draw[here & ~good].tolist()]
            solved = here & good
            if solved.any():
                pair = ModePair(self.frequency_hz, gains[solved, 0], gains[solved, 1])
                self._take(current, draw[solved], pair, gains[solved])
            if draw[here][-1] == self.draws:
                self._finish(current)
                self._current = None

    def _take(
        self,
        current: CaseBoards,
        draw: npt.NDArray[np.int64],
        pair: ModePair,
        gains: npt.NDArray[np.complex128],
    ) -> None:
        self._quantiles.add(draw, pair)
        current.drawn += len(draw)
        if self._mask_db is not None:
            # A board above the numerical floor passes a mask below the floor.
            margin = np.nanmin(pair.cmrr_db - self._mask_db, axis=1)
            current.passed += int((margin >= 0).sum())
        else:
            margin = pair.cmrr_db[:, self._columns[0] if len(self._columns) else 0]
        row = int(margin.argmin())
        if margin[row] < current.worst_margin_db:
            current.worst_margin_db = float(margin[row])
            current.worst_draw = int(draw[row])
            current.worst_gains = gains[row].copy()
        if len(self._columns):
            current.rho.append(pair.error_ratio[:, self._columns].astype(np.complex64))

    def _finish(self, current: CaseBoards) -> None:
        current.table = self._quantiles.finish(current.case)
        row: dict[str, object] = {"case": current.case, "draws": current.drawn}
        if current.drawn:
            table = pa.Table.from_pandas(current.table, preserve_index=False)
            if self._writer is None:
                self._writer = pq.ParquetWriter(self._path, table.schema)
            self._writer.write_table(table)
            for spot, column in zip(self._spots, self._columns.tolist(), strict=True):
                at = current.table.iloc[column]
                name = spot_column(spot).removeprefix("cmrr_db_")
                row |= {f"cmrr_db_p{p}_{name}": float(at[f"cmrr_db_p{p}"]) for p in (1, 50)}
                row[f"cmrr_db_lowest_{name}"] = float(at["cmrr_db_lowest"])
            gain_db = 20 * np.log10(current.table["differential_gain_p50"].to_numpy(np.float64))
            place = int(gain_index(gain_db[np.newaxis], self._own_circuit[current.case - 1])[0])
            row |= {
                name: float(current.table[name].iloc[place])
                for name in ("differential_gain_p1", "differential_gain_p99")
            }
            row["worst_draw"] = current.worst_draw
        if self._mask_db is not None:
            found = Yield(current.passed, current.drawn + len(current.reasons))
            low, high = found.interval
            row |= {"yield": found.value, "yield_low": low, "yield_high": high}
        row["failed_draws"] = len(current.reasons)
        row["first_reason"] = current.reasons[0] if current.reasons else ""
        self._rows.append(row)
        if current.drawn:
            self._keep_for_plots(current)

    def _keep_for_plots(self, current: CaseBoards) -> None:
        column = int(self._columns[0]) if len(self._columns) else 0
        self.plotted.append(current)
        self.plotted.sort(key=lambda one: float(one.table["cmrr_db_p1"].iloc[column]))
        del self.plotted[PLOTTED_CASES:]
        for other in self.plotted[1:]:
            other.rho = []

    def joined(self, cases: pd.DataFrame) -> pd.DataFrame:
        """Add the boards' figures to the table of cases; a case with failed draws has failed.

        Parameters
        ----------
        cases : DataFrame
            A row per case, with `case` and `state`.

        Returns
        -------
        DataFrame
            With `draws`, quantiles at the spots, the gain's spread, the worst draw and the yield.
        """
        rows = pd.DataFrame(self._rows)
        reasons, failed = rows.pop("first_reason"), rows.pop("failed_draws")
        merged = cases.merge(rows, on="case", how="left", validate="one_to_one")
        state = merged.pop("state")
        states = [
            f"failed: {count} of {self.draws} draws, {reason}" if count and was == "done" else was
            for was, count, reason in zip(state, failed, reasons, strict=True)
        ]
        return merged.assign(state=states)
