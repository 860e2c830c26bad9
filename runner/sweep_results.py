"""The results of a sweep that several processes ask for: one runs it, the others wait and read."""

from __future__ import annotations

import fcntl
import hashlib
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from traceback import format_exc
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from modepair.reports import ModePair
from modepair.reports.baselines import ROUNDED_TO, Baseline, case_settings, read_baseline
from modepair.reports.comparing_baselines import match_cases
from modepair.reports.interference import line_column
from modepair.reports.readings import frequency_text
from modepair.reports.verdicts import case_names, curve_text, value_text, verdict_line
from modepair.runner.checking import check, find_baseline
from modepair.runner.judging import accepted, read_curves
from modepair.runner.specs import read_spec
from modepair.sweeps import ModepairError, Spec, expand
from modepair.sweeps.schema import SPOT_MATCH

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["SweepResults", "sweep_results"]


@dataclass(frozen=True)
class SweepResults:
    """A checked sweep.

    Attributes
    ----------
    spec : Spec
        The spec.
    folder : Path
        Its run folder.
    cases, verdicts : DataFrame
        Its tables.
    error : str
        Why it did not run; empty where it did.
    """

    spec: Spec
    folder: Path
    cases: pd.DataFrame
    verdicts: pd.DataFrame
    error: str = ""

    def verdict(self, case: int, quantity: str, missing: str = "") -> dict[str, Any]:
        """Return the verdict on one quantity of one case.

        Parameters
        ----------
        case : int
            Its number; 0 for one that only the baseline has.
        quantity : str
            What is judged.
        missing : str
            What tells apart a case that only the baseline has.

        Returns
        -------
        dict
            A row of the table of verdicts.

        Raises
        ------
        LookupError
            Where there is none.
        """
        table = self.verdicts
        rows = table[(table["case"] == case) & (table["quantity"] == quantity)]
        if missing:
            rows = rows[rows["note"].str.endswith(f": {missing}")]
        if len(rows) != 1:
            raise LookupError(f"there are {len(rows)} verdicts on {quantity} of case {case}, not one")
        return {str(key): value for key, value in rows.iloc[0].items()}

    def report(self, verdict: dict[str, Any], path: str) -> str:
        """Tell all about a verdict that is no pass.

        Parameters
        ----------
        verdict : dict
            As from `verdict`.
        path : str
            The spec's file as a user writes it.

        Returns
        -------
        str
            The verdict, the curve against its limit, what else has changed, and how to see it again.
        """
        case = int(verdict["case"])
        name = case_names(self.cases, self.spec.axes)[1].get(case, "")
        parts = [verdict_line(verdict, name)]
        if case and (verdict["at_hz"] == verdict["at_hz"]):
            parts.append(self._curve(case, str(verdict["quantity"])))
        if verdict["quantity"] == "baseline":
            changes = self._changes()
            if changes:
                parts.append(
                    "Changed since the baseline was accepted:\n" + "\n".join(f"  {c}" for c in changes)
                )
        again = [f"The same again:    modepair check {_quoted(path)}"]
        if case:
            again.append(f"The case's deck:   modepair netlist {_quoted(path)} --case {case}")
        if verdict["quantity"] == "baseline":
            again.append(f"If it is meant:    modepair check {_quoted(path)} --accept")
        return "\n\n".join([*(part for part in parts if part), "\n".join(again)])

    def _pair(self, case: int) -> ModePair | None:
        for cases, pair in read_curves(self.folder / "curves.parquet"):
            found = np.flatnonzero(cases == case)
            if found.size:
                row = int(found[0])
                return ModePair(pair.frequency_hz, pair.common_gain[row], pair.differential_gain[row])
        return None

    def _baseline(self) -> Baseline | None:
        path = find_baseline(self.spec)
        return read_baseline(path) if path else None

    def _changes(self) -> Sequence[str]:
        baseline = self._baseline()
        engine = str(pd.read_json(self.folder / "run.json", typ="series")["versions"]["ngspice"])
        return baseline.changes(accepted(expand(self.spec), None, engine)) if baseline else ()

    def _curve(self, case: int, quantity: str) -> str:
        """Draw the curve of a case against its limit; empty for a quantity that has no curve."""
        pair, limits = self._pair(case), self.spec.limits
        if pair is None:
            return ""
        spots = self.spec.frequency.spots
        if quantity == "cmrr" and limits and limits.cmrr:
            level_db = limits.cmrr.at(pair.frequency_hz)
            inside = np.flatnonzero(np.isfinite(level_db))
            corners = limits.cmrr.frequency_hz
            always = [*corners.tolist(), *(hz for hz in spots if corners[0] <= hz <= corners[-1])]
            return curve_text(
                pair.frequency_hz[inside], pair.cmrr_db[inside], level_db[inside],
                names=("CMRR, dB", "mask, dB"), always_hz=always,
            )  # fmt: skip
        if quantity == "differential_gain" and limits and limits.differential_gain:
            limit = limits.differential_gain
            low_hz, high_hz = limit.from_hz or pair.frequency_hz[0], limit.to_hz or pair.frequency_hz[-1]
            inside = np.flatnonzero(
                (pair.frequency_hz >= low_hz * (1 - SPOT_MATCH))
                & (pair.frequency_hz <= high_hz * (1 + SPOT_MATCH))
            )
            gain = limit.of or self.spec.stage.gain or 1.0
            off = -100 * np.abs(np.abs(pair.differential_gain[inside]) / gain - 1)
            most = np.full(inside.size, -100 * limit.within)
            return curve_text(
                pair.frequency_hz[inside], off, most, names=("-|off|, %", "limit, %"), decimals=4
            )
        if quantity == "baseline" and (baseline := self._baseline()):
            sweep = expand(self.spec)
            matched = match_cases(baseline, accepted(sweep, None, ""), case_settings(sweep)).matched
            places = np.abs(pair.frequency_hz[:, np.newaxis] / baseline.frequency_hz - 1).argmin(axis=0)
            now_db = np.round(pair.cmrr_db[places], ROUNDED_TO)
            before_db = matched[case].cmrr_db - baseline.allow_db
            return curve_text(
                baseline.frequency_hz, now_db, before_db, names=("CMRR, dB", "least, dB"), always_hz=spots
            )
        return self._lines(case, quantity.removesuffix("_error")) if quantity.endswith("_error") else ""

    def _lines(self, case: int, side: str) -> str:
        """List what each line of interference leaves."""
        row = self.cases[self.cases["case"] == case].iloc[0]
        found = self.spec.interference
        lines = []
        for hz, volts in found.spectrum if found else ():
            error = value_text(float(row[line_column(side, hz)]), "V")
            lines.append(f"{frequency_text(hz, digits=6):>12} {value_text(volts, 'V'):>10} leaves {error}")
        if f"swept_{side}_error_v" in row:
            error = value_text(float(row[f"swept_{side}_error_v"]), "V")
            where = frequency_text(float(row[f"swept_{side}_error_at_hz"]), digits=4)
            lines.append(f"{'profile':>12} {'':>10} leaves {error} at most, at {where}")
        return "\n".join(lines)


