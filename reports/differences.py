"""Measured against simulated: the difference per frequency, and what the instrument could not resolve."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import pandas as pd

from modepair.reports.pairs import FloatArray, ModePair
from modepair.reports.readings import decibel_text, frequency_text

BEYOND = "exceeds the instrument's residual"
EXPLAINED = "within what the residual explains"
OUTSIDE = "outside the solved band"
AT_FLOOR = "simulated only as a bound"

COLUMNS = (
    *("measurement", "case", "frequency_hz", "measured_db", "simulated_db", "difference_db"),
    *("residual_db", "at_least_db", "at_most_db", "remark"),
)
"""Columns of ``measured.csv``."""


class Measured(Protocol):
    """A measured CMRR over frequency, as the spec's reader makes it."""

    @property
    def name(self) -> str:
        """What it is called."""

    @property
    def frequency_hz(self) -> FloatArray:
        """Frequencies, Hz, shape (m,)."""

    @property
    def cmrr_db(self) -> FloatArray:
        """CMRR, dB, shape (m,)."""

    @property
    def residual_db(self) -> FloatArray:
        """The instrument's own CMRR, dB, shape (m,); infinite: not given."""

    @property
    def settings(self) -> Mapping[str, float | str]:
        """The axis values of the cases it belongs to."""


def matching_cases(measured: Measured, cases: pd.DataFrame) -> list[int]:
    """Find the cases that a measurement belongs to.

    Parameters
    ----------
    measured : Measured
        The measurement.
    cases : DataFrame
        One row per case: ``case``, and a column per axis.

    Returns
    -------
    list of int
        Numbers of the cases whose axes have the measurement's settings (numbers to 1e-9).
    """
    fits = pd.Series(True, index=cases.index)
    for path, value in measured.settings.items():
        if isinstance(value, str):
            fits &= cases[path] == value
        else:
            fits &= (cases[path] - value).abs() <= 1e-9 * abs(value)
    return [int(case) for case in cases.loc[fits, "case"]]


def differences(measured: Measured, case: int, pair: ModePair) -> pd.DataFrame:
    """Compare a measurement with one simulated case.

    An instrument with the residual rho_r reads rho_m from a circuit of rho: their phases are not known, so
    abs(rho) lies between abs(rho_m) - abs(rho_r) and abs(rho_m) + abs(rho_r) (triangle inequality).

    Parameters
    ----------
    measured : Measured
        The measurement, m frequencies.
    case : int
        Number of the case.
    pair : ModePair
        Its gains, shape (F,).

    Returns
    -------
    DataFrame
        A row per measured frequency, with the columns `COLUMNS`: CMRR measured and simulated, and measured
        minus simulated, in dB; the simulated one is interpolated linearly in dB over log f. ``at_least_db``
        and ``at_most_db`` bound what the circuit has according to the measurement. NaN: not known.
    """
    frequency_hz, measured_db = measured.frequency_hz, measured.cmrr_db
    solved_hz = pair.frequency_hz
    near = 1 + 1e-9
    inside = (frequency_hz >= solved_hz[0] / near) & (frequency_hz <= solved_hz[-1] * near)
    simulated_db = np.interp(np.log(frequency_hz), np.log(solved_hz), pair.cmrr_db)
    simulated_db = np.where(inside, simulated_db, np.nan)
    at_floor = np.interp(np.log(frequency_hz), np.log(solved_hz), pair.above_floor.astype(np.float64)) > 0
    rho, residual = 10 ** (-measured_db / 20), 10 ** (-measured.residual_db / 20)
    given = np.isfinite(measured.residual_db)
    beyond = given & (measured_db >= measured.residual_db)
    with np.errstate(divide="ignore"):
        at_most_db = -20 * np.log10(np.where(rho > residual, rho - residual, 0.0))
    at_least_db = -20 * np.log10(rho + residual)
    explained = given & ~beyond & (simulated_db >= at_least_db) & (simulated_db <= at_most_db)
    remark = np.select(
        [~inside, beyond, at_floor, explained], [OUTSIDE, BEYOND, AT_FLOOR, EXPLAINED], default=""
    )
    return pd.DataFrame(
        {
            "measurement": measured.name,
            "case": case,
            "frequency_hz": frequency_hz,
            "measured_db": measured_db,
            "simulated_db": simulated_db,
            "difference_db": np.where(at_floor, np.nan, measured_db - simulated_db),
            "residual_db": np.where(given, measured.residual_db, np.nan),
            "at_least_db": np.where(given, at_least_db, np.nan),
            "at_most_db": np.where(given & ~beyond, at_most_db, np.nan),
            "remark": remark,
        }
    )


