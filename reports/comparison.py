"""Candidates compared: ranked by what they keep in their worst condition, and what decides each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from modepair.reports.figures import spot_indices, spot_text
from modepair.reports.judgement import nearest
from modepair.reports.pairs import FLOOR_VOLTS, FloatArray, ModePair
from modepair.sweeps.limits import Mask

SOLVE_ACCURACY_DB = 0.002
"""How far a solved CMRR may be off where round-off does not matter: ngspice against two independent solutions
on random stages differs by less."""

READING_DB = 0.1
"""Least difference that ranks one candidate before another: what the tables show."""


@dataclass(frozen=True)
class Target:
    """What candidates are ranked by.

    Parameters
    ----------
    band_hz : tuple of float
        Lowest and highest frequency that count, Hz.
    mask : Mask, optional
        The mask; where there is none, the lowest CMRR over the band counts.
    """

    band_hz: tuple[float, float]
    mask: Mask | None = None

    @property
    def column(self) -> str:
        """Name of the figure in tables: ``margin_db`` or ``cmrr_db_lowest_in_band``."""
        return "margin_db" if self.mask else "cmrr_db_lowest_in_band"


def band_of(spots_hz: Sequence[float], solved_hz: tuple[float, float]) -> tuple[float, float]:
    """Give the band that counts where there is no mask.

    Parameters
    ----------
    spots_hz : sequence of float
        Spot frequencies in Hz.
    solved_hz : tuple of float
        Lowest and highest solved frequency in Hz.

    Returns
    -------
    tuple of float
        From the lowest to the highest spot; the solved band where there is no spot.
    """
    return (min(spots_hz), max(spots_hz)) if spots_hz else solved_hz


def scores(pair: ModePair, target: Target) -> pd.DataFrame:
    """Score curves by their smallest margin, or their lowest CMRR.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F).
    target : Target
        What counts.

    Returns
    -------
    DataFrame
        One row per curve: ``score_db``; ``score_at_hz``, the first frequency that has it; ``score_is_bound``,
        where the score touches the numerical floor, so that it is only known to be no lower; ``accuracy_db``,
        how far the solve may be off there: 0.002 dB, and the floor's volts against the common-mode output's;
        ``slope_db``, by how much CMRR changes per decade there.

    Raises
    ------
    ValueError
        Where no solved frequency counts, or a corner of the mask was not solved.
    """
    frequency_hz = pair.frequency_hz
    if target.mask:
        spot_indices(frequency_hz, target.mask.frequency_hz.tolist())
        asked_db = target.mask.at(frequency_hz)
    else:
        near = 1 + 1e-9
        low, high = target.band_hz
        counts = (frequency_hz >= low / near) & (frequency_hz <= high * near)
        asked_db = np.where(counts, 0.0, np.nan)
    chosen = np.flatnonzero(np.isfinite(asked_db))
    if not chosen.size:
        raise ValueError("no solved frequency lies in the band that candidates are compared over")
    level_db = pair.cmrr_db[:, chosen] - asked_db[chosen]
    at_floor = pair.above_floor[:, chosen]
    rows = np.arange(len(level_db))
    lowest = nearest(level_db, at_floor)
    # A bound that lies no lower than the lowest certain value, but for the accuracy, decides nothing.
    certain = np.where(at_floor, np.inf, level_db)
    close = certain.min(axis=1) <= level_db[rows, lowest] + SOLVE_ACCURACY_DB
    lowest = np.where(close, certain.argmin(axis=1), lowest)
    common = np.abs(pair.common_gain)[rows, chosen[lowest]]
    accuracy_db = SOLVE_ACCURACY_DB + 20 * np.log10(1 + FLOOR_VOLTS / np.maximum(common, FLOOR_VOLTS))
    return pd.DataFrame(
        {
            "score_db": level_db[rows, lowest],
            "score_at_hz": frequency_hz[chosen[lowest]],
            "score_is_bound": at_floor[rows, lowest],
            "accuracy_db": accuracy_db,
            "slope_db": _slope(pair, chosen[lowest]),
        }
    )


def _slope(pair: ModePair, place: np.ndarray) -> FloatArray:
    """Change of CMRR per decade at a place of each curve, dB, over its neighbours; NaN for one frequency."""
    count = pair.frequency_hz.size
    if count == 1:
        return np.full(len(place), np.nan)
    rows = np.arange(len(place))
    before, after = np.maximum(place - 2, 0), np.minimum(place + 2, count - 1)
    decades = np.log10(pair.frequency_hz[after] / pair.frequency_hz[before])
    change: FloatArray = (pair.cmrr_db[rows, after] - pair.cmrr_db[rows, before]) / decades
    return change


@dataclass(frozen=True)
class Comparison:
    """Candidates in their order.

    Parameters
    ----------
    table : DataFrame
        One row per candidate, the best first, those that cannot be ranked last; see `compare`.
    target : Target
        What they are ranked by.
    accuracy_db : float
        Least difference that ranks one before another, dB.
    conditions : int
        Conditions that each was simulated in.
    by_yield : bool
        Whether they are ranked by yield.
    there_db : dict of str to float
        Score of every ranked candidate in the condition that decides the winner, dB.
    """

    table: pd.DataFrame
    target: Target
    accuracy_db: float
    conditions: int
    by_yield: bool = False
    there_db: dict[str, float] = field(default_factory=dict)

    @property
    def ranked(self) -> pd.DataFrame:
        """The candidates that have a rank."""
        return self.table[self.table["rank"].notna()]

    @property
    def winners(self) -> pd.DataFrame:
        """The candidates of rank 1."""
        return self.table[self.table["rank"] == 1]


def compare(cases: pd.DataFrame, target: Target, accuracy_db: float = READING_DB) -> Comparison:
    """Rank candidates by their worst case.

    Parameters
    ----------
    cases : DataFrame
        One row per case: ``candidate`` and ``condition`` as text, ``run``, ``case``, ``state``, the figures,
        and the columns of `scores`; also ``gain_error`` (a fraction), ``yield``, ``yield_low``,
        ``yield_high``, ``worst_input_error_v``, ``worst_output_error_v``, ``note`` and ``unit_price`` where there are.
    target : Target
        What counts.
    accuracy_db : float
        Least difference that ranks one before another; where the solve is less accurate, that counts instead.

    Returns
    -------
    Comparison
        Its table has, per candidate: ``rank`` (the same for candidates that cannot be told apart from the
        first of their rank; NaN: not ranked), ``candidate``, the score, ``decided_by`` (the condition that it
        has the score in) with ``decided_at_hz``, ``decided_in_case``, the worst figures over the conditions,
        and ``remark``.

        A candidate with a failed case, or whose score is a bound, has no rank: a bound is no result.

    Raises
    ------
    ValueError
        Where there is no case.
    """
    if cases.empty:
        raise ValueError("there is no case to compare")
    by_yield = "yield" in cases and bool(cases["yield"].notna().any())
    rows = [_worst(str(name), group, by_yield) for name, group in cases.groupby("candidate", sort=False)]
    table = pd.DataFrame(rows)
    best = "yield" if by_yield else "score_db"
    ranked = table[table["remark"] == ""].sort_values(
        [best, "score_db"] if by_yield else best, ascending=False, kind="stable"
    )
    table = pd.concat([ranked, table[table["remark"] != ""]], ignore_index=True)
    used_db = max(accuracy_db, 2 * float(ranked["accuracy_db"].max())) if len(ranked) else accuracy_db
    table.insert(0, "rank", _ranks(ranked, used_db, by_yield) + [np.nan] * (len(table) - len(ranked)))
    table = table.rename(columns={"score_db": target.column})
    conditions = int(cases.groupby("candidate")["condition"].nunique().max())
    there = _there(cases, table) if len(ranked) else {}
    return Comparison(table, target, used_db, conditions, by_yield, there)


def _there(cases: pd.DataFrame, table: pd.DataFrame) -> dict[str, float]:
    """Score of the ranked candidates in the winner's deciding condition, dB."""
    ranked = table.loc[table["rank"].notna(), "candidate"]
    there = cases[
        (cases["condition"] == table["decided_by"].iloc[0])
        & cases["candidate"].isin(ranked)
        & (cases["state"] == "done")
    ]
    lowest = there.groupby("candidate")["score_db"].min()
    return {str(name): float(level) for name, level in lowest.items()}


