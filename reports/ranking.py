"""The ranking for reading: who wins and what decides, as sentences; the table for console and Markdown."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from rich.console import Console

from modepair.reports.comparison import Comparison
from modepair.reports.figures import spot_column, spot_text
from modepair.reports.markdown import escape_markdown
from modepair.reports.readings import frequency_text, gain_text
from modepair.reports.tables import Column, print_columns
from modepair.sweeps.quantities import render

LITTLE_DB = 1.0
"""Candidates that lie no further apart than this in the deciding condition hardly differ there."""


@dataclass(frozen=True)
class Finding:
    """What a comparison came to, in plain sentences.

    Parameters
    ----------
    headline : str
        Who wins, by how much, where.
    met : bool or None
        Whether the winner meets the mask; None where there is none, or nothing could be ranked.
    reasons : tuple of str
        What limits it, and what its choice is worth.
    terms : tuple of str
        How it was ranked, and what counts as a difference.
    """

    headline: str
    met: bool | None
    reasons: tuple[str, ...]
    terms: tuple[str, ...]


def level_text(level_db: float, signed: bool) -> str:
    """Write a score in dB: ``+3.2``, or ``93.2`` where it is no margin; a small failure keeps its sign."""
    if math.isnan(level_db):
        return "–"
    digits = 1 if abs(level_db) >= 0.05 or level_db == 0 else 3
    return f"{level_db:+.{digits}f}" if signed else f"{level_db:.{digits}f}"


def finding(comparison: Comparison) -> Finding:
    """Say who wins, what decides, and what that rests on.

    Parameters
    ----------
    comparison : Comparison
        Candidates in their order.

    Returns
    -------
    Finding
        Plain text, not escaped.
    """
    terms = _terms(comparison)
    winners = comparison.winners
    if winners.empty:
        return Finding("No candidate can be ranked: see the remarks in the table.", None, (), terms)
    first = winners.iloc[0]
    score = float(first[comparison.target.column])
    at = _place(first)
    names = _listed(winners["candidate"].tolist())
    several = len(winners) > 1
    levels = winners[comparison.target.column]
    most = _level_range(float(levels.min()), float(levels.max()))
    short = _level_range(-float(levels.max()), -float(levels.min()))
    alone = len(comparison.table) == 1
    met: bool | None = None
    if comparison.target.mask:
        met = score >= 0
        if comparison.by_yield:
            least = 100 * float(first["yield"])
            headline = f"{names} {'have' if several else 'has'} the best yield: {least:.1f} % of boards keep the mask"
            headline += f" in the worst condition{_with(first)}."
        elif met:
            verb = "meets the mask" if alone else "win" if several else "wins"
            headline = f"{names} {verb}: {most} dB above the mask at worst, {at}."
        elif alone:
            headline = f"{names} fails the mask by {short} dB, {at}."
        else:
            near = "come" if several else "comes"
            headline = f"No candidate meets the mask. {names} {near} nearest: {short} dB short, {at}."
    else:
        verb = "keep" if several else "keeps"
        than = "" if alone else " the most:"
        headline = f"{names} {verb}{than} {most} dB of CMRR at worst, {at}."
    return Finding(headline, met, tuple(_reasons(comparison, first, several)), terms)


def _level_range(low_db: float, high_db: float) -> str:
    low, high = level_text(low_db, False), level_text(high_db, False)
    return low if low == high else f"{low} to {high}"


def _with(row: pd.Series) -> str:
    return f" ({row['decided_by']})" if row["decided_by"] else ""


def _place(row: pd.Series) -> str:
    at = f"at {frequency_text(float(row['decided_at_hz']))}"
    return f"{at} with {row['decided_by']}" if row["decided_by"] else at


def _listed(names: Sequence[str]) -> str:
    shown = list(names) if len(names) <= 4 else [*names[:3], f"{len(names) - 3} more"]
    return " and ".join([", ".join(shown[:-1]), shown[-1]]) if len(shown) > 1 else shown[0]


def _reasons(comparison: Comparison, first: pd.Series, several: bool) -> list[str]:
    found = []
    if several:
        found.append(
            f"These {len(comparison.winners)} cannot be told apart: their figures differ by no more than "
            f"{comparison.accuracy_db:.2g} dB."
            if not comparison.by_yield
            else f"These {len(comparison.winners)} cannot be told apart: their yields' intervals overlap."
        )
    if len(comparison.there_db) > 1 and not comparison.by_yield:
        found.append(_worth(comparison.there_db))
    slope = float(first["slope_db_per_decade"])
    if not math.isnan(slope):
        if abs(slope) < 3:
            found.append(
                "CMRR is flat there: a mismatch of resistors, or an op-amp's CMRR at dc, limits it rather than a "
                "capacitance or a bandwidth."
            )
        elif slope < 0:
            found.append(
                f"CMRR falls by {-slope:.0f} dB a decade there: a capacitance, an op-amp's bandwidth or its CMRR "
                "corner limits it rather than resistors."
            )
        else:
            found.append(f"CMRR rises by {slope:.0f} dB a decade there: errors cancel at a higher frequency.")
    cost = float(first["best_score_db"]) - float(first[comparison.target.column])
    if comparison.conditions > 1 and cost > comparison.accuracy_db and first["decided_by"]:
        found.append(
            f"{first['decided_by'][0].upper()}{first['decided_by'][1:]} costs {first['candidate']} {cost:.1f} dB "
            "against its best condition."
        )
    return found


def _worth(there_db: Mapping[str, float]) -> str:
    """Say what the choice of a candidate is worth in the deciding condition."""
    best = max(there_db.values())
    near = {name: level for name, level in there_db.items() if best - level <= LITTLE_DB}
    behind = sorted((level, name) for name, level in there_db.items() if name not in near)
    within = max(best - min(near.values()), 0.01)
    shared = "the source and the parts around them, which they have in common, set the limit"
    if not behind:
        return (
            f"In that condition all {len(near)} candidates lie within {within:.2g} dB of one another, so the choice "
            f"hardly matters: {shared}."
        )
    names = _listed([name for _, name in behind])
    falls = f"{names} {'falls' if len(behind) == 1 else 'fall'} behind by {best - behind[-1][0]:.1f}"
    falls += f" to {best - behind[0][0]:.1f} dB" if len(behind) > 1 else " dB"
    if len(near) == 1:
        return f"The choice matters: in that condition {falls}."
    return (
        f"In that condition {len(near)} of {len(there_db)} candidates lie within {within:.2g} dB of one another, so "
        f"the choice among them hardly matters: {shared}; {falls}."
    )


def _terms(comparison: Comparison) -> tuple[str, ...]:
    low, high = comparison.target.band_hz
    if comparison.by_yield:
        rule = "Ranked by yield, the share of drawn boards that keep the mask"
    elif comparison.target.mask:
        rule = "Ranked by the smallest margin to the mask at any solved frequency"
    else:
        rule = f"No mask is given: ranked by the lowest CMRR from {frequency_text(low)} to {frequency_text(high)}"
        rule += ", the band of the spots" if low < high else ""
    worst = f", in the worst of {comparison.conditions} conditions" if comparison.conditions > 1 else ""
    if comparison.by_yield:
        accuracy = "Candidates whose 95 % intervals overlap that of the first of their rank share its rank."
    else:
        solve = comparison.ranked["accuracy_db"].max() if len(comparison.ranked) else float("nan")
        good = "" if math.isnan(solve) else f" (the solve itself is good to {solve:.2g} dB there)"
        accuracy = (
            f"Candidates within {comparison.accuracy_db:.2g} dB of the first of their rank share it{good}. "
            "Real parts differ from their data sheets by more."
        )
    return (f"{rule}{worst}.", accuracy)


def ranking_columns(comparison: Comparison, spots_hz: Sequence[float]) -> tuple[list[Column], list[Column]]:
    """Write a comparison as columns of text.

    Parameters
    ----------
    comparison : Comparison
        Candidates in their order.
    spots_hz : sequence of float
        Spot frequencies in Hz; those without a figure are left out.

    Returns
    -------
    lead : list of Column
        Rank and candidate.
    rest : list of Column
        Score, what decides it, the worst figures over the conditions.
    """
    table = comparison.table
    ranks = table["rank"].tolist()
    shared = [ranks.count(rank) > 1 for rank in ranks]
    marks = [
        "–" if math.isnan(rank) else f"{rank:.0f}{' =' if both else ''}"
        for rank, both in zip(ranks, shared, strict=True)
    ]
    lead = [Column("rank\n", marks, "left"), Column("candidate\n", table["candidate"].tolist(), "left")]
    signed = comparison.target.mask is not None
    scores = [
        f"> {level_text(value, signed)}" if "floor" in remark else level_text(value, signed)
        for value, remark in zip(table[comparison.target.column], table["remark"], strict=True)
    ]
    rest = []
    if comparison.by_yield:
        rest.append(Column("yield\n%", [_share(row) for _, row in table.iterrows()]))
    rest.append(Column("smallest\nmargin\ndB" if signed else "lowest\nCMRR\ndB", scores))
    if "decided_at_hz" in table:
        rest.append(Column("at\n", [_or_none(value, frequency_text) for value in table["decided_at_hz"]]))
        if comparison.conditions > 1:
            rest.append(Column("with\n", [_text(value) for value in table["decided_by"]], "left"))
    for spot in spots_hz:
        column = spot_column(spot)
        if column in table:
            bounds = table[f"{column}_is_bound"].fillna(False)
            cells = [
                "–" if math.isnan(value) else f"> {math.floor(value + 0.05)}" if bound else f"{value:.1f}"
                for value, bound in zip(table[column], bounds, strict=True)
            ]
            rest.append(Column(f"CMRR\n{spot_text(spot)}\ndB", cells))
    if "gain_error" in table:
        rest.append(
            Column("gain\nerror\n%", [_or_none(v, lambda x: f"{100 * x:+.3f}") for v in table["gain_error"]])
        )
    elif "gain" in table:
        rest.append(Column("gain\nV/V", [_or_none(v, gain_text) for v in table["gain"]]))
    if "bandwidth_hz" in table:
        rest.append(
            Column("band-\nwidth\n", [_or_none(v, frequency_text, "beyond") for v in table["bandwidth_hz"]])
        )
    for side in ("input", "output"):
        if f"worst_{side}_error_v" in table:
            cells = [_or_none(v, lambda x: render(x, "V", digits=3)) for v in table[f"worst_{side}_error_v"]]
            rest.append(Column(f"{side}\nerror\nrms", cells))
    if "unit_price" in table and table["unit_price"].notna().any():
        rest.append(Column("unit\nprice\n", [_or_none(v, lambda x: f"{x:.2f}") for v in table["unit_price"]]))
    return lead, rest


def _share(row: pd.Series) -> str:
    share = float(row["yield"]) if "yield" in row else math.nan
    if math.isnan(share):
        return "–"
    return f"{100 * share:.1f} ({100 * row['yield_low']:.1f} to {100 * row['yield_high']:.1f})"


def _text(value: object) -> str:
    return value if isinstance(value, str) else "–"


def _or_none(value: float, write: Callable[[float], str], none: str = "–") -> str:
    return none if value is None or math.isnan(value) else write(value)


def remarks(comparison: Comparison) -> list[str]:
    """Give what is to be said about single candidates: why one has no rank, and notes from the spec."""
    found = [
        f"{row['candidate']}: {row['remark']}."
        for _, row in comparison.table[comparison.table["remark"] != ""].iterrows()
    ]
    if "note" in comparison.table:
        for _, row in comparison.table.iterrows():
            if isinstance(row["note"], str) and row["note"]:
                found.append(f"{row['candidate']}: {row['note']}")
    return found


def print_ranking(
    console: Console, comparison: Comparison, spots_hz: Sequence[float], title: str = ""
) -> None:
    """Print who wins, the table, and what it rests on.

    Parameters
    ----------
    console : rich.console.Console
        Where to print, as from `modepair.reports.tables.console_for`.
    comparison : Comparison
        Candidates in their order.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    title : str
        Printed above.
    """
    said = finding(comparison)

    def paragraph(text: str, indent: str = "") -> None:
        filled = textwrap.fill(text, min(console.width, 110), subsequent_indent=indent)
        console.print(filled, markup=False, highlight=False)

    if title:
        paragraph(title)
        console.print()
    paragraph(said.headline)
    for reason in said.reasons:
        paragraph(f"- {reason}", "  ")
    console.print()
    lead, rest = ranking_columns(comparison, spots_hz)
    print_columns(console, lead, rest)
    console.print()
    if comparison.conditions > 1:
        paragraph("Figures are the worst over the conditions, each by itself.")
    for text in (*said.terms, *remarks(comparison)):
        paragraph(text, "    ")


def ranking_markdown(comparison: Comparison, spots_hz: Sequence[float], title: str = "") -> str:
    """Write a comparison as a page of Markdown.

    Parameters
    ----------
    comparison : Comparison
        Candidates in their order.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    title : str
        Its heading.

    Returns
    -------
    str
        Markdown, every text of the spec escaped, ending in a newline.
    """
    said = finding(comparison)
    lead, rest = ranking_columns(comparison, spots_hz)
    columns = [*lead, *rest]
    header = [escape_markdown(" ".join(c.header.replace("-\n", "").split("\n")).strip()) for c in columns]
    rules = [":---" if column.justify == "left" else "---:" for column in columns]
    rows = [[escape_markdown(cell) for cell in row] for row in zip(*(c.cells for c in columns), strict=True)]
    lines = [
        f"# {escape_markdown(title or 'Candidates compared')}",
        "",
        f"**{escape_markdown(said.headline)}**",
        "",
    ]
    lines += [f"- {escape_markdown(reason)}" for reason in said.reasons]
    lines += ["", *(f"| {' | '.join(cells)} |" for cells in (header, rules, *rows)), ""]
    if comparison.conditions > 1:
        lines += ["Figures are the worst over the conditions, each by itself.", ""]
    for text in (*said.terms, *remarks(comparison)):
        lines += [escape_markdown(text), ""]
    return "\n".join(lines).rstrip("\n") + "\n"


def ranking_csv(comparison: Comparison) -> pd.DataFrame:
    """Give the table for `comparison.csv`: a row per candidate, SI numbers.

    Parameters
    ----------
    comparison : Comparison
        Candidates in their order.

    Returns
    -------
    DataFrame
        ``rank`` is empty where a candidate has none.
    """
    table = comparison.table.copy()
    table["rank"] = table["rank"].astype("Int64")
    table["accuracy_db"] = np.round(table["accuracy_db"], 6) if "accuracy_db" in table else np.nan
    return table
