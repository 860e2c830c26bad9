"""The curves of a page: which cases are drawn, how they are told apart, and what is laid over them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from modepair.reports.axis_labels import axis_columns, case_texts, short_names, varying
from modepair.reports.case_curves import CaseCurves
from modepair.reports.comparison import scores
from modepair.reports.interactive import PageCurve, PageOverlay
from modepair.reports.pairs import FloatArray, ModePair
from modepair.reports.palette import curve_styles
from modepair.reports.plot_files import svg_text
from modepair.reports.plots import plot_cmrr
from modepair.runner.comparing import Compared, candidate_axes, run_names, target_of
from modepair.runner.reading import curves_of, nominal_pairs
from modepair.runner.sweep import Run

if TYPE_CHECKING:
    from modepair.reports.baselines import Baseline

__all__ = ["LOWEST_OF_MANY", "MOST_CURVES", "DrawnCurves", "draw_curves", "winner_of"]

MOST_CURVES = 40
"""Cases beyond which the page draws the lowest ones, and a band for all."""

LOWEST_OF_MANY = 12
"""Curves drawn where there are more cases than that, besides those that decide a candidate."""

MOST_BANDS = 6
"""Curves beyond which only the winner's carries its band of boards."""

_RUN = "run"


@dataclass(frozen=True)
class DrawnCurves:
    """What a page draws.

    Parameters
    ----------
    curves : list of PageCurve
        The curves.
    overlays : list of PageOverlay
        What is laid over them.
    note : str
        What is to be said where not every case is drawn.
    keep_hz : list of float
        Frequencies that are never thinned out.
    stills : dict of str to str
        Caption to SVG of the same curves, for print.
    """

    curves: list[PageCurve]
    overlays: list[PageOverlay]
    note: str
    keep_hz: list[float]
    stills: dict[str, str]


def draw_curves(
    runs: Sequence[Run], compared: Compared | None = None, baseline: Baseline | None = None
) -> DrawnCurves:
    """Choose and style the curves of runs.

    Parameters
    ----------
    runs : sequence of Run
        At least one.
    compared : Compared, optional
        Their candidates in their order.
    baseline : Baseline, optional
        Curves accepted earlier.

    Returns
    -------
    DrawnCurves
        Of up to `MOST_CURVES` cases all; of more the lowest and those that decide, and a band for all.

    Raises
    ------
    ReadingError
        If the curves of a run cannot be read.
    """
    names = run_names(runs)
    target = target_of([run.spec for run in runs], names)
    lowest, lowest_at = _lowest_scores(runs, compared)
    shown = _shown_cases(lowest, compared)
    curves, overlays, stills = _curves(runs, names, compared, shown, len(lowest) > len(shown))
    if target.mask:
        overlays.append(PageOverlay("mask", "mask", target.mask.frequency_hz, target.mask.level_db))
    if baseline:
        overlays += _baseline_overlays(baseline)
    for run in runs:
        overlays += _measured_overlays(run)
    overlays += _decides(compared)
    keep = [hz for run in runs for hz in run.spec.frequency.exact_hz.tolist()]
    keep += [float(hz) for hz in lowest_at.dropna().tolist()]
    note = _note(lowest, shown)
    if any(curve.band_db is not None for curve in curves):
        note = f"{note} The tint along a curve holds 98 of 100 boards drawn.".strip()
    return DrawnCurves(curves, overlays, note, sorted(set(keep)), stills)


def _lowest_scores(runs: Sequence[Run], compared: Compared | None) -> tuple[pd.Series, pd.Series]:
    """Score of every solved case of every run, and where it is, Hz; indexed by run and case."""
    if compared:
        rated = compared.rated[compared.rated["state"] == "done"]
        index = pd.MultiIndex.from_arrays([rated["run"], rated["case"]])
        return (
            pd.Series(rated["score_db"].to_numpy(), index),
            pd.Series(rated["score_at_hz"].to_numpy(), index),
        )
    names = run_names(runs)
    target = target_of([run.spec for run in runs], names)
    found, places, keys = [], [], []
    for run, name in zip(runs, names, strict=True):
        for case, pair in nominal_pairs(run.folder / "curves.parquet"):
            table = scores(pair, target)
            found += table["score_db"].tolist()
            places += table["score_at_hz"].tolist()
            keys += [(name, number) for number in case.tolist()]
    index = pd.MultiIndex.from_tuples(keys, names=["run", "case"])
    return pd.Series(found, index, dtype=float), pd.Series(places, index, dtype=float)


