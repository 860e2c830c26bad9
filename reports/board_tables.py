"""Tables of boards on the console: what the draws came to, the worst case three ways, the error budget."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import pandas as pd
from rich.console import Console

from modepair.reports.axis_labels import AxisValues, axis_columns, varying
from modepair.reports.figures import spot_column, spot_text
from modepair.reports.markdown import escape_markdown, markdown_table
from modepair.reports.readings import decibel_text
from modepair.reports.tables import MOST_ROWS, Column, lead_columns, print_columns

__all__ = [
    "board_columns",
    "boards_section",
    "budget_columns",
    "percent_text",
    "print_boards",
    "print_budget",
    "worst_case_columns",
    "worst_case_section",
]

MOST_UNTOLD = 0.1
"""Share of the solved error that a budget may miss without a word on it."""

UNTOLD = (
    "an own circuit's parts that are unlike by design, which the tool cannot know, or tolerances so wide that they do "
    "not add"
)

LEAST_SHARE = 5e-4
"""Contributions of a smaller share are not printed."""

MOST_CAUSES = 12


def _decibels(values: pd.Series[float], floor_db: pd.Series[float] | None = None) -> list[str]:
    """Levels as text; those at the floor as a bound."""
    floors = [float("inf")] * len(values) if floor_db is None else floor_db.tolist()
    return [
        "–" if pd.isna(value) else decibel_text(float(value), float(value) >= floor)
        for value, floor in zip(values, floors, strict=True)
    ]


def board_columns(cases: pd.DataFrame, spots_hz: Sequence[float]) -> list[Column]:
    """Write what the draws came to as columns of text.

    Parameters
    ----------
    cases : DataFrame
        Rows of cases.csv with the draws' figures.
    spots_hz : sequence of float
        Spot frequencies in Hz.

    Returns
    -------
    list of Column
        For each spot the CMRR that 99 % of the boards reach; the gain's spread; the worst board; yield with its
        interval, where there is a mask.
    """
    columns = []
    for spot in spots_hz:
        at = spot_column(spot).removeprefix("cmrr_db_")
        columns.append(Column(f"CMRR\n{spot_text(spot)}\ndB", _decibels(cases[f"cmrr_db_p1_{at}"])))
    spread = (
        50 * (cases["differential_gain_p99"] - cases["differential_gain_p1"]) / cases["differential_gain"]
    )
    columns.append(
        Column("gain\n98 % in\n± %", ["–" if pd.isna(value) else f"{value:.3g}" for value in spread])
    )
    columns.append(Column("worst\nboard\n", ["–" if pd.isna(d) else f"{d:.0f}" for d in cases["worst_draw"]]))
    if "yield" in cases:
        columns.append(Column("yield\n\n%", [percent_text(value) for value in cases["yield"]]))
        both = zip(cases["yield_low"], cases["yield_high"], strict=True)
        columns.append(
            Column("95 %\nsure of\n%", [f"{percent_text(low)} to {percent_text(high)}" for low, high in both])
        )
    return columns


def percent_text(share: float) -> str:
    """Write a share in per cent, never rounded up to 100 or down to 0.

    Parameters
    ----------
    share : float
        From 0 to 1.

    Returns
    -------
    str
        Per cent with as many decimals as that needs, two at least.
    """
    percent = 100 * share
    for digits in range(2, 6):
        text = f"{percent:.{digits}f}"
        if share in (0.0, 1.0) or 0 < float(text) < 100:
            return text
    return text


def worst_case_columns(worst: pd.DataFrame) -> list[Column]:
    """Write the worst case, the trade's three ways side by side, as columns of text.

    Parameters
    ----------
    worst : DataFrame
        As `modepair.runner.worst_case.worst_case_table` makes it.

    Returns
    -------
    list of Column
        Spot, nominal, extreme value, root-sum-square, and of the draws the 1 % board and the lowest.
    """
    floor_db = worst.get("floor_db")
    columns = [
        Column("spot\n", [spot_text(float(f)) for f in worst["frequency_hz"]]),
        Column("nominal\ndB", _decibels(worst["nominal_db"], floor_db)),
        Column("extreme value\ndB", _decibels(worst["extreme_value_db"], floor_db)),
        Column("root-sum-square\ndB", _decibels(worst["root_sum_square_db"], floor_db)),
    ]
    if worst["drawn_lowest_db"].notna().any():
        columns.append(Column("99 % of draws\ndB", _decibels(worst["drawn_p1_db"])))
        columns.append(Column("all draws\ndB", _decibels(worst["drawn_lowest_db"])))
    return columns


def budget_columns(budget: pd.DataFrame) -> list[Column]:
    """Write the error budget of one case at one spot as columns of text.

    Parameters
    ----------
    budget : DataFrame
        As `modepair.runner.worst_case.budget_table` makes it.

    Returns
    -------
    list of Column
        Cause, whether its sign is open, its contribution, CMRR of it alone and of the circuit without it.
    """
    rho = budget["rho_re"] + 1j * budget["rho_im"]
    floor_db = budget.get("floor_db")
    return [
        Column("cause\n", budget["cause"].tolist(), "left"),
        Column("from\n", budget["kind"].tolist(), "left"),
        Column("real\nµV/V", [_micro(value.real, abs(value)) for value in rho]),
        Column("imaginary\nµV/V", [_micro(value.imag, abs(value)) for value in rho]),
        Column("share\n%", [f"{100 * value:.1f}" for value in budget["share"]]),
        Column("alone\ndB", _decibels(budget["alone_db"], floor_db)),
        Column("without it\ndB", _decibels(budget["without_db"], floor_db)),
        Column("as summed\ndB", _decibels(budget["without_summed_db"], floor_db)),
    ]


def _micro(component: float, size: float) -> str:
    """A component of a phasor, nothing where it is lost beside the other."""
    return f"{1e6 * component:+.4g}" if abs(component) > 1e-4 * size else "0"


def boards_section(
    cases: pd.DataFrame, axes: Iterable[AxisValues], spots_hz: Sequence[float], claim: str
) -> str:
    """Write what the draws came to, for the summary page.

    Parameters
    ----------
    cases, axes, spots_hz, claim
        As for `print_boards`.

    Returns
    -------
    str
        Markdown.
    """
    drawn = cases[cases["draws"] > 0].head(MOST_ROWS)
    columns = [*_lead(cases, drawn, list(axes)), *board_columns(drawn, spots_hz)]
    return f"{_boards_heading(drawn)}\n\n{markdown_table(columns)}\n\n{escape_markdown(claim)}"


def worst_case_section(worst: pd.DataFrame, labels: Mapping[int, str]) -> str:
    """Write the worst case of every case, for the summary page.

    Parameters
    ----------
    worst : DataFrame
        As `modepair.runner.worst_case.worst_case_table` makes it.
    labels : mapping of int to str
        For each case number what tells it apart.

    Returns
    -------
    str
        Markdown.
    """
    cases = Column("case", [str(number) for number in worst["case"]])
    names = Column("", [labels[number].partition(": ")[2] for number in worst["case"]], "left")
    lead = [cases, names] if any(names.cells) else [cases]
    return markdown_table([*lead, *worst_case_columns(worst)])


def _boards_heading(drawn: pd.DataFrame) -> str:
    return f"CMRR that 99 % of {int(drawn['draws'].max())} boards reach (half of them, and all: cases.csv)."


def _lead(cases: pd.DataFrame, shown: pd.DataFrame, axes: Sequence[AxisValues]) -> list[Column]:
    vary, _ = varying(axis_columns(cases, axes))
    labels = axis_columns(shown, axes)
    return lead_columns(shown, {path: labels[path] for path in vary})


def print_boards(
    console: Console, cases: pd.DataFrame, axes: Iterable[AxisValues], spots_hz: Sequence[float], claim: str
) -> None:
    """Print what the draws of each case came to.

    Parameters
    ----------
    console : rich.console.Console
        Where to print.
    cases : DataFrame
        The content of cases.csv.
    axes : iterable of AxisValues
        The sweep's axes.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    claim : str
        What so many draws can claim, in words.
    """
    drawn = cases[cases["draws"] > 0]
    if drawn.empty:
        return
    shown = drawn.head(MOST_ROWS)
    console.print(f"\n{_boards_heading(drawn)}\n", markup=False)
    print_columns(console, _lead(cases, shown, list(axes)), board_columns(shown, spots_hz))
    if len(drawn) > len(shown):
        console.print(f"Shown: the first {len(shown)} cases of {len(drawn)}; all are in cases.csv.")
    console.print(f"\n{claim}", markup=False)


def print_budget(console: Console, budget: pd.DataFrame, worst: pd.DataFrame, label: str) -> None:
    """Print the error budget of one case, spot by spot, and with tolerances its worst case.

    Parameters
    ----------
    console : rich.console.Console
        Where to print.
    budget, worst : DataFrame
        Rows of this case.
    label : str
        Which case it is.
    """
    toleranced = bool((budget["kind"] == "tolerance").any())
    console.print(label, markup=False, style="bold")
    for _, total in worst.iterrows():
        here = budget[budget["frequency_hz"] == total["frequency_hz"]]
        spot = spot_text(float(total["frequency_hz"]))
        floor_db = float(total.get("floor_db", float("inf")))
        nominal, worst_db, sum_db = (
            decibel_text(float(total[key]), float(total[key]) >= floor_db)
            for key in ("nominal_db", "extreme_value_db", "sum_db")
        )
        board = f", worst board {worst_db} dB" if toleranced else ""
        off = "" if pd.isna(total["residual"]) else f", {100 * total['residual']:.2g} % off"
        console.print(
            f"\n{spot}: nominal {nominal} dB{board}; the contributions sum to {sum_db} dB{off}.\n",
            markup=False,
        )
        if not pd.isna(total["residual"]) and total["residual"] > MOST_UNTOLD:
            console.print(
                f"What is missing from that sum is none of these causes: {UNTOLD}. The shares below are shares of what "
                "is listed.\n",
                markup=False,
            )
        if here.empty:
            console.print("Nothing is unlike on the two sides, and nothing varies.", markup=False)
            continue
        shown = here[(here["share"] >= LEAST_SHARE) | (here["rank"] <= 3)].head(MOST_CAUSES)
        print_columns(console, [], budget_columns(shown))
        if len(here) > len(shown):
            console.print(f"and {len(here) - len(shown)} smaller, in budget.csv", markup=False)
    console.print()
    if toleranced:
        print_columns(console, [], worst_case_columns(worst))
        console.print()