def _worst(name: str, group: pd.DataFrame, by_yield: bool) -> dict[str, object]:
    """One candidate's row: its worst case, and its worst figures."""
    done = group[group["state"] == "done"]
    failed = len(group) - len(done)
    row: dict[str, object] = {"candidate": name}
    if done.empty:
        return {**row, "score_db": np.nan, "remark": f"not ranked: all {failed} cases failed"}
    order = ["yield", "score_db"] if by_yield else ["score_db"]
    worst = done.sort_values(order, kind="stable").iloc[0]
    if by_yield:
        for column in ("yield", "yield_low", "yield_high"):
            row[column] = float(worst[column]) if column in done else np.nan
    row |= {
        "score_db": float(worst["score_db"]),
        "decided_by": str(worst["condition"]),
        "decided_at_hz": float(worst["score_at_hz"]),
        "decided_in_case": int(worst["case"]),
        "run": str(worst.get("run", "")),
        "slope_db_per_decade": float(worst["slope_db"]),
        "best_score_db": float(done["score_db"].max()),
        "accuracy_db": float(worst["accuracy_db"]),
    }
    bounds = [set(str(text).split(", ")) for text in done.get("above_floor", [""] * len(done))]
    for column in [name for name in done.columns.tolist() if name.startswith("cmrr_db_at_")]:
        place = int(np.argmin(done[column].to_numpy()))
        row[column] = float(done[column].iloc[place])
        row[f"{column}_is_bound"] = _is_bound(column, bounds[place])
    row["gain"] = float(done["differential_gain"].iloc[0])
    if "gain_error" in done and done["gain_error"].notna().any():
        row["gain_error"] = float(done["gain_error"].iloc[int(done["gain_error"].abs().argmax())])
    row["bandwidth_hz"] = float(done["bandwidth_hz"].min())
    for column in ("worst_input_error_v", "worst_output_error_v"):
        if column in done and done[column].notna().any():
            row[column] = float(done[column].max())
    for column in ("note", "unit_price"):
        if column in done:
            row[column] = done[column].iloc[0]
    remark = ""
    if failed:
        remark = f"not ranked: {failed} of {len(group)} cases failed"
    elif bool(worst["score_is_bound"]):
        remark = "not ranked: its score lies above the numerical floor, a bound and no result"
    return {**row, "remark": remark}


def _is_bound(column: str, names: set[str]) -> bool:
    return spot_text(float(column.removeprefix("cmrr_db_at_").removesuffix("hz"))) in names


def _ranks(ranked: pd.DataFrame, accuracy_db: float, by_yield: bool) -> list[float]:
    """Rank sorted candidates; those that cannot be told from the first of a rank share it."""
    ranks: list[float] = []
    first: pd.Series | None = None
    for place, (_, row) in enumerate(ranked.iterrows(), start=1):
        if first is not None and _alike(first, row, accuracy_db, by_yield):
            ranks.append(ranks[-1])
        else:
            ranks.append(float(place))
            first = row
    return ranks


def _alike(first: pd.Series, row: pd.Series, accuracy_db: float, by_yield: bool) -> bool:
    if by_yield:
        if np.isfinite(row["yield_high"]) and np.isfinite(first["yield_low"]):
            return bool(row["yield_high"] >= first["yield_low"])
        return bool(row["yield"] == first["yield"])
    return bool(first["score_db"] - row["score_db"] <= accuracy_db)
