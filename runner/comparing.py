"""Comparing runs: which cases are whose, scored, and ranked."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from modepair.reports.axis_labels import axis_columns, case_texts
from modepair.reports.comparison import READING_DB, Comparison, Target, band_of, compare, scores
from modepair.reports.interference import worst_errors
from modepair.runner.errors import ReadingError
from modepair.runner.reading import nominal_pairs
from modepair.runner.sweep import Run
from modepair.sweeps import Spec, expand

if TYPE_CHECKING:
    from modepair.sweeps.axes import Axis
    from modepair.sweeps.limits import Mask

__all__ = ["Compared", "compare_runs"]

CANDIDATE_AXES = ("stage.topology", "stage.opamp", "stage.opamps.")
"""Axes whose values are candidates; a full stop at the end: every axis that starts so."""


@dataclass(frozen=True)
class Compared:
    """Runs compared.

    Parameters
    ----------
    runs : tuple of Run
        The runs, at least one.
    names : tuple of str
        What each is called.
    rated : DataFrame
        A row per case of every run: `run`, `candidate`, `condition`, the figures, the scores.
    comparison : Comparison
        The candidates in their order.
    by : tuple of str
        Axes that were named as the candidates'; empty where they were not.
    """

    runs: tuple[Run, ...]
    names: tuple[str, ...]
    rated: pd.DataFrame
    comparison: Comparison
    by: tuple[str, ...] = ()


def compare_runs(runs: Sequence[Run], by: Sequence[str] = (), accuracy_db: float = READING_DB) -> Compared:
    """Rank the candidates of runs.

    Parameters
    ----------
    runs : sequence of Run
        The runs.
    by : sequence of str
        Axes whose values are candidates; where empty, the axes of topology and op-amps.
    accuracy_db : float
        Least difference that ranks one candidate before another, dB.

    Returns
    -------
    Compared
        With several runs each is a candidate of its own, or each of its candidates is.

    Raises
    ------
    ReadingError
        If there are no candidates, an axis of `by` is none of a run's, the runs ask for different masks, or
        nothing was solved.
    """
    names = run_names(runs)
    target = target_of([run.spec for run in runs], names)
    tables = []
    for run, name in zip(runs, names, strict=True):
        axes = candidate_axes(run.spec, by, name)
        if not axes and len(runs) == 1:
            raise ReadingError(
                f"{name}: there are no candidates to compare; vary stage.opamp, stage.opamps.A1 or "
                "stage.topology, name other axes with --by, or give several runs"
            )
        tables.append(_rated(run, name, axes, target, len(runs) > 1))
    rated = pd.concat(tables, ignore_index=True)
    if not (rated["state"] == "done").any():
        raise ReadingError(f"{', '.join(names)}: every case failed, so there is nothing to compare")
    return Compared(tuple(runs), names, rated, compare(rated, target, accuracy_db), tuple(by))


def run_names(runs: Sequence[Run]) -> tuple[str, ...]:
    """Name runs by their folders; by their whole paths where two folders have the same name."""
    short = [run.folder.name for run in runs]
    return tuple(short) if len(set(short)) == len(short) else tuple(str(run.folder) for run in runs)


def candidate_axes(spec: Spec, by: Sequence[str], name: str = "") -> list[Axis]:
    """Pick the axes whose values are candidates.

    Parameters
    ----------
    spec : Spec
        The spec.
    by : sequence of str
        Their paths; where empty, topology and op-amps.
    name : str
        The run's name, for messages.

    Returns
    -------
    list of Axis
        Those with more than one value.

    Raises
    ------
    ReadingError
        If `by` names an axis that the spec does not have.
    """
    for path in by:
        if path not in {axis.path for axis in spec.axes}:
            known = ", ".join(axis.path for axis in spec.axes) or "none"
            raise ReadingError(f"{name}: {path} is not an axis of this sweep; its axes: {known}")
    chosen = []
    for axis in spec.axes:
        is_one = axis.path in by if by else axis.path.startswith(CANDIDATE_AXES)
        if is_one and len(axis.values) > 1:
            chosen.append(axis)
    return chosen


def target_of(specs: Sequence[Spec], names: Sequence[str]) -> Target:
    """Decide what runs are ranked by: the mask that they ask for, or the lowest CMRR over the band of spots.

    Raises
    ------
    ReadingError
        If two runs ask for different masks, or for different bands where there is no mask.
    """
    masks: dict[Mask, str] = {}
    for spec, name in zip(specs, names, strict=True):
        if spec.limits and spec.limits.cmrr:
            masks.setdefault(spec.limits.cmrr, name)
    if len(masks) > 1:
        first, second = list(masks.values())[:2]
        raise ReadingError(
            f"{first} and {second} ask for different masks, so no margin compares them; give both the same limits.cmrr"
        )
    mask = next(iter(masks), None)
    bands = [band_of(spec.frequency.spots, (spec.frequency.start, spec.frequency.stop)) for spec in specs]
    if mask is None:
        for name, band in zip(names, bands, strict=True):
            if band != bands[0]:
                raise ReadingError(
                    f"{names[0]} and {name} have different bands of spots; give both the same frequency.spots, or "
                    "the same limits.cmrr"
                )
    return Target(bands[0], mask)


def _rated(run: Run, name: str, axes: Sequence[Axis], target: Target, several: bool) -> pd.DataFrame:
    """One run's cases with whose they are, and their scores."""
    spec, cases = run.spec, run.cases.copy()
    paths = {axis.path for axis in axes}
    texts = axis_columns(cases, spec.axes)
    own = _joined({axis.path: texts[axis.path] for axis in axes}, len(cases))
    if several:
        own = [f"{name}: {text}" if text else name for text in own]
    others = {path: values for path, values in texts.items() if path not in paths}
    cases.insert(0, "run", name)
    cases.insert(1, "candidate", own)
    cases.insert(2, "condition", _joined(others, len(cases)))
    scored = []
    for case, pair in nominal_pairs(run.folder / "curves.parquet"):
        try:
            found = scores(pair, target)
        except ValueError as error:
            raise ReadingError(f"{name}: {error}; its curves do not cover what is compared") from error
        scored.append(found.assign(case=case))
    if not scored and (cases["state"] == "done").any():
        raise ReadingError(f"{name}: holds no nominal curves, but those of one board; run it without --draw")
    if scored:
        cases = cases.merge(pd.concat(scored, ignore_index=True), on="case", how="left")
    if "differential_gain" in cases:
        cases["gain_error"] = cases["differential_gain"] / _asked_gain(spec, cases) - 1
    done = cases["state"] == "done"
    for side in ("input", "output"):
        if any(column in cases for column in (f"{side}_error_v", f"swept_{side}_error_v")):
            cases[f"worst_{side}_error_v"] = np.nan
            cases.loc[done, f"worst_{side}_error_v"] = worst_errors(cases[done], side)[0]
    return cases.merge(_told(spec, cases["case"]), on="case", how="left")