@dataclass(frozen=True)
class Agreement:
    """How far a measurement lies from one case.

    Parameters
    ----------
    name : str
        The measurement's.
    case : int
        Number of the case.
    compared : int
        Frequencies that could be compared.
    beyond : int
        Frequencies at which the measurement exceeds the instrument's residual; these are not compared.
    rms_db, largest_db, largest_at_hz : float
        Of the differences, measured minus simulated; NaN where nothing could be compared.
    """

    name: str
    case: int
    compared: int
    beyond: int
    rms_db: float
    largest_db: float
    largest_at_hz: float

    def text(self, case_name: str = "") -> str:
        """Say it in a sentence or two.

        Parameters
        ----------
        case_name : str
            What tells the case apart.

        Returns
        -------
        str
            Plain text.
        """
        case = f"case {self.case}{f' ({case_name})' if case_name else ''}"
        if self.compared:
            side = "above" if self.largest_db > 0 else "below"
            told = (
                f"{self.name} against {case}: {self.rms_db:.1f} dB rms over {self.compared} "
                f"{'frequency' if self.compared == 1 else 'frequencies'}; furthest at "
                f"{frequency_text(self.largest_at_hz)}, "
                f"where the bench reads {decibel_text(abs(self.largest_db))} dB {side} the simulation."
            )
        else:
            told = f"{self.name} against {case}: no frequency can be compared."
        if self.beyond:
            one = self.beyond == 1
            some = "1 point exceeds" if one else f"{self.beyond} points exceed"
            told += (
                f" {some} the instrument's residual CMRR, which no reading can resolve, and "
                f"{'is' if one else 'are'} left out of these figures."
            )
        return told


def agreements(table: pd.DataFrame) -> list[Agreement]:
    """Sum up a table of differences.

    Parameters
    ----------
    table : DataFrame
        Rows of one or more calls of `differences`.

    Returns
    -------
    list of Agreement
        For each measurement and case, in their order.
    """
    found = []
    for _, rows in table.groupby(["measurement", "case"], sort=False):
        usable = rows[(rows["remark"] != BEYOND) & rows["difference_db"].notna()]
        errors = usable["difference_db"].to_numpy()
        place = int(np.argmax(np.abs(errors))) if errors.size else -1
        found.append(
            Agreement(
                name=str(rows["measurement"].iloc[0]),
                case=int(rows["case"].iloc[0]),
                compared=int(errors.size),
                beyond=int((rows["remark"] == BEYOND).sum()),
                rms_db=float(np.sqrt(np.mean(errors**2))) if errors.size else float("nan"),
                largest_db=float(errors[place]) if errors.size else float("nan"),
                largest_at_hz=float(usable["frequency_hz"].iloc[place]) if errors.size else float("nan"),
            )
        )
    return found


def all_differences(
    measurements: Iterable[Measured], cases: pd.DataFrame, pairs: Mapping[int, ModePair]
) -> pd.DataFrame:
    """Compare measurements with every case that they belong to and that was solved.

    Parameters
    ----------
    measurements : iterable of Measured
        The measurements.
    cases : DataFrame
        One row per case: ``case``, and a column per axis.
    pairs : mapping of int to ModePair
        Gains by case, each of shape (F,).

    Returns
    -------
    DataFrame
        The content of ``measured.csv``; no rows where no case could be compared.
    """
    tables = [
        differences(one, case, pairs[case])
        for one in measurements
        for case in matching_cases(one, cases)
        if case in pairs
    ]
    return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame(columns=list(COLUMNS))