def _shown_cases(lowest: pd.Series, compared: Compared | None) -> set[tuple[str, int]]:
    chosen = lowest if len(lowest) <= MOST_CURVES else lowest.nsmallest(LOWEST_OF_MANY)
    shown = {(str(run), int(case)) for run, case in chosen.index.tolist()}
    if compared:
        ranked = compared.comparison.ranked.head(LOWEST_OF_MANY)
        shown |= {
            (str(run), int(case)) for run, case in zip(ranked["run"], ranked["decided_in_case"], strict=True)
        }
    return shown


def _note(lowest: pd.Series, shown: set[tuple[str, int]]) -> str:
    if len(lowest) <= len(shown):
        return ""
    return (
        f"Drawn: {len(shown)} of {len(lowest):,} cases, the lowest and those that decide a candidate, and a band from "
        "the lowest to the highest CMRR of all. Every case is in cases.csv and curves.parquet."
    )


def _curves(
    runs: Sequence[Run],
    names: Sequence[str],
    compared: Compared | None,
    shown: set[tuple[str, int]],
    banded_all: bool,
) -> tuple[list[PageCurve], list[PageOverlay], dict[str, str]]:
    """Curves that are drawn, the band of all where they are not all, and stills for print."""
    rows: list[tuple[str, int, dict[str, str], ModePair, Run]] = []
    spread: list[PageOverlay] = []
    stills: dict[str, str] = {}
    for run, name in zip(runs, names, strict=True):
        own = {case for owner, case in shown if owner == name}
        pairs = curves_of(run.folder / "curves.parquet", own)
        if not pairs:
            continue
        texts = _keys(run, name, compared, len(runs) > 1)
        rows += [(name, case, texts[case], pair, run) for case, pair in sorted(pairs.items())]
        if banded_all:
            spread += _spread(run, name, len(runs) > 1)
        stills[f"CMRR over frequency, {name}" if len(runs) > 1 else "CMRR over frequency"] = _still(
            run, pairs, name if len(runs) > 1 else ""
        )
    paths = list(dict.fromkeys(path for _, _, keys, _, _ in rows for path in keys))
    matrix = [tuple(keys.get(path, "–") for path in paths) for _, _, keys, _, _ in rows]
    kept = [place for place in range(len(paths)) if len({row[place] for row in matrix}) > 1]
    keyed = [tuple(row[place] for place in kept) for row in matrix]
    styles = curve_styles(keyed) if rows else []
    heads = short_names([path for path in paths if path != _RUN])
    heads[_RUN] = "run"
    groups = [heads[paths[place]].replace("_", " ") for place in kept]
    winner = winner_of(compared)
    curves = []
    for (name, case, _, pair, run), values, style in zip(rows, keyed, styles, strict=True):
        banded = len(rows) <= MOST_BANDS or (name, case) == winner
        curves.append(
            PageCurve(
                name=_curve_name(groups, values, case),
                keys=tuple(zip(groups, values, strict=True)),
                style=style,
                pair=pair,
                asked_db=_asked_db(runs, pair),
                band_db=_boards_band(run, case) if banded else None,
            )
        )
    return curves, spread, stills


def _curve_name(groups: Sequence[str], values: Sequence[str], case: int) -> str:
    text = case_texts({group: [value, ""] for group, value in zip(groups, values, strict=True)})
    return f"{text[0]} (case {case})" if text and text[0] else f"case {case}"


def _keys(run: Run, name: str, compared: Compared | None, several: bool) -> dict[int, dict[str, str]]:
    """Texts of the axes that vary, by case; candidates' axes first."""
    columns = varying(axis_columns(run.cases, run.spec.axes))[0]
    first = [axis.path for axis in candidate_axes(run.spec, compared.by if compared else ())]
    paths = [path for path in first if path in columns] + [path for path in columns if path not in first]
    found = {}
    for row, case in enumerate(run.cases["case"].tolist()):
        own = {_RUN: name} if several else {}
        found[int(case)] = own | {path: columns[path][row] for path in paths}
    return found


