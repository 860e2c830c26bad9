"""The curves file: every solved case, in order, written as the cases come."""

from __future__ import annotations

from pathlib import Path
from types import TracebackType

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.parquet as pq

from modepair.reports import ModePair

__all__ = ["CurvesWriter"]

SCHEMA = pa.schema(
    [
        ("case", pa.int32()),
        ("draw", pa.int32()),
        ("frequency_hz", pa.float64()),
        ("common_re", pa.float64()),
        ("common_im", pa.float64()),
        ("differential_re", pa.float64()),
        ("differential_im", pa.float64()),
        ("cmrr_db", pa.float64()),
        ("above_floor", pa.bool_()),
    ]
)


class CurvesWriter:
    """Writes `curves.parquet`, a row group for each call of `add`.

    Parameters
    ----------
    path : Path
        The file.
    """

    def __init__(self, path: Path) -> None:
        # Mantissas of solved gains do not compress; dictionaries would only cost time.
        self._writer = pq.ParquetWriter(path, SCHEMA, compression="none", use_dictionary=["case", "draw"])

    def add(self, case: npt.NDArray[np.int64], draw: npt.NDArray[np.int64], pair: ModePair) -> None:
        """Append curves.

        Parameters
        ----------
        case, draw : ndarray of int, shape (n,)
            Which they are, in ascending order and after those added before.
        pair : ModePair
            Their gains, shape (n, F).
        """
        count, points = pair.common_gain.shape
        columns = [
            np.repeat(case.astype(np.int32), points),
            np.repeat(draw.astype(np.int32), points),
            np.tile(pair.frequency_hz, count),
            pair.common_gain.real.ravel(),
            pair.common_gain.imag.ravel(),
            pair.differential_gain.real.ravel(),
            pair.differential_gain.imag.ravel(),
            pair.cmrr_db.ravel(),
            pair.above_floor.ravel(),
        ]
        self._writer.write_table(pa.table([pa.array(column) for column in columns], schema=SCHEMA))

    def __enter__(self) -> CurvesWriter:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._writer.close()
