"""The summary page of a run, in Markdown: what was asked, what came out, cautions, what it was made with."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache

import numpy as np
import pandas as pd
from jinja2 import Template

from modepair.reports.axis_labels import AxisValues, axis_columns, case_texts, short_names, varying
from modepair.reports.markdown import escape_markdown
from modepair.reports.page_templates import page_template
from modepair.reports.readings import decibel_text, frequency_text
from modepair.reports.tables import MOST_ROWS, ROWS_OF_MANY, figure_columns

CAUTIONS: Mapping[str, str] = {
    "model": (
        "The op-amps are linear small-signal models: no offset, noise, clipping, slewing or common-mode "
        "range. A CMRR from them is no better than the parameters they were given."
    ),
    "nominal": (
        "All op-amps of a stage are alike unless the spec tells them apart. Real ones differ, and a stage "
        "whose errors cancel between equal op-amps does not do so on a board."
    ),
    "medical": (
        "Medical use: circuits connected to patients can hurt people. A simulation shows no compliance; "
        "the applicable standards, local codes and qualified people decide."
    ),
    "mains": (
        "Mains use: circuits connected to the mains can hurt people. A simulation shows no compliance; "
        "the applicable standards, local codes and qualified people decide."
    ),
    "safety": (
        "Safety-relevant use: a circuit that people rely on can hurt them when it fails. A simulation shows "
        "no compliance; the applicable standards, local codes and qualified people decide."
    ),
}
"""Text of each caution, by its flag."""


def cautions(flags: Iterable[str]) -> list[str]:
    """Give the texts of cautions.

    Parameters
    ----------
    flags : iterable of str
        Keys of `CAUTIONS`: ``model``, ``nominal``, ``medical``, ``mains``, ``safety``.

    Returns
    -------
    list of str
        One text per flag, each once, in the order of `CAUTIONS`.

    Raises
    ------
    ValueError
        Where a flag is unknown: a caution must not get lost by a slip.
    """
    asked = set(flags)
    unknown = sorted(asked - CAUTIONS.keys())
    if unknown:
        raise ValueError(f"caution must be one of {', '.join(CAUTIONS)}, not {unknown[0]!r}")
    return [text for flag, text in CAUTIONS.items() if flag in asked]


@dataclass(frozen=True)
class Summary:
    """What the page tells; every text is plain and is escaped when written.

    Parameters
    ----------
    title : str
        Title of the spec; the page says ``CMRR sweep`` where it is empty.
    asked : mapping of str to str
        What was asked, in the order of the page: name to text, such as ``stage``, ``parts``, ``op-amps``,
        ``source``, ``frequency``.
    cases : DataFrame
        The content of cases.csv, as for `modepair.reports.tables.print_cases`.
    axes : sequence of AxisValues
        The sweep's axes.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    band_hz : tuple of float
        Lowest and highest solved frequency in Hz.
    provenance : mapping of str to str
        What makes the run repeatable: versions, digest, date.
    caution_flags : sequence of str
        Keys of `CAUTIONS`.
    plots : mapping of str to str
        Caption to file name, relative to the page.
    where : str
        Where all cases can be read.
    warnings : sequence of str
        What the op-amp models cannot show; they stand at the top.
    opening, further : mapping of str to str
        Sections before what was asked, and after the results: heading to Markdown, which is not escaped again.
    """

    title: str
    asked: Mapping[str, str]
    cases: pd.DataFrame
    axes: Sequence[AxisValues]
    spots_hz: Sequence[float]
    band_hz: tuple[float, float]
    provenance: Mapping[str, str]
    caution_flags: Sequence[str] = ("model", "nominal")
    plots: Mapping[str, str] = field(default_factory=dict)
    where: str = "cases.csv"
    warnings: Sequence[str] = ()
    opening: Mapping[str, str] = field(default_factory=dict)
    further: Mapping[str, str] = field(default_factory=dict)


def summary_text(summary: Summary) -> str:
    """Write the summary page.

    Parameters
    ----------
    summary : Summary
        What it tells.

    Returns
    -------
    str
        Markdown, ending in a newline.

    Raises
    ------
    ValueError
        Where a caution flag is unknown.
    """
    cases = summary.cases
    is_done = cases["state"] == "done"
    done = cases[is_done]
    columns = axis_columns(cases, summary.axes)
    vary, fixed = varying(columns)
    # Names of the cases that the page names, and not of all: there may be hundreds of thousands.
    places = np.flatnonzero(~is_done)[:ROWS_OF_MANY].tolist() + _lowest_place(cases, is_done)
    names = (case_texts(columns, rows=places) if columns else []) or [""] * len(places)
    names_of_case = dict(zip(cases["case"].iloc[places].tolist(), names, strict=True))
    many = len(done) > MOST_ROWS
    shown = done.nsmallest(ROWS_OF_MANY, "cmrr_db_lowest") if many else done
    header, rules, rows = _table(summary, shown, list(vary))
    failed = cases[~is_done]
    notes = []
    if many:
        notes.append(
            f"Shown: the {len(shown)} cases with the lowest CMRR; the other {len(done) - len(shown)} are in "
            f"{escape_markdown(summary.where)}."
        )
    if fixed:
        same = ", ".join(f"{escape_markdown(path)} {escape_markdown(text)}" for path, text in fixed.items())
        notes.append(f"In every case: {same}.")
    if any(isinstance(text, str) and text for text in done.get("above_floor", [])):
        notes.append(r"CMRR marked \> lies above the numerical floor of the solve: a bound, not a result.")
    page = _template().render(
        title=escape_markdown(summary.title or "CMRR sweep"),
        count=len(cases),
        done=len(done),
        lowest=_lowest(done, names_of_case),
        asked=[(escape_markdown(name), escape_markdown(text)) for name, text in summary.asked.items()],
        plots=[(escape_markdown(name), _link(file)) for name, file in summary.plots.items()],
        header=header,
        rules=rules,
        rows=rows,
        notes=notes,
        failed=[
            (
                number,
                escape_markdown(names_of_case[number]),
                escape_markdown(str(state).removeprefix("failed: ")),
            )
            for number, state in zip(
                failed["case"].tolist()[:ROWS_OF_MANY], failed["state"].tolist()[:ROWS_OF_MANY], strict=True
            )
        ],
        more_failed=max(0, len(failed) - ROWS_OF_MANY),
        where=escape_markdown(summary.where),
        warnings=[escape_markdown(text) for text in summary.warnings],
        opening=summary.opening,
        further=summary.further,
        cautions=[escape_markdown(text) for text in cautions(summary.caution_flags)],
        provenance=[
            (escape_markdown(name), escape_markdown(text)) for name, text in summary.provenance.items()
        ],
    )
    return re.sub(r"\n{3,}", "\n\n", page).rstrip("\n") + "\n"


def _table(
    summary: Summary, shown: pd.DataFrame, paths: Sequence[str]
) -> tuple[list[str], list[str], list[list[str]]]:
    if shown.empty:
        return [], [], []
    labels = axis_columns(shown, summary.axes)
    names = short_names(list(labels))
    figures = figure_columns(shown, summary.spots_hz, summary.band_hz)
    header = ["case", *(escape_markdown(names[path]) for path in paths)]
    header += [escape_markdown(_one_line(column.header)) for column in figures]
    rules = ["---:", *(":---" for _ in paths), *("---:" for _ in figures)]
    cells = [[str(number) for number in shown["case"]], *(labels[path] for path in paths)]
    cells += [column.cells for column in figures]
    return header, rules, [[escape_markdown(cell) for cell in row] for row in zip(*cells, strict=True)]


def _one_line(header: str) -> str:
    """Join a console header: ``band-, width`` to one word, the unit after a comma."""
    *name, unit = header.replace("-\n", "").split("\n")
    return f"{' '.join(name)}, {unit}" if unit else " ".join(name)


def _lowest_place(cases: pd.DataFrame, is_done: pd.Series[bool]) -> list[int]:
    """Place of the finished case with the lowest CMRR, if any is finished."""
    if not is_done.any():
        return []
    return [int(cases["cmrr_db_lowest"].where(is_done, np.inf).to_numpy().argmin())]


def _lowest(done: pd.DataFrame, names_of_case: Mapping[int, str]) -> str:
    if done.empty:
        return ""
    row = done.iloc[int(np.argmin(done["cmrr_db_lowest"].to_numpy()))]
    at_floor = "lowest" in str(row["above_floor"]).split(", ")
    level = decibel_text(float(row["cmrr_db_lowest"]), at_floor).replace("> ", "above ")
    name = names_of_case[int(row["case"])]
    place = f"case {int(row['case'])}{f' ({name})' if name else ''}"
    return escape_markdown(f"{level} dB at {frequency_text(float(row['cmrr_lowest_at_hz']))}, {place}.")


def _link(file: str) -> str:
    return file.replace(" ", "%20").replace("(", "%28").replace(")", "%29")


@cache
def _template() -> Template:
    return page_template("summary.md.j2", html=False)