def _asked_db(runs: Sequence[Run], pair: ModePair) -> FloatArray | None:
    for run in runs:
        if run.spec.limits and run.spec.limits.cmrr:
            return run.spec.limits.cmrr.at(pair.frequency_hz)
    return None


def winner_of(compared: Compared | None) -> tuple[str, int] | None:
    """Run and case that decide the first candidate; None where there is none."""
    if compared is None or compared.comparison.winners.empty:
        return None
    row = compared.comparison.winners.iloc[0]
    return str(row["run"]), int(row["decided_in_case"])


def _decides(compared: Compared | None) -> list[PageOverlay]:
    """A ring where the winner is decided."""
    if compared is None or compared.comparison.winners.empty:
        return []
    row = compared.comparison.winners.iloc[0]
    at_hz = float(row["decided_at_hz"])
    level = float(row[compared.comparison.target.column])
    mask = compared.comparison.target.mask
    if mask:
        level += float(mask.at([at_hz])[0])
    name = f"decides {row['candidate']}"
    return [PageOverlay(name, "mark", np.array([at_hz]), np.array([level]))]


def _boards_band(run: Run, case: int) -> tuple[FloatArray, FloatArray] | None:
    """From the first to the ninety-ninth of a hundred boards, dB, where boards were drawn."""
    path = run.folder / "quantiles.parquet"
    if not path.is_file():
        return None
    table = pd.read_parquet(
        path, columns=["case", "frequency_hz", "cmrr_db_p1", "cmrr_db_p99"], filters=[("case", "==", case)]
    )
    if len(table) != run.spec.frequency.frequency_hz.size:
        return None
    return table["cmrr_db_p1"].to_numpy(np.float64), table["cmrr_db_p99"].to_numpy(np.float64)


def _spread(run: Run, name: str, several: bool) -> list[PageOverlay]:
    low: FloatArray | None = None
    high: FloatArray | None = None
    frequency_hz = np.empty(0)
    for _, pair in nominal_pairs(run.folder / "curves.parquet"):
        frequency_hz = pair.frequency_hz
        least, most = pair.cmrr_db.min(axis=0), pair.cmrr_db.max(axis=0)
        low = least if low is None else np.minimum(low, least)
        high = most if high is None else np.maximum(high, most)
    if low is None or high is None:
        return []
    return [
        PageOverlay(f"all cases of {name}" if several else "all cases", "spread", frequency_hz, low, high)
    ]


def _still(run: Run, pairs: Mapping[int, ModePair], title: str) -> str:
    """Draw the curves as they are printed: the same ones, a label at each."""
    numbers = sorted(pairs)
    rows = run.cases.set_index("case", drop=False).loc[numbers]
    first = pairs[numbers[0]]
    stacked = ModePair(
        first.frequency_hz,
        np.stack([pairs[number].common_gain for number in numbers]),
        np.stack([pairs[number].differential_gain for number in numbers]),
    )
    mask = run.spec.limits.cmrr.corners if run.spec.limits and run.spec.limits.cmrr else ()
    drawing = plot_cmrr(
        CaseCurves(stacked, axis_columns(rows, run.spec.axes), title, numbers),
        mask=mask,
        measured=run.spec.measurements,
    )
    return svg_text(drawing)


def _baseline_overlays(baseline: Baseline) -> list[PageOverlay]:
    many = len(baseline.cases) > MOST_CURVES
    chosen = baseline.cases[:LOWEST_OF_MANY] if many else baseline.cases
    return [
        PageOverlay(
            f"baseline: {case.name}" if case.name else "baseline",
            "baseline",
            baseline.frequency_hz,
            case.cmrr_db,
        )
        for case in chosen
    ]


def _measured_overlays(run: Run) -> list[PageOverlay]:
    band = (run.spec.frequency.start / (1 + 1e-9), run.spec.frequency.stop * (1 + 1e-9))
    found = []
    for one in run.spec.measurements:
        inside = (one.frequency_hz >= band[0]) & (one.frequency_hz <= band[1])
        if inside.any():
            name = f"measured: {one.name}"
            found.append(PageOverlay(name, "measured", one.frequency_hz[inside], one.cmrr_db[inside]))
    return found
