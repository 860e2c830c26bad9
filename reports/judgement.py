"""Judgement: how far each case is from its limits, and where it comes nearest.

The margin is in dB for CMRR and interference errors, in per cent for gain, bandwidth and yield; below zero
the case fails. A curve is judged at every solved frequency, among which are the corners of its mask. A CMRR
above the numerical floor is a bound: where the bound itself keeps the mask the case passes; where it does
not, the solve cannot tell, and the case is undecided. Only a pass is a pass.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from modepair.reports.figures import passband, spot_indices
from modepair.reports.interference import interference_figures, worst_errors
from modepair.reports.pairs import BoolArray, FloatArray, ModePair
from modepair.sweeps.interference import Interference
from modepair.sweeps.limits import GainLimit, Limits, Mask
from modepair.sweeps.schema import SPOT_MATCH

__all__ = [
    "FAIL",
    "PASS",
    "UNDECIDED",
    "Margins",
    "judge",
    "judge_yield",
    "judged_quantities",
    "mask_margins",
]

PASS, FAIL, UNDECIDED, NEW = "pass", "fail", "undecided", "new"

VERDICT_COLUMNS = (
    "case", "quantity", "verdict", "margin_db", "margin_percent", "at_hz", "value", "limit", "unit", "bound",
    "note",
)  # fmt: skip
"""Columns of a table of verdicts."""


@dataclass(frozen=True, eq=False)
class Margins:
    """How far n cases are from one limit.

    Parameters
    ----------
    quantity : str
        What is judged: ``cmrr``, ``differential_gain``, ``bandwidth``, ``yield``, ``output_error``,
        ``input_error`` or ``baseline``.
    margin : ndarray, shape (n,)
        Below zero where the limit is not kept.
    in_db : bool
        Whether the margin is in dB; else it is in per cent.
    at_hz : ndarray, shape (n,)
        Where it is smallest, Hz; NaN where the quantity has no frequency.
    value, limit : ndarray, shape (n,)
        The quantity there, and what it may be, in `unit`.
    unit : str
        ``dB``, ``V/V``, ``Hz``, ``V``, ``codes``, or ``share``.
    bound : ndarray of bool, shape (n,)
        Where the margin is at least the value given.
    note : tuple of str, length n
        What else is to be said.
    """

    quantity: str
    margin: FloatArray
    in_db: bool
    at_hz: FloatArray
    value: FloatArray
    limit: FloatArray
    unit: str
    bound: BoolArray
    note: tuple[str, ...] = ()

    @property
    def verdict(self) -> list[str]:
        """``pass``, ``fail`` or ``undecided`` of each case."""
        return [
            PASS if margin >= 0 else UNDECIDED if bound else FAIL
            for margin, bound in zip(self.margin.tolist(), self.bound.tolist(), strict=True)
        ]

    def frame(self, case: npt.ArrayLike) -> pd.DataFrame:
        """Return a table with a row per case.

        Parameters
        ----------
        case : array of int, shape (n,)
            Case numbers.

        Returns
        -------
        DataFrame
            With the columns of `VERDICT_COLUMNS`.
        """
        count = len(self.margin)
        nothing = np.full(count, np.nan)
        columns: dict[str, object] = {
            "case": np.asarray(case, np.int64),
            "quantity": [self.quantity] * count,
            "verdict": self.verdict,
            "margin_db": self.margin if self.in_db else nothing,
            "margin_percent": nothing if self.in_db else self.margin,
            "at_hz": self.at_hz,
            "value": self.value,
            "limit": self.limit,
            "unit": [self.unit] * count,
            "bound": self.bound,
            "note": list(self.note or [""] * count),
        }
        return pd.DataFrame(columns)


def judged_quantities(limits: Limits | None) -> tuple[str, ...]:
    """Name what limits judge, in the order of the tables."""
    if limits is None:
        return ()
    given = {
        "cmrr": limits.cmrr,
        "differential_gain": limits.differential_gain,
        "bandwidth": limits.bandwidth,
        "yield": limits.yield_,
        "output_error": limits.output_error,
        "input_error": limits.input_error,
    }
    return tuple(name for name, limit in given.items() if limit is not None)


def nearest(margin: FloatArray, bound: BoolArray) -> npt.NDArray[np.intp]:
    """Find where each row's margin is smallest; a failure that is certain goes before one that is a bound.

    Parameters
    ----------
    margin : ndarray, shape (n, k)
        Margins.
    bound : ndarray of bool, shape (n, k)
        Where they are known as at least that.

    Returns
    -------
    ndarray of int, shape (n,)
        Indexes along k.
    """
    certain = np.where(bound, np.inf, margin)
    has_failed = certain.min(axis=1) < 0
    found: npt.NDArray[np.intp] = np.where(has_failed, certain.argmin(axis=1), margin.argmin(axis=1))
    return found


def mask_margins(pair: ModePair, mask: Mask) -> Margins:
    """Judge CMRR against a mask.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), or (F,) for a single case.
    mask : Mask
        The least CMRR.

    Returns
    -------
    Margins
        CMRR minus mask, in dB, at every solved frequency inside the mask.

    Raises
    ------
    ValueError
        Where a corner of the mask was not solved: a curve that does not cover the mask is no pass.
    """
    spot_indices(pair.frequency_hz, mask.frequency_hz.tolist())
    level_db = mask.at(pair.frequency_hz)
    inside = np.flatnonzero(np.isfinite(level_db))
    cmrr_db = np.atleast_2d(pair.cmrr_db)[:, inside]
    bound = np.atleast_2d(pair.above_floor)[:, inside]
    margin = cmrr_db - level_db[inside]
    at = nearest(margin, bound)
    rows = np.arange(len(at))
    return Margins(
        "cmrr", margin[rows, at], True, pair.frequency_hz[inside[at]], cmrr_db[rows, at],
        level_db[inside[at]], "dB", bound[rows, at],
        tuple("above the numerical floor, at least so much" if b else "" for b in bound[rows, at]),
    )  # fmt: skip


def _gain_margins(pair: ModePair, limit: GainLimit, gain: float) -> Margins:
    frequency_hz = pair.frequency_hz
    low_hz = frequency_hz[0] if limit.from_hz is None else limit.from_hz * (1 - SPOT_MATCH)
    high_hz = frequency_hz[-1] if limit.to_hz is None else limit.to_hz * (1 + SPOT_MATCH)
    inside = np.flatnonzero((frequency_hz >= low_hz) & (frequency_hz <= high_hz))
    if not inside.size or low_hz < frequency_hz[0] * (1 - 2 * SPOT_MATCH):
        raise ValueError("the band of differential_gain must lie within the solved frequencies")
    value = np.abs(np.atleast_2d(pair.differential_gain)[:, inside])
    margin = 100 * (limit.within - np.abs(value / gain - 1))
    at = margin.argmin(axis=1)
    rows = np.arange(len(at))
    return Margins(
        "differential_gain", margin[rows, at], False, frequency_hz[inside[at]], value[rows, at],
        np.full(len(at), gain), "V/V", np.zeros(len(at), np.bool_),
    )  # fmt: skip


def _bandwidth_margins(pair: ModePair, least_hz: float, own_circuit: npt.ArrayLike) -> Margins:
    found = passband(pair, own_circuit).upper_hz
    bound = np.isnan(found)
    value = np.where(bound, pair.frequency_hz[-1], found)
    return Margins(
        "bandwidth", 100 * (value / least_hz - 1), False, value, value, np.full(len(value), least_hz), "Hz",
        bound, tuple("beyond the solved band, at least so much" if b else "" for b in bound),
    )  # fmt: skip


def judge(
    pair: ModePair,
    limits: Limits,
    *,
    gain: float | None = None,
    interference: Interference | None = None,
    own_circuit: npt.ArrayLike = False,
) -> list[Margins]:
    """Judge cases against limits, but for the yield, which is counted over draws.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), or (F,) for a single case.
    limits : Limits
        What the cases must keep.
    gain : float, optional
        The stage's gain, where the limit of the gain does not say what it is to be.
    interference : Interference, optional
        What the limits of errors judge.
    own_circuit : array_like of bool, shape (n,)
        Whether the case is an own circuit, as for `modepair.reports.figures.passband`.

    Returns
    -------
    list of Margins
        One for each quantity, in the order of `judged_quantities`.

    Raises
    ------
    ValueError
        Where the curves do not cover a limit, or something a limit needs is not given.
    """
    judged = []
    if limits.cmrr:
        judged.append(mask_margins(pair, limits.cmrr))
    if limits.differential_gain:
        target = limits.differential_gain.of or gain
        if target is None:
            raise ValueError("gain must be given, since limits.differential_gain has no of")
        judged.append(_gain_margins(pair, limits.differential_gain, target))
    if limits.bandwidth:
        judged.append(_bandwidth_margins(pair, limits.bandwidth.least, own_circuit))
    if not (limits.output_error or limits.input_error):
        return judged
    if interference is None:
        raise ValueError("interference must be given, since limits judge what it leaves")
    found = interference_figures(pair, interference)
    if limits.output_error:
        volts, at_hz = worst_errors(found, "output")
        codes = limits.output_error.most_codes
        if codes is None:
            most, unit, step = limits.output_error.most, "V", 1.0
        else:
            most, unit = codes, "codes"
            step = interference.converter.code_volts if interference.converter else float("nan")
        judged.append(_error_margins("output_error", volts / step, at_hz, float(most or 0), unit))
    if limits.input_error:
        volts, at_hz = worst_errors(found, "input")
        judged.append(_error_margins("input_error", volts, at_hz, limits.input_error.most, "V"))
    return judged


def _error_margins(quantity: str, value: FloatArray, at_hz: FloatArray, most: float, unit: str) -> Margins:
    limit = np.full(len(value), most)
    margin = 20 * np.log10(limit / value)
    return Margins(quantity, margin, True, at_hz, value, limit, unit, np.zeros(len(value), np.bool_))


def judge_yield(cases: pd.DataFrame, least: float) -> Margins:
    """Judge the yield of cases.

    A case passes where the lower end of the interval reaches the least yield: the draws then show it, at the
    interval's confidence. It fails where even the upper end does not. In between the draws cannot tell.

    Parameters
    ----------
    cases : DataFrame
        With the columns ``yield``, ``yield_low`` and ``yield_high``.
    least : float
        The least yield, a fraction.

    Returns
    -------
    Margins
        Lower end of the interval minus least yield, in per cent of all boards.
    """
    low, high, value = (cases[f"yield{end}"].to_numpy(np.float64) for end in ("_low", "_high", ""))
    open_case = (low < least) & (high >= least)
    notes = tuple(
        f"{100 * share:.2f} % of draws pass, {100 * a:.2f} to {100 * b:.2f} % of all boards"
        + ("; more draws are needed to tell" if undecided else "")
        for share, a, b, undecided in zip(value, low, high, open_case, strict=True)
    )
    nothing = np.full(len(low), np.nan)
    return Margins(
        "yield", 100 * (low - least), False, nothing, low, np.full(len(low), least), "share", open_case, notes
    )
