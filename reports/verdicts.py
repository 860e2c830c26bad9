"""Verdicts for reading: one line on the whole, a table, and a curve against its limit as text."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
from rich.console import Console
from rich.text import Text

from modepair.reports.axis_labels import AxisValues, axis_columns, case_texts, short_names, varying
from modepair.reports.judgement import FAIL, PASS, UNDECIDED
from modepair.reports.pairs import FloatArray
from modepair.reports.readings import frequency_text, gain_text
from modepair.reports.tables import MOST_ROWS, ROWS_OF_MANY, Column
from modepair.sweeps import render

__all__ = [
    "curve_text", "failing", "margin_text", "overall", "print_verdicts", "value_text", "verdict_columns",
    "verdict_line",
]  # fmt: skip

_CURVE_ROWS = 16
_PLOT_WIDTH = 40


def failing(verdicts: pd.DataFrame) -> pd.DataFrame:
    """Return the verdicts that are no pass: failed and undecided ones."""
    return verdicts[verdicts["verdict"].isin([FAIL, UNDECIDED])]


def margin_text(row: Mapping[Any, Any]) -> str:
    """Write a verdict's margin: ``-1.37 dB``, ``+0.12 %``, ``> +12.00 dB`` for a bound, ``none`` without one.

    Parameters
    ----------
    row : mapping
        A row of a table of verdicts.

    Returns
    -------
    str
        Signed, with two decimals and its unit.
    """
    for column, unit in (("margin_db", "dB"), ("margin_percent", "%")):
        margin = float(row[column])
        if not math.isnan(margin):
            # Never rounded up to a zero that looks like a pass.
            digits = 2 if abs(margin) >= 0.005 or margin == 0 else 4
            at_least = "> " if row["bound"] and row["quantity"] != "yield" else ""
            return f"{at_least}{margin:+.{digits}f} {unit}"
    return "none"


def value_text(value: float, unit: str) -> str:
    """Write a judged value or its limit with its unit; empty where there is none.

    Parameters
    ----------
    value : float
        In the unit.
    unit : str
        As in `modepair.reports.judgement.Margins.unit`.

    Returns
    -------
    str
        Such as ``87.63 dB`` or ``1.2 mV``.
    """
    if math.isnan(value):
        return ""
    if unit == "dB":
        return f"{value:.2f} dB"
    if unit == "share":
        return f"{100 * value:.2f} %"
    if unit == "V/V":
        return gain_text(value)
    if unit == "codes":
        return f"{codes_text(value)} codes"
    return render(value, unit, 4)


def codes_text(codes: float) -> str:
    """Write a number of converter codes: three digits, and no exponent where it is large.

    Parameters
    ----------
    codes : float
        Not negative.

    Returns
    -------
    str
        Such as ``0.866`` or ``45600``.
    """
    return f"{codes:.3g}" if codes < 1000 else f"{float(f'{codes:.3g}'):.0f}"


def _worst(verdicts: pd.DataFrame) -> pd.DataFrame:
    """Sort verdicts: failed simulations, then failures by margin, missing cases, undecided ones, passes."""
    without = pd.Series(np.where(verdicts["case"] > 0, -np.inf, 0.0), verdicts.index)
    margin = verdicts["margin_db"].fillna(verdicts["margin_percent"]).fillna(without)
    rank = verdicts["verdict"].map({FAIL: 0, UNDECIDED: 1, PASS: 2}).fillna(3)
    return verdicts.assign(_rank=rank, _margin=margin).sort_values(["_rank", "_margin"], kind="stable")


def verdict_line(row: Mapping[Any, Any], name: str = "") -> str:
    """Write one verdict in a line: ``case 4 (imbalance 10): cmrr: fail, margin -1.37 dB at 3 kHz``.

    Parameters
    ----------
    row : mapping
        A row of a table of verdicts.
    name : str
        What tells the case apart.

    Returns
    -------
    str
        Case, quantity, verdict, margin, frequency, value, limit and note.
    """
    who = f"case {row['case']}{f' ({name})' if name else ''}: " if row["case"] else ""
    margin = margin_text(row)
    at_hz = float(row["at_hz"])
    where = "" if math.isnan(at_hz) else f" at {frequency_text(at_hz, digits=4)}"
    by = "" if margin == "none" else f", margin {margin}{where}"
    value, limit = (value_text(float(row[key]), str(row["unit"])) for key in ("value", "limit"))
    against = f" ({value} against {limit})" if value and limit else ""
    note = f"; {row['note']}" if row["note"] else ""
    return f"{who}{row['quantity']}: {row['verdict']}{by}{against}{note}"


def overall(verdicts: pd.DataFrame, names: Mapping[int, str]) -> str:
    """Write the verdict on the whole in a line.

    Parameters
    ----------
    verdicts : DataFrame
        Table of verdicts, at least one row.
    names : mapping of int to str
        What tells each case apart.

    Returns
    -------
    str
        ``PASS`` or ``FAIL``, how many cases fail, and the smallest margin.
    """
    bad = failing(verdicts)
    missing = int((bad["case"] == 0).sum())
    cases = verdicts.loc[verdicts["case"] > 0, "case"].nunique()
    failed = bad.loc[bad["case"] > 0, "case"].nunique()
    gone = f"; {missing} case{'s are' if missing > 1 else ' is'} missing" if missing else ""
    worst = _worst(verdicts).iloc[0].to_dict()
    nearest = verdict_line(worst, names.get(int(worst["case"]), ""))
    if bad.empty:
        return f"PASS: {cases} of {cases} cases pass. Nearest to its limit: {nearest}"
    return f"FAIL: {failed} of {cases} cases {'fails' if failed == 1 else 'fail'}{gone}. Worst: {nearest}"


def verdict_columns(verdicts: pd.DataFrame, labels: Mapping[str, Sequence[str]]) -> list[Column]:
    """Write verdicts as columns of text.

    Parameters
    ----------
    verdicts : DataFrame
        Table of verdicts.
    labels : mapping of str to sequence of str
        Axis path to a text for each case, case 1 first; only the axes to show.

    Returns
    -------
    list of Column
        Case, axes, quantity, verdict, margin, frequency, value, limit, note.
    """
    rows = verdicts.to_dict("records")
    numbers = [int(row["case"]) for row in rows]
    names = short_names(list(labels))
    at = [float(row["at_hz"]) for row in rows]
    columns = [Column("case", [str(number or "–") for number in numbers])]
    for path, texts in labels.items():
        columns.append(Column(names[path], [texts[n - 1] if n else "" for n in numbers], "left"))
    return [
        *columns,
        Column("quantity", [str(row["quantity"]) for row in rows], "left"),
        Column("verdict", [str(row["verdict"]) for row in rows], "left"),
        Column("margin", [margin_text(row) for row in rows]),
        Column("at", ["" if math.isnan(hz) else frequency_text(hz, digits=4) for hz in at]),
        Column("value", [value_text(float(row["value"]), str(row["unit"])) for row in rows]),
        Column("limit", [value_text(float(row["limit"]), str(row["unit"])) for row in rows]),
        Column("note", [str(row["note"]) for row in rows], "left"),
    ]


def shown_verdicts(verdicts: pd.DataFrame) -> tuple[pd.DataFrame, str]:
    """Choose which verdicts a table shows: all, or of many the worst; and what to say about the others."""
    if len(verdicts) <= MOST_ROWS:
        return verdicts, ""
    worst = _worst(verdicts).head(ROWS_OF_MANY)
    rest = len(verdicts) - len(worst)
    return (
        worst,
        f"Shown: the {len(worst)} verdicts with the smallest margin; the other {rest} are in verdicts.csv.",
    )


def case_names(
    cases: pd.DataFrame, axes: Iterable[AxisValues]
) -> tuple[dict[str, list[str]], dict[int, str]]:
    """Return the texts of the axes that vary, by path, and what tells each case apart, by its number."""
    columns = axis_columns(cases.sort_values("case"), axes)
    texts = case_texts(columns) or [""] * len(cases)
    return varying(columns)[0], dict(enumerate(texts, 1))


def print_verdicts(
    console: Console,
    verdicts: pd.DataFrame,
    cases: pd.DataFrame,
    axes: Iterable[AxisValues],
    changes: Sequence[str] = (),
) -> None:
    """Print verdicts: the table, the verdict on the whole, and what else has changed since the baseline.

    Parameters
    ----------
    console : rich.console.Console
        Where to print.
    verdicts : DataFrame
        Table of verdicts.
    cases : DataFrame
        The content of cases.csv.
    axes : iterable of AxisValues
        The sweep's axes.
    changes : sequence of str
        As from `modepair.reports.baselines.Baseline.changes`.
    """
    labels, names = case_names(cases, axes)
    shown, note = shown_verdicts(verdicts)
    columns = [column for column in verdict_columns(shown, labels) if any(column.cells)]
    lines = [_row([column.header for column in columns], columns)]
    lines += [_row(cells, columns) for cells in zip(*(column.cells for column in columns), strict=True)]
    bad = [False, *shown["verdict"].isin([FAIL, UNDECIDED]).tolist()]
    for line, is_bad in zip(lines, bad, strict=True):
        console.print(Text(line, style="red" if is_bad else ""), soft_wrap=True)
    console.print()
    if note:
        console.print(note, markup=False, soft_wrap=True)
    console.print(Text(overall(verdicts, names), style="bold"), soft_wrap=True)
    if changes:
        console.print("Changed since the baseline was accepted:")
        for change in changes:
            console.print(f"  {change}", markup=False, soft_wrap=True)


def _row(cells: Sequence[str], columns: Sequence[Column]) -> str:
    padded = [
        cell.ljust(column.width) if column.justify == "left" else cell.rjust(column.width)
        for cell, column in zip(cells, columns, strict=True)
    ]
    return "  ".join(padded).rstrip()


def curve_text(
    frequency_hz: FloatArray,
    value: FloatArray,
    limit: FloatArray,
    *,
    names: tuple[str, str] = ("CMRR", "limit"),
    always_hz: Sequence[float] = (),
    decimals: int = 2,
) -> str:
    """Draw a curve against its limit in plain text, a line for each of a choice of frequencies.

    Parameters
    ----------
    frequency_hz, value, limit : ndarray, shape (k,)
        The curve and its limit, at least one point.
    names : tuple of str
        Headings of the two.
    always_hz : sequence of float
        Frequencies that must be among the lines; of the others some are left out.
    decimals : int
        Decimals of the numbers.

    Returns
    -------
    str
        Frequency, value, limit, difference, and a strip on which ``|`` is the limit, ``o`` a value that keeps
        it and ``X`` one that does not.
    """
    order = np.linspace(0, len(frequency_hz) - 1, min(_CURVE_ROWS, len(frequency_hz))).round().astype(int)
    always = [int(np.abs(np.log(frequency_hz / hz)).argmin()) for hz in always_hz]
    chosen = sorted({*order.tolist(), *always, int((value - limit).argmin())})
    low = min(float(value[chosen].min()), float(limit[chosen].min()))
    high = max(float(value[chosen].max()), float(limit[chosen].max()))
    scale = (_PLOT_WIDTH - 1) / (high - low) if high > low else 0.0
    lines = [f"{'frequency':>12} {names[0]:>10} {names[1]:>10} {'margin':>9}"]
    for index in chosen:
        strip = [" "] * _PLOT_WIDTH
        strip[round((float(limit[index]) - low) * scale)] = "|"
        strip[round((float(value[index]) - low) * scale)] = "o" if value[index] >= limit[index] else "X"
        lines.append(
            f"{frequency_text(float(frequency_hz[index]), digits=4):>12} {value[index]:>10.{decimals}f} "
            f"{limit[index]:>10.{decimals}f} {value[index] - limit[index]:>+9.{decimals}f}  "
            + "".join(strip).rstrip()
        )
    return "\n".join(lines)
