"""Quantiles over the draws of a case, frequency by frequency, in memory that does not grow with the draws.

A quantile here is an order statistic: the value of a board that was drawn, never a mean of two. So the quantiles
of CMRR in dB and those of |rho| are the same boards.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import BinaryIO

import numpy as np
import numpy.typing as npt
import pandas as pd

from modepair.reports.pairs import FloatArray, ModePair

__all__ = ["CMRR_PERCENTS", "GAIN_PERCENTS", "DrawQuantiles"]

CMRR_PERCENTS = (1, 5, 50, 95, 99)
GAIN_PERCENTS = (1, 50, 99)

BLOCK_VALUES = 2_000_000
"""Numbers held at once while quantiles are worked out."""


@dataclass
class DrawQuantiles:
    """Gathers the draws of one case after another; use it as a context manager.

    Parameters
    ----------
    frequency_hz : ndarray, shape (F,)
        The solved frequencies.
    path : Path
        A file to hold the draws of a case; it is removed at the end.
    """

    frequency_hz: FloatArray
    path: Path
    count: int = 0
    lowest_db: FloatArray = field(init=False)
    lowest_draw: npt.NDArray[np.int64] = field(init=False)

    def __post_init__(self) -> None:
        self._file: BinaryIO = self.path.open("w+b")
        self._clear()

    def __enter__(self) -> DrawQuantiles:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._file.close()
        self.path.unlink(missing_ok=True)

    def _clear(self) -> None:
        self._file.seek(0)
        self._file.truncate()
        self.count = 0
        self.lowest_db = np.full(self.frequency_hz.size, np.inf)
        self.lowest_draw = np.zeros(self.frequency_hz.size, np.int64)

    def add(self, draw: npt.NDArray[np.int64], pair: ModePair) -> None:
        """Add draws of the current case.

        Parameters
        ----------
        draw : ndarray of int, shape (n,)
            Their numbers.
        pair : ModePair
            Their gains, shape (n, F).
        """
        if not len(draw):
            return
        level_db = pair.cmrr_db
        np.concatenate([level_db, np.abs(pair.differential_gain)], axis=1).tofile(self._file)
        self.count += len(draw)
        row = level_db.argmin(axis=0)
        here = np.take_along_axis(level_db, row[np.newaxis], axis=0)[0]
        lower = here < self.lowest_db
        self.lowest_db = np.where(lower, here, self.lowest_db)
        self.lowest_draw = np.where(lower, draw[row], self.lowest_draw)

    def finish(self, case: int) -> pd.DataFrame:
        """Work out the quantiles of the current case and make ready for the next.

        Parameters
        ----------
        case : int
            Its number.

        Returns
        -------
        DataFrame
            A row per frequency: `case`, `frequency_hz`, `cmrr_db_p1`, `_p5`, `_p50`, `_p95`, `_p99`,
            `cmrr_db_lowest`, `lowest_draw`, `differential_gain_p1`, `_p50`, `_p99` (V/V). Empty where no
            draw was added.
        """
        if not self.count:
            return pd.DataFrame()
        points = self.frequency_hz.size
        cmrr = self._quantiles(CMRR_PERCENTS, 0)
        gain = self._quantiles(GAIN_PERCENTS, points)
        table = pd.DataFrame(
            {
                "case": np.full(points, case, np.int32),
                "frequency_hz": self.frequency_hz,
                **{f"cmrr_db_p{p}": values for p, values in zip(CMRR_PERCENTS, cmrr, strict=True)},
                "cmrr_db_lowest": self.lowest_db,
                "lowest_draw": self.lowest_draw.astype(np.int32),
                **{f"differential_gain_p{p}": values for p, values in zip(GAIN_PERCENTS, gain, strict=True)},
            }
        )
        self._clear()
        return table

    def _quantiles(self, percents: tuple[int, ...], offset: int) -> FloatArray:
        points = self.frequency_hz.size
        result = np.empty((len(percents), points))
        width = max(1, min(points, BLOCK_VALUES // self.count))
        for start in range(0, points, width):
            columns = slice(offset + start, offset + min(start + width, points))
            block = self._columns(columns)
            result[:, start : start + width] = np.percentile(block, percents, axis=0, method="inverted_cdf")
        return result

    def _columns(self, columns: slice) -> FloatArray:
        """Read some columns of all draws, a part of the file at a time."""
        width = 2 * self.frequency_hz.size
        rows = max(1, BLOCK_VALUES // width)
        block = np.empty((self.count, columns.stop - columns.start))
        self._file.seek(0)
        for start in range(0, self.count, rows):
            part = np.fromfile(self._file, np.float64, min(rows, self.count - start) * width)
            block[start : start + rows] = part.reshape(-1, width)[:, columns]
        return block
