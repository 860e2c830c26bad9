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

BLOCK_VALUES = 500_000
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
        self._parts: list[int] = []
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
        # Each frequency's numbers lie together, so that a few frequencies of all draws can be read without the rest.
        np.concatenate([level_db.T, np.abs(pair.differential_gain).T]).tofile(self._file)
        self._parts.append(len(draw))
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
            stop = min(start + width, points)
            block = self._read(offset + start, offset + stop)
            result[:, start:stop] = np.percentile(
                block, percents, axis=1, method="inverted_cdf", overwrite_input=True
            )
        return result

    def _read(self, start: int, stop: int) -> FloatArray:
        """Read some rows of the numbers of all draws, shape (stop - start, draws)."""
        block = np.empty((stop - start, self.count))
        place = first = 0
        for draws in self._parts:
            self._file.seek((place + start * draws) * block.itemsize)
            part = np.fromfile(self._file, np.float64, block.shape[0] * draws)
            block[:, first : first + draws] = part.reshape(-1, draws)
            place += 2 * self.frequency_hz.size * draws
            first += draws
        return block