def _quoted(path: str) -> str:
    from shlex import quote

    return quote(path)


@lru_cache(maxsize=16)
def sweep_results(path: Path, runs: Path) -> SweepResults:
    """Return the results of a spec's sweep, which one process of all that ask runs.

    Parameters
    ----------
    path : Path
        The spec.
    runs : Path
        A folder that the processes share; the run folder is made in it.

    Returns
    -------
    SweepResults
        With its error where it did not run.
    """
    key = hashlib.sha256(str(path).encode()).hexdigest()[:16]
    folder, problem = runs / key, runs / f"{key}.error"
    with (runs / f"{key}.lock").open("w", encoding="ascii") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not folder.exists() and not problem.exists():
            try:
                check(path, folder)
            except ModepairError as error:
                problem.write_text(str(error), encoding="utf-8")
            except Exception:
                # Told once per item, but not tried again for each.
                problem.write_text(f"a fault of modepair\n\n{format_exc()}", encoding="utf-8")
    spec = read_spec(path)
    if problem.exists():
        nothing = pd.DataFrame()
        return SweepResults(spec, folder, nothing, nothing, problem.read_text(encoding="utf-8"))
    cases, verdicts = (pd.read_csv(folder / name) for name in ("cases.csv", "verdicts.csv"))
    for table, column in ((verdicts, "note"), (cases, "above_floor")):
        if column in table:
            table[column] = table[column].astype(object).where(table[column].notna(), "")
    return SweepResults(spec, folder, cases, verdicts)
