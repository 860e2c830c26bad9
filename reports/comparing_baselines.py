"""Comparing with a baseline: how far CMRR has fallen, case by case, and which cases have come and gone."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from modepair.reports.baselines import ROUNDED_TO, Baseline, BaselineCase
from modepair.reports.judgement import FAIL, NEW, Margins, nearest
from modepair.reports.pairs import FLOOR_VOLTS, ModePair
from modepair.reports.readings import frequency_text

__all__ = ["FREQUENCY_MATCH", "Comparison", "compare_case", "match_cases", "unmatched"]

FREQUENCY_MATCH = 1e-9
"""Relative distance within which two frequencies are the same."""


@dataclass(frozen=True)
class Comparison:
    """Which cases a run and its baseline share.

    Parameters
    ----------
    matched : mapping of int to BaselineCase
        Accepted curve by the run's case number.
    new : list of int
        Numbers of cases that the baseline has not.
    missing : list of BaselineCase
        Cases of the baseline that the run has not.
    """

    matched: dict[int, BaselineCase]
    new: list[int]
    missing: list[BaselineCase]


def match_cases(baseline: Baseline, now: Baseline, axes: list[dict[str, str]]) -> Comparison:
    """Match cases by the values of their axes.

    An axis that only one side has counts with the value that the other side's spec gives for it.

    Parameters
    ----------
    baseline : Baseline
        What was accepted.
    now : Baseline
        The present run; only its settings count.
    axes : list of dict
        Values of the axes of each present case, case 1 first.

    Returns
    -------
    Comparison
        Every case of either side once.
    """
    paths = sorted({path for case in [*(c.axes for c in baseline.cases), *axes] for path in case})
    accepted = {baseline.key(case.axes, paths): case for case in baseline.cases}
    matched: dict[int, BaselineCase] = {}
    new = []
    for number, values in enumerate(axes, 1):
        found = accepted.pop(now.key(values, paths), None)
        if found is None:
            new.append(number)
        else:
            matched[number] = found
    return Comparison(matched, new, list(accepted.values()))


def compare_case(pair: ModePair, baseline: Baseline, case: BaselineCase, allow_db: float) -> Margins:
    """Compare a curve with the accepted one.

    Both are rounded alike. A fall counts beyond `allow_db`, and beyond what round-off at the numerical floor
    can change; a CMRR above the floor counts as no change.

    Parameters
    ----------
    pair : ModePair
        Gains of the case, shape (F,).
    baseline : Baseline
        What was accepted.
    case : BaselineCase
        Its curve.
    allow_db : float
        Smallest fall that counts, in dB.

    Returns
    -------
    Margins
        Of one case: what is left of the allowance where it is smallest. NaN, a failure, where a frequency of
        the baseline is not solved any more.
    """
    places = np.clip(np.searchsorted(pair.frequency_hz, baseline.frequency_hz), 1, pair.frequency_hz.size - 1)
    places = np.where(
        np.abs(pair.frequency_hz[places - 1] - baseline.frequency_hz)
        < np.abs(pair.frequency_hz[places] - baseline.frequency_hz),
        places - 1,
        places,
    )
    gone = np.abs(pair.frequency_hz[places] / baseline.frequency_hz - 1) > FREQUENCY_MATCH
    if gone.any():
        first = frequency_text(float(baseline.frequency_hz[gone][0]), digits=6)
        count = f"{int(gone.sum())} of the baseline's {gone.size} frequencies"
        note = f"{count} are not solved now, {first} the first"
        nothing = np.array([np.nan])
        return Margins("baseline", nothing, True, nothing, nothing, nothing, "dB", np.array([False]), (note,))
    now_db = np.round(pair.cmrr_db[places], ROUNDED_TO)
    bound = pair.above_floor[places]
    change_db = np.where(bound, np.maximum(now_db - case.cmrr_db, 0.0), now_db - case.cmrr_db)
    change_db = np.where(bound & case.bound, 0.0, change_db)
    noise_db = 20 * np.log10(1 + FLOOR_VOLTS / np.maximum(np.abs(pair.common_gain[places]), FLOOR_VOLTS))
    margin = np.round(change_db + allow_db, ROUNDED_TO + 6) + noise_db
    at = int(nearest(margin[np.newaxis], np.zeros_like(margin, np.bool_)[np.newaxis])[0])
    best = int(change_db.argmax())
    notes = []
    if margin[at] < 0:
        notes.append(f"fell by {-change_db[at]:.2f} dB, from {case.cmrr_db[at]:.2f} dB")
    if change_db[best] > allow_db:
        where = frequency_text(float(baseline.frequency_hz[best]))
        notes.append(f"better by up to {change_db[best]:.2f} dB, at {where}")
    return Margins(
        "baseline", margin[[at]], True, baseline.frequency_hz[[at]], now_db[[at]],
        case.cmrr_db[[at]] - allow_db, "dB", np.array([False]), ("; ".join(notes),),
    )  # fmt: skip


def unmatched(comparison: Comparison) -> pd.DataFrame:
    """Return verdicts of the cases that only one side has: new ones pass by, missing ones fail.

    Parameters
    ----------
    comparison : Comparison
        As from `match_cases`.

    Returns
    -------
    DataFrame
        With the columns of `Margins.frame`; a missing case has the number 0.
    """
    nothing = np.array([np.nan])

    def row(case: int, verdict: str, note: str) -> pd.DataFrame:
        none = np.array([False])
        margins = Margins("baseline", nothing, True, nothing, nothing, nothing, "dB", none, (note,))
        return margins.frame([case]).assign(verdict=verdict)

    rows = [row(number, NEW, "not in the baseline; --accept takes it in") for number in comparison.new]
    rows += [
        row(0, FAIL, f"in the baseline, but not in the sweep: {case.name}") for case in comparison.missing
    ]
    return pd.concat(rows, ignore_index=True) if rows else pd.DataFrame()
