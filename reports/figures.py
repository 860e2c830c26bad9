"""The figures of merit of each case, read from its curves.

A figure that touches the numerical floor is a bound, and the column ``above_floor`` names it: a CMRR is then
at least the value given, and CMRR's corner at most the value given.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from modepair.reports.pairs import BoolArray, FloatArray, ModePair
from modepair.reports.readings import frequency_text

if TYPE_CHECKING:
    import pandas as pd

HALF_POWER_DB = 10.0 * float(np.log10(2.0))
"""The '3 dB' of a bandwidth or a corner: half the power, 3.0103 dB, so that a single pole reads its own
frequency."""

SPOT_TOLERANCE = 1e-9
"""Relative distance within which a spot and a solved frequency are the same."""


def spot_column(spot_hz: float) -> str:
    """Name the column of CMRR at a spot frequency: 1000.0 becomes ``cmrr_db_at_1000hz``.

    Parameters
    ----------
    spot_hz : float
        Spot frequency in Hz.

    Returns
    -------
    str
        The column's name: the shortest decimal number that is this frequency, never with an exponent.
    """
    return f"cmrr_db_at_{np.format_float_positional(spot_hz, trim='-')}hz"


def spot_text(spot_hz: float) -> str:
    """Name a spot frequency for reading, with all its digits: 1000.0 becomes ``1 kHz``.

    Parameters
    ----------
    spot_hz : float
        Spot frequency in Hz.

    Returns
    -------
    str
        The frequency with an SI prefix.
    """
    return frequency_text(spot_hz, digits=9)


def spot_indices(frequency_hz: FloatArray, spots_hz: Sequence[float]) -> npt.NDArray[np.intp]:
    """Find the solved frequencies that are the spots.

    Parameters
    ----------
    frequency_hz : ndarray, shape (F,)
        Solved frequencies in Hz, ascending.
    spots_hz : sequence of float, length S
        Spot frequencies in Hz.

    Returns
    -------
    ndarray of int, shape (S,)
        Index of each spot in ``frequency_hz``.

    Raises
    ------
    ValueError
        Where a spot was not solved; spots are never interpolated.
    """
    spots = np.asarray(spots_hz, dtype=np.float64).reshape(-1)
    after = np.clip(np.searchsorted(frequency_hz, spots), 1, max(frequency_hz.size - 1, 1))
    after = np.minimum(after, frequency_hz.size - 1)
    before = np.maximum(after - 1, 0)
    nearer = np.abs(frequency_hz[before] - spots) < np.abs(frequency_hz[after] - spots)
    index = np.where(nearer, before, after)
    missing = ~(np.abs(frequency_hz[index] - spots) <= SPOT_TOLERANCE * spots)
    if np.any(missing):
        raise ValueError(
            f"spots_hz: {float(spots[missing][0]):.12g} Hz is not among the {frequency_hz.size} solved "
            f"frequencies, {frequency_hz[0]:.12g} to {frequency_hz[-1]:.12g} Hz; spots are solved, "
            "not interpolated"
        )
    return index


@dataclass(frozen=True, eq=False)
class Passband:
    """Where the gain of each case is read.

    A case that passes DC has its gain at the lowest frequency. An own circuit may not, such as one with capacitors
    in its inputs: where abs(A_dm) at the lowest frequency is more than 3 dB below its largest, its gain is the
    largest.

    Attributes
    ----------
    index : ndarray of int, shape (n,)
        Where abs(A_dm) is the gain.
    lower_hz : ndarray, shape (n,)
        Lower frequency where abs(A_dm) has fallen to half the power of that, interpolated linearly in dB over log f;
        NaN where it has not.
    upper_hz : ndarray, shape (n,)
        The same above.
    """

    index: npt.NDArray[np.intp]
    lower_hz: FloatArray
    upper_hz: FloatArray


def passband(pair: ModePair, own_circuit: npt.ArrayLike = False) -> Passband:
    """Find the passband of every case of a pair.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), or (F,) for a single case.
    own_circuit : array_like of bool, shape (n,)
        Whether the case is an own circuit.

    Returns
    -------
    Passband
    """
    gain_db = np.atleast_2d(pair.differential_gain_db)
    rows = np.arange(gain_db.shape[0])
    index = gain_index(gain_db, own_circuit)
    gain_here_db = gain_db[rows, index]
    fallen = gain_db <= (gain_here_db - HALF_POWER_DB)[:, np.newaxis]
    upper_hz = _first_fall(gain_db, pair.frequency_hz, fallen, index, gain_here_db)
    # Downwards is upwards on the same curve from right to left.
    last = gain_db.shape[1] - 1
    lower_hz = _first_fall(
        gain_db[:, ::-1], pair.frequency_hz[::-1], fallen[:, ::-1], last - index, gain_here_db
    )
    return Passband(index, lower_hz, upper_hz)


def gain_index(gain_db: FloatArray, own_circuit: npt.ArrayLike = False) -> npt.NDArray[np.intp]:
    """Find where the gain of each case is read, as `Passband` says.

    Parameters
    ----------
    gain_db : ndarray, shape (n, F)
        abs(A_dm) in dB.
    own_circuit : array_like of bool, shape (n,)
        Whether the case is an own circuit.

    Returns
    -------
    ndarray of int, shape (n,)
        Index of the frequency.
    """
    highest = np.argmax(gain_db, axis=1)
    lost_db = gain_db[np.arange(len(highest)), highest] - gain_db[:, 0]
    return np.where(np.asarray(own_circuit) & (lost_db > HALF_POWER_DB), highest, 0)


def _first_fall(
    level_db: FloatArray,
    frequency_hz: FloatArray,
    fallen: BoolArray,
    start: npt.NDArray[np.intp],
    from_db: FloatArray,
) -> FloatArray:
    """Where the level, from `start` (n,), falls by HALF_POWER_DB below `from_db` (n,): linear in dB over log f, or NaN.

    ``fallen`` (n, F) marks the samples that are known to lie at or below that level.
    """
    rows = np.arange(level_db.shape[0])
    fallen = fallen & (np.arange(level_db.shape[1]) >= start[:, np.newaxis])
    after = np.argmax(fallen, axis=1)
    found = fallen[rows, after]
    after = np.where(found, np.maximum(after, 1), 0)
    before = np.maximum(after - 1, 0)
    target_db = from_db - HALF_POWER_DB
    drop_db = level_db[rows, before] - level_db[rows, after]
    share = np.divide(
        level_db[rows, before] - target_db, drop_db, out=np.ones_like(drop_db), where=drop_db > 0
    )
    log_f = np.log(frequency_hz)
    fall_hz = np.exp(log_f[before] + np.clip(share, 0.0, 1.0) * (log_f[after] - log_f[before]))
    return np.where(found, fall_hz, np.nan)


def _corner_start(
    cmrr_db: FloatArray, frequency_hz: FloatArray, band: Passband
) -> tuple[npt.NDArray[np.intp], FloatArray]:
    """Where CMRR's corner is counted from, and the level there: the lowest frequency; of a case that blocks it, CMRR's
    highest value in the passband, since below it the rejection may be poor and of no interest. That may be the value at
    the passband's lower edge, which is interpolated.
    """
    rows = np.arange(cmrr_db.shape[0])
    edge_hz = np.where(np.isnan(band.lower_hz), frequency_hz[0], band.lower_hz)
    above = frequency_hz >= edge_hz[:, np.newaxis]
    below = frequency_hz <= np.where(np.isnan(band.upper_hz), np.inf, band.upper_hz)[:, np.newaxis]
    highest = np.argmax(np.where(above & below, cmrr_db, -np.inf), axis=1)
    start = np.where(band.index > 0, highest, 0)
    level_db = cmrr_db[rows, start]
    if band.index.any():
        log_f = np.log(frequency_hz)
        first = np.clip(np.argmax(above, axis=1), 1, frequency_hz.size - 1)
        share = (np.log(edge_hz) - log_f[first - 1]) / (log_f[first] - log_f[first - 1])
        edge_db = cmrr_db[rows, first - 1] + share * (cmrr_db[rows, first] - cmrr_db[rows, first - 1])
        at_edge = (band.index > 0) & (edge_db > level_db)
        start, level_db = np.where(at_edge, first, start), np.where(at_edge, edge_db, level_db)
    return start, level_db


def figures(pair: ModePair, spots_hz: Sequence[float], own_circuit: npt.ArrayLike = False) -> pd.DataFrame:
    """Read the figures of every case of a pair.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), or (F,) for a single case.
    spots_hz : sequence of float
        Spot frequencies in Hz; each must be among the solved ones.
    own_circuit : array_like of bool, shape (n,)
        Whether the case is an own circuit, whose gain may be in a `Passband` of its own.

    Returns
    -------
    DataFrame
        One row per case:

        - ``differential_gain``: abs(A_dm) at the lowest frequency, V/V; of an own circuit that does not pass it,
          its largest.
        - ``bandwidth_hz``: first frequency above that where abs(A_dm) has fallen to half the power, interpolated
          linearly in dB over log f; NaN where it does not in the band.
        - ``lower_corner_hz``: the same below it; the column is there where some case has such a corner.
        - ``cmrr_db_at_50hz`` and so on: CMRR at each spot.
        - ``cmrr_corner_hz``: where CMRR has fallen 3 dB from its value at the lowest frequency (of a case with a lower
          corner, from its highest value in the passband, upwards from there); NaN: nowhere.
        - ``cmrr_db_lowest``, ``cmrr_lowest_at_hz``: lowest CMRR of the band, the first frequency that has it.
        - ``above_floor``: the figures that are bounds, such as ``50 Hz, corner, lowest``; empty: none.

    Raises
    ------
    ValueError
        Where a spot was not solved, or the pair has more than two dimensions.
    """
    if pair.common_gain.ndim > 2:
        raise ValueError(f"figures takes gains of the shape (n, F) or (F,), not {pair.common_gain.shape}")
    frequency_hz = pair.frequency_hz
    cmrr_db = np.atleast_2d(pair.cmrr_db)
    at_floor = np.atleast_2d(pair.above_floor)
    band = passband(pair, own_circuit)
    spot_index = spot_indices(frequency_hz, spots_hz)
    rows = np.arange(cmrr_db.shape[0])

    # A sample at the floor may be higher than it reads, so it never counts as fallen.
    start, level_db = _corner_start(cmrr_db, frequency_hz, band)
    fallen = (cmrr_db <= (level_db - HALF_POWER_DB)[:, np.newaxis]) & ~at_floor
    fallen &= np.arange(frequency_hz.size) >= start[:, np.newaxis]
    corner_hz = _first_fall(cmrr_db, frequency_hz, fallen, start, level_db)
    corner_is_bound = at_floor[rows, start]
    if np.any(corner_is_bound):
        # The start is higher than it reads, so the corner lies below the first sample known to be lower.
        first_fallen_hz = frequency_hz[np.argmax(fallen, axis=1)]
        corner_hz = np.where(corner_is_bound & ~np.isnan(corner_hz), first_fallen_hz, corner_hz)
    lowest = np.argmin(cmrr_db, axis=1)

    columns: dict[str, object] = {
        "differential_gain": np.abs(np.atleast_2d(pair.differential_gain)[rows, band.index]),
        "bandwidth_hz": band.upper_hz,
    }
    if not np.all(np.isnan(band.lower_hz)):
        columns["lower_corner_hz"] = band.lower_hz
    for spot_hz, index in zip(spots_hz, spot_index, strict=True):
        columns[spot_column(spot_hz)] = cmrr_db[:, index]
    columns["cmrr_corner_hz"] = corner_hz
    columns["cmrr_db_lowest"] = cmrr_db[rows, lowest]
    columns["cmrr_lowest_at_hz"] = frequency_hz[lowest]
    bounds = np.column_stack([at_floor[:, spot_index], corner_is_bound, at_floor[rows, lowest]])
    columns["above_floor"] = _names_of(bounds, spots_hz)
    import pandas as pd

    return pd.DataFrame(columns)


def in_order_of_figures(cases: pd.DataFrame) -> pd.DataFrame:
    """Put the lower corner behind the bandwidth, where tables with that column and without are put together."""
    if "lower_corner_hz" not in cases:
        return cases
    names = [name for name in cases.columns if name != "lower_corner_hz"]
    names.insert(names.index("bandwidth_hz") + 1, "lower_corner_hz")
    return cases[names]


def _names_of(bounds: BoolArray, spots_hz: Sequence[float]) -> list[str]:
    """Text of each row's bounds (n, S + 2): the spots, then the corner and the lowest CMRR."""
    if not np.any(bounds):
        return [""] * bounds.shape[0]
    names = [*(spot_text(spot) for spot in spots_hz), "corner", "lowest"]
    return [
        ", ".join(name for name, bound in zip(names, row, strict=True) if bound) for row in bounds.tolist()
    ]