def _joined(columns: dict[str, list[str]], count: int) -> list[str]:
    return case_texts(columns) if columns else [""] * count


def _asked_gain(spec: Spec, cases: pd.DataFrame) -> Any:
    """The gain that each case was to have; NaN where the spec does not say."""
    if "stage.gain" in cases:
        return cases["stage.gain"]
    asked = spec.stage.gain
    if asked is None and spec.limits and spec.limits.differential_gain:
        asked = spec.limits.differential_gain.of
    return np.nan if asked is None else asked


def _told(spec: Spec, numbers: pd.Series) -> pd.DataFrame:
    """What the spec tells of the op-amps of each case: notes, and the price where they are of one type."""
    rows = []
    for block in expand(spec).blocks:
        used = list(dict.fromkeys(block.opamps.values()))
        known = [(name, spec.candidates[name]) for name in used]
        notes = [(name, opamp.note) for name, opamp in known if opamp.note]
        note = notes[0][1] if len(used) == 1 and notes else "; ".join(f"{n}: {text}" for n, text in notes)
        price = known[0][1].unit_price if len(used) == 1 else None
        rows.append(pd.DataFrame({"case": block.case, "note": note, "unit_price": price}))
    told = pd.concat(rows, ignore_index=True)
    told["unit_price"] = pd.to_numeric(told["unit_price"])
    return told[told["case"].isin(numbers)]
