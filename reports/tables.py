"""The table of cases on the console: one row per case, figures right-aligned, bounds written as bounds."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal, TextIO

import pandas as pd
from rich.box import Box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from modepair.reports.axis_labels import AxisValues, axis_columns, short_names, varying
from modepair.reports.figures import spot_column, spot_text
from modepair.reports.readings import decibel_text, frequency_text, gain_text

PIPED_WIDTH = 200
"""Characters in a line where the output is not a terminal: enough for a dozen spots."""

MOST_ROWS = 60
"""Cases beyond which only the lowest are printed."""

ROWS_OF_MANY = 20
"""Cases printed when there are more than `MOST_ROWS`."""

_RULED_HEAD = Box("    \n    \n ── \n    \n    \n    \n    \n    \n")


@dataclass(frozen=True)
class Column:
    """A column of text cells with its header.

    Parameters
    ----------
    header : str
        Header, lines parted by newlines; the last line carries the unit.
    cells : list of str
        One cell per row.
    justify : {"left", "right"}
        Alignment of the cells and the header.
    """

    header: str
    cells: list[str]
    justify: Literal["left", "right"] = "right"

    @property
    def width(self) -> int:
        """Characters that the widest cell or header line needs."""
        return max(map(len, [*self.header.split("\n"), *self.cells]))


def figure_columns(
    cases: pd.DataFrame, spots_hz: Sequence[float], band_hz: tuple[float, float]
) -> list[Column]:
    """Write the figures of cases as columns of text, for the console and for Markdown alike.

    Parameters
    ----------
    cases : DataFrame
        Rows of finished cases, with the columns of `modepair.reports.figures`.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    band_hz : tuple of float
        Lowest and highest solved frequency in Hz.

    Returns
    -------
    list of Column
        Gain, lower corner where some case has one, bandwidth, CMRR at each spot, CMRR's corner, lowest CMRR and its
        frequency (in the header where it is one for all). What lies above the numerical floor reads ``> 240``; a
        bandwidth beyond the band ``> 1 MHz``; a corner of which only an upper bound is known ``< 2 kHz``, and
        ``unknown`` where the band holds no bound.
    """
    bounds = [set(text.split(", ")) if isinstance(text, str) else set() for text in cases["above_floor"]]
    beyond = f"> {frequency_text(band_hz[1])}"

    def levels(column: str, name: str) -> list[str]:
        return [decibel_text(x, name in bound) for x, bound in zip(cases[column], bounds, strict=True)]

    def corner(value_hz: float, bound: set[str]) -> str:
        if "corner" in bound:
            return "unknown" if pd.isna(value_hz) else f"< {_figure(value_hz)}"
        return beyond if pd.isna(value_hz) else _figure(value_hz)

    lowest_at = [frequency_text(x) for x in cases["cmrr_lowest_at_hz"]]
    one_place = len(set(lowest_at)) == 1
    columns = [
        Column("gain\nV/V", [gain_text(x) for x in cases["differential_gain"]]),
        *_lower_corners(cases),
        Column("band-\nwidth\n", [beyond if pd.isna(x) else _figure(x) for x in cases["bandwidth_hz"]]),
        *(Column(f"CMRR\n{spot_text(s)}\ndB", levels(spot_column(s), spot_text(s))) for s in spots_hz),
        Column(
            "CMRR\ncorner\n", [corner(x, b) for x, b in zip(cases["cmrr_corner_hz"], bounds, strict=True)]
        ),
        Column(
            f"lowest\nat {lowest_at[0]}\ndB" if one_place else "lowest\nCMRR\ndB",
            levels("cmrr_db_lowest", "lowest"),
        ),
    ]
    return columns if one_place else [*columns, Column("at\n", lowest_at)]


def _lower_corners(cases: pd.DataFrame) -> list[Column]:
    """The lower corner of the passband, where some case has one."""
    if "lower_corner_hz" not in cases or cases["lower_corner_hz"].isna().all():
        return []
    return [Column("lower\ncorner\n", ["–" if pd.isna(x) else _figure(x) for x in cases["lower_corner_hz"]])]


def _figure(frequency_hz: float) -> str:
    return frequency_text(frequency_hz, pad=True)


def lead_columns(cases: pd.DataFrame, axes: dict[str, list[str]]) -> list[Column]:
    """Write what tells cases apart, case number and axis values, as columns of text.

    Parameters
    ----------
    cases : DataFrame
        Rows with `case`.
    axes : dict of str to list of str
        Path of each axis to show, and its text in each row.

    Returns
    -------
    list of Column
        The leading columns of a table.
    """
    names = short_names(list(axes))
    numbers = [str(case) for case in cases["case"]]
    return [
        Column("case\n", numbers),
        *(Column(f"{names[path]}\n", texts, _justify(texts)) for path, texts in axes.items()),
    ]


def _justify(texts: Sequence[str]) -> Literal["left", "right"]:
    return "right" if all(text[:1].isdigit() or text[:1] in "+-.−" for text in texts) else "left"


def _groups(lead: Sequence[Column], rest: Sequence[Column], width: int) -> list[list[Column]]:
    """Share out the figure columns over as many tables as the width needs, each with the leading columns."""
    start = sum(min(column.width, _WIDEST_LEAD) + _GAP for column in lead)
    groups: list[list[Column]] = [[]]
    used = start
    for column in rest:
        if groups[-1] and used + column.width > width:
            groups.append([])
            used = start
        groups[-1].append(column)
        used += column.width + _GAP
    return groups


_GAP = 2
_WIDEST_LEAD = 28


def _table(lead: Sequence[Column], rest: Sequence[Column], failed: Sequence[bool]) -> Table:
    table = Table(
        box=_RULED_HEAD, show_edge=False, pad_edge=False, padding=(0, _GAP - 1, 0, 0), header_style="bold"
    )
    columns = [*lead, *rest]
    lines = max(column.header.count("\n") for column in columns)
    for index, column in enumerate(columns):
        header = "\n" * (lines - column.header.count("\n")) + column.header
        if index < len(lead):
            width = min(column.width, _WIDEST_LEAD)
            table.add_column(
                Text(header), justify=column.justify, overflow="fold", min_width=width, max_width=width
            )
        else:
            table.add_column(Text(header), justify=column.justify, no_wrap=True, min_width=column.width)
    for row, is_failed in enumerate(failed):
        table.add_row(*(Text(column.cells[row]) for column in columns), style="red" if is_failed else "")
    return table


def _with_failures(column: Column, done: Sequence[bool], text: str) -> Column:
    cells = iter(column.cells)
    return Column(column.header, [next(cells) if ok else text for ok in done], column.justify)


def console_for(file: TextIO) -> Console:
    """Make the console that tables are printed on.

    Parameters
    ----------
    file : text file
        Such as ``sys.stdout``. Where it is not a terminal, lines are `PIPED_WIDTH` long, without
        colour codes.

    Returns
    -------
    rich.console.Console
        The console; it never adds its own highlights.
    """
    if file.isatty():
        return Console(file=file, highlight=False)
    return Console(file=file, highlight=False, width=PIPED_WIDTH, force_terminal=False, color_system=None)


def print_columns(
    console: Console, lead: Sequence[Column], rest: Sequence[Column], failed: Sequence[bool] = ()
) -> None:
    """Print columns as a table; one wider than the console is split into several, never cut.

    Parameters
    ----------
    console : rich.console.Console
        Where to print.
    lead : sequence of Column
        Columns that stand in each of the tables.
    rest : sequence of Column
        Columns that are shared out; at least one.
    failed : sequence of bool, optional
        Rows to mark as failed.
    """
    marked = list(failed) or [False] * len(rest[0].cells)
    for index, group in enumerate(_groups(lead, rest, console.width)):
        if index:
            console.print()
        console.print(_table(lead, group, marked))


def print_cases(
    console: Console,
    cases: pd.DataFrame,
    axes: Iterable[AxisValues],
    spots_hz: Sequence[float],
    band_hz: tuple[float, float],
    where: str = "cases.csv",
) -> None:
    """Print the cases as a table, then the failed ones with their reasons, then what the marks mean.

    Parameters
    ----------
    console : rich.console.Console
        Where to print, as from `console_for`. A table wider than it is split into several, never cut.
    cases : DataFrame
        The content of cases.csv: ``case``, a column per axis, the figures, and ``state`` (``done`` or
        ``failed: reason``).
    axes : iterable of AxisValues
        The sweep's axes; those with one value in every case are named in a line, not shown as columns.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    band_hz : tuple of float
        Lowest and highest solved frequency in Hz.
    where : str
        Where the cases that are not shown can be read.
    """
    axis_list = list(axes)
    is_done = cases["state"] == "done"
    done = cases[is_done]
    many = len(cases) > MOST_ROWS
    shown = cases if not many else done.nsmallest(ROWS_OF_MANY, "cmrr_db_lowest") if len(done) else done
    vary, fixed = varying(axis_columns(cases, axis_list))
    labels = axis_columns(shown, axis_list)
    lead = lead_columns(shown, {path: labels[path] for path in vary})
    if len(done):
        shown_done = (shown["state"] == "done").tolist()
        figures = figure_columns(shown[shown["state"] == "done"], spots_hz, band_hz)
        rest = [
            _with_failures(column, shown_done, "–" if index else "failed")
            for index, column in enumerate(figures)
        ]
        print_columns(console, lead, rest, [not ok for ok in shown_done])
    console.print()
    for line in _notes(cases, vary, fixed, len(shown) if many else None, where):
        console.print(textwrap.fill(line, console.width, subsequent_indent="    "), markup=False)


def _notes(
    cases: pd.DataFrame, vary: dict[str, list[str]], fixed: dict[str, str], shown: int | None, where: str
) -> list[str]:
    notes = []
    done = cases[cases["state"] == "done"]
    if shown is not None and len(done) > shown:
        notes.append(
            f"Shown: the {shown} cases with the lowest CMRR, of {len(done)}; "
            f"the other {len(done) - shown} are in {where}."
        )
    if fixed:
        notes.append("In every case: " + ", ".join(f"{path} {text}" for path, text in fixed.items()) + ".")
    if any(isinstance(text, str) and text for text in done.get("above_floor", [])):
        notes.append("CMRR marked > lies above the numerical floor of the solve: a bound, not a result.")
    failed = cases[cases["state"] != "done"]
    if len(failed):
        notes.append(f"Failed: {len(failed)} of {len(cases)} cases.")
        for row in failed.index[:ROWS_OF_MANY]:
            place = cases.index.get_loc(row)
            values = ", ".join(f"{path} {texts[place]}" for path, texts in vary.items())
            reason = str(cases["state"].loc[row]).removeprefix("failed: ")
            notes.append(f"  case {cases['case'].loc[row]}{f' ({values})' if values else ''}: {reason}")
        if len(failed) > ROWS_OF_MANY:
            notes.append(f"  and {len(failed) - ROWS_OF_MANY} more, in {where}.")
    return notes
