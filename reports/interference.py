"""What interference leaves: input-referred error abs(rho) Vcm and output error abs(A_cm) Vcm, V rms.

Lines are present together, so their errors add as powers. A profile is met at one frequency at a time, so
its greatest error counts. A common-mode gain below the numerical floor is taken as the floor's: the error is
then at most the value given.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

from modepair.reports.figures import spot_indices
from modepair.reports.pairs import FLOOR_VOLTS, FloatArray, ModePair
from modepair.sweeps.interference import Interference

__all__ = ["interference_figures", "line_column", "worst_errors"]


def line_column(side: str, frequency_hz: float) -> str:
    """Name the column of a line's error: ``output`` and 50.0 become ``output_error_v_at_50hz``.

    Parameters
    ----------
    side : {"input", "output"}
        Where the error is.
    frequency_hz : float
        Frequency of the line in Hz.

    Returns
    -------
    str
        The column's name.
    """
    return f"{side}_error_v_at_{np.format_float_positional(frequency_hz, trim='-')}hz"


def _errors(pair: ModePair, volts: FloatArray, index: npt.NDArray[np.intp]) -> tuple[FloatArray, FloatArray]:
    """Input-referred and output error in V at some frequencies, shape (n, k)."""
    common = np.maximum(np.abs(np.atleast_2d(pair.common_gain)[:, index]), FLOOR_VOLTS)
    differential = np.abs(np.atleast_2d(pair.differential_gain)[:, index])
    return common / differential * volts, common * volts


def interference_figures(pair: ModePair, interference: Interference) -> pd.DataFrame:
    """Work out what interference leaves in every case of a pair.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), or (F,) for a single case, solved at `interference.frequency_hz` too.
    interference : Interference
        The common-mode voltages.

    Returns
    -------
    DataFrame
        One row per case, every voltage rms:

        - ``input_error_v_at_50hz``, ``output_error_v_at_50hz`` and so on: of each line and harmonic.
        - ``input_error_v``, ``output_error_v``: root of the sum of their squares.
        - ``output_error_codes``: the latter in codes of the converter, where there is one.
        - ``swept_input_error_v``, ``swept_input_error_at_hz``, ``swept_output_error_v``,
          ``swept_output_error_at_hz``, ``swept_output_error_codes``: greatest error over the profile.

    Raises
    ------
    ValueError
        Where a line was not solved, or the profile reaches beyond the solved frequencies.
    """
    columns: dict[str, FloatArray] = {}
    step = interference.converter.code_volts if interference.converter else None
    if spectrum := interference.spectrum:
        lines_hz, volts = (np.array(values) for values in zip(*spectrum, strict=True))
        errors = _errors(pair, volts, spot_indices(pair.frequency_hz, lines_hz.tolist()))
        for side, error in zip(("input", "output"), errors, strict=True):
            columns |= {line_column(side, hz): error[:, k] for k, hz in enumerate(lines_hz.tolist())}
        totals = [np.sqrt((error**2).sum(axis=1)) for error in errors]
        columns |= {"input_error_v": totals[0], "output_error_v": totals[1]}
        if step:
            columns["output_error_codes"] = totals[1] / step
    if profile := interference.swept:
        spot_indices(pair.frequency_hz, profile.frequency_hz.tolist())
        volts = profile.at(pair.frequency_hz)
        inside = np.flatnonzero(np.isfinite(volts))
        for side, error in zip(("input", "output"), _errors(pair, volts[inside], inside), strict=True):
            at = error.argmax(axis=1)
            columns[f"swept_{side}_error_v"] = error[np.arange(len(error)), at]
            columns[f"swept_{side}_error_at_hz"] = pair.frequency_hz[inside[at]]
        if step:
            columns["swept_output_error_codes"] = columns["swept_output_error_v"] / step
    return pd.DataFrame(columns)


def worst_errors(found: pd.DataFrame, side: str) -> tuple[FloatArray, FloatArray]:
    """Pick what counts as the error of each case: all lines together, or the profile where that is worse.

    Parameters
    ----------
    found : DataFrame
        As from `interference_figures`.
    side : {"input", "output"}
        Which error.

    Returns
    -------
    volts : ndarray, shape (n,)
        The error, V rms.
    frequency_hz : ndarray, shape (n,)
        The line that gives most of it, or the profile's frequency, Hz.
    """
    lines = [name for name in found.columns.tolist() if name.startswith(f"{side}_error_v_at_")]
    volts = np.zeros(len(found))
    at_hz = np.full(len(found), np.nan)
    if lines:
        volts = found[f"{side}_error_v"].to_numpy(np.float64)
        line_hz = np.array([float(name.rpartition("_")[2].removesuffix("hz")) for name in lines])
        at_hz = line_hz[found[lines].to_numpy(np.float64).argmax(axis=1)]
    if f"swept_{side}_error_v" in found:
        swept = found[f"swept_{side}_error_v"].to_numpy(np.float64)
        at_hz = np.where(swept > volts, found[f"swept_{side}_error_at_hz"].to_numpy(np.float64), at_hz)
        volts = np.maximum(volts, swept)
    return volts, at_hz
