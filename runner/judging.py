"""Judging a run: its curves are read once more, and its cases get their errors and verdicts."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow.parquet as pq

from modepair.reports import ModePair
from modepair.reports.baselines import ROUNDED_TO, Baseline, BaselineCase, case_settings, spec_settings
from modepair.reports.comparing_baselines import Comparison, compare_case, match_cases, unmatched
from modepair.reports.interference import interference_figures
from modepair.reports.judgement import FAIL, VERDICT_COLUMNS, judge, judge_yield, judged_quantities
from modepair.runner.record import versions
from modepair.sweeps import Sweep

__all__ = ["Judged", "accepted", "judge_run", "no_verdicts", "read_curves"]


@dataclass(frozen=True)
class Judged:
    """What judging a run came to.

    Attributes
    ----------
    cases : DataFrame
        The table of cases, with the columns of errors that interference leaves.
    verdicts : DataFrame
        A row per case and judged quantity: the columns of `VERDICT_COLUMNS`, and a column per axis.
    changes : sequence of str
        What else differs from what the baseline came from.
    """

    cases: pd.DataFrame
    verdicts: pd.DataFrame
    changes: Sequence[str] = field(default_factory=tuple)


def no_verdicts() -> pd.DataFrame:
    """Return a table of verdicts without rows."""
    return pd.DataFrame(columns=list(VERDICT_COLUMNS))


def read_curves(path: Path, draw: int = 0) -> Iterator[tuple[npt.NDArray[np.int64], ModePair]]:
    """Read the curves of every case, some at a time.

    Parameters
    ----------
    path : Path
        The curves file of a run.
    draw : int
        Which draw; 0 is the nominal circuit.

    Yields
    ------
    case : ndarray of int, shape (k,)
        Case numbers.
    pair : ModePair
        Their gains, shape (k, F).
    """
    columns = ["case", "draw", "frequency_hz", "common_re", "common_im", "differential_re", "differential_im"]
    file = pq.ParquetFile(path)
    for group in range(file.num_row_groups):
        table = {name: column.to_numpy() for name, column in _columns(file, group, columns)}
        keep = table["draw"] == draw
        if not keep.any():
            continue
        case, first = np.unique(table["case"][keep], return_index=True)
        points = int(keep.sum()) // len(case)
        gains = [
            (table[f"{side}_re"][keep] + 1j * table[f"{side}_im"][keep]).reshape(len(case), points)
            for side in ("common", "differential")
        ]
        start = int(first[0])
        yield case.astype(np.int64), ModePair(table["frequency_hz"][keep][start : start + points], *gains)


def _columns(
    file: pq.ParquetFile, group: int, names: Sequence[str]
) -> Iterator[tuple[str, pd.Series[float]]]:
    frame = file.read_row_group(group, columns=list(names)).to_pandas()
    for name in names:
        yield name, frame[name]


def judge_run(
    sweep: Sweep,
    cases: pd.DataFrame,
    curves: Path,
    *,
    baseline: Baseline | None = None,
    engine: str = "",
    draw: int = 0,
) -> Judged:
    """Judge every case of a run.

    Parameters
    ----------
    sweep : Sweep
        What was asked.
    cases : DataFrame
        The table of cases, with its yields where boards were drawn.
    curves : Path
        The curves file.
    baseline : Baseline, optional
        Curves accepted earlier.
    engine : str
        Version of ngspice.
    draw : int
        Which draw to judge; 0 is the nominal circuit.

    Returns
    -------
    Judged
        A case that failed in simulation fails in every quantity, with its reason.
    """
    spec = sweep.spec
    limits, interference = spec.limits, spec.interference
    if limits is None and interference is None and baseline is None:
        return Judged(cases, no_verdicts())
    errors: list[pd.DataFrame] = []
    verdicts: list[pd.DataFrame] = []
    comparison, present = _compared(sweep, baseline, engine)
    for case, pair in read_curves(curves, draw):
        if interference:
            errors.append(interference_figures(pair, interference).assign(case=case))
        if limits:
            judged = judge(
                pair,
                limits,
                gain=spec.stage.gain,
                interference=interference,
                own_circuit=sweep.own_circuit[case - 1],
            )
            verdicts += [margins.frame(case) for margins in judged]
        if baseline and comparison:
            for row, number in enumerate(case.tolist()):
                if number in comparison.matched:
                    one = ModePair(pair.frequency_hz, pair.common_gain[row], pair.differential_gain[row])
                    found = compare_case(one, baseline, comparison.matched[number], baseline.allow_db)
                    verdicts.append(found.frame([number]))
    if errors:
        cases = _with_errors(cases, pd.concat(errors, ignore_index=True))
    quantities = [*judged_quantities(limits), *(["baseline"] if baseline else [])]
    done = cases[cases["state"] == "done"]
    if limits and limits.yield_least is not None:
        if "yield" in done:
            verdicts.append(judge_yield(done, limits.yield_least).frame(done["case"]))
        else:
            quantities.remove("yield")
    failed = cases[cases["state"] != "done"]
    verdicts += [_failed(failed, quantity) for quantity in quantities if len(failed)]
    if comparison:
        verdicts.append(unmatched(comparison))
    return Judged(
        cases,
        _in_order(sweep, [table for table in verdicts if len(table)], quantities),
        tuple(baseline.changes(present)) if baseline else (),
    )


def _with_errors(cases: pd.DataFrame, errors: pd.DataFrame) -> pd.DataFrame:
    """Put the columns of errors before the state, which stays last."""
    table = cases.merge(errors, on="case", how="left", validate="one_to_one")
    return table[[*(name for name in table.columns if name != "state"), "state"]]


def _failed(failed: pd.DataFrame, quantity: str) -> pd.DataFrame:
    count = len(failed)
    columns: dict[str, object] = {
        "case": failed["case"].to_numpy(np.int64),
        "quantity": [quantity] * count,
        "verdict": [FAIL] * count,
        **{
            name: np.full(count, np.nan)
            for name in ("margin_db", "margin_percent", "at_hz", "value", "limit")
        },
        "unit": [""] * count,
        "bound": np.zeros(count, np.bool_),
        "note": [f"the simulation {state}" for state in failed["state"]],
    }
    return pd.DataFrame(columns)


def _in_order(sweep: Sweep, tables: Sequence[pd.DataFrame], quantities: Sequence[str]) -> pd.DataFrame:
    if not tables:
        return no_verdicts()
    verdicts = pd.concat(tables, ignore_index=True)
    rank = verdicts["quantity"].map({name: place for place, name in enumerate(quantities)})
    verdicts = verdicts.assign(_rank=rank, _last=verdicts["case"] == 0)
    verdicts = verdicts.sort_values(["_last", "case", "_rank"], kind="stable").drop(
        columns=["_rank", "_last"]
    )
    # A case that failed in simulation is a failure, not a new case; missing ones all have the number 0.
    doubled = verdicts.duplicated(["case", "quantity"], keep="first") & (verdicts["case"] > 0)
    verdicts = verdicts[~doubled].merge(sweep.frame(), on="case", how="left", validate="many_to_one")
    paths = [axis.path for axis in sweep.axes]
    return verdicts[["case", *paths, *VERDICT_COLUMNS[1:]]]


def _compared(sweep: Sweep, baseline: Baseline | None, engine: str) -> tuple[Comparison | None, Baseline]:
    present = accepted(sweep, None, engine)
    if baseline is None:
        return None, present
    return match_cases(baseline, present, case_settings(sweep)), present


def accepted(sweep: Sweep, curves: Path | None, engine: str, allow_db: float = 0.0) -> Baseline:
    """Make a baseline of a run.

    Parameters
    ----------
    sweep : Sweep
        What was asked.
    curves : Path or None
        The curves file; None: no cases.
    engine : str
        Version of ngspice.
    allow_db : float
        Smallest fall that counts later on, in dB.

    Returns
    -------
    Baseline
        With the curves of every solved case.
    """
    spec = sweep.spec
    origin = {"spec": Path(spec.path).name, "digest": f"sha256 {spec.digest}", **versions(engine)}
    cases: list[BaselineCase] = []
    axes = case_settings(sweep) if curves else []
    for numbers, pair in read_curves(curves) if curves else ():
        rounded = np.round(pair.cmrr_db, ROUNDED_TO)
        for row, number in enumerate(numbers.tolist()):
            cases.append(BaselineCase(axes[number - 1], rounded[row], pair.above_floor[row]))
    frequency_hz = np.asarray(spec.frequency.frequency_hz)
    return Baseline(origin, allow_db, spec_settings(sweep), frequency_hz, tuple(cases))
