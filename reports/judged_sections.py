"""Sections of the summary page about verdicts and interference, in Markdown."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
import pandas as pd

from modepair.reports.axis_labels import AxisValues
from modepair.reports.interference import line_column
from modepair.reports.markdown import escape_markdown, markdown_table
from modepair.reports.readings import frequency_text
from modepair.reports.tables import ROWS_OF_MANY, Column
from modepair.reports.verdicts import case_names, codes_text, overall, shown_verdicts, verdict_columns
from modepair.sweeps import render
from modepair.sweeps.interference import Interference

__all__ = ["interference_section", "verdict_section"]

FROM_MEMORY = (
    "The profile of IEC 61000-4-16 is quoted from memory; check it in the standard. Meeting it here shows no "
    "compliance: the standard tests equipment, in a set-up of its own."
)

_MOST_LINES = 4


def verdict_section(
    verdicts: pd.DataFrame, cases: pd.DataFrame, axes: Iterable[AxisValues], changes: Sequence[str] = ()
) -> str:
    """Write the verdicts: the whole in a line, then the table, then what else has changed.

    Parameters
    ----------
    verdicts : DataFrame
        Table of verdicts, at least one row.
    cases : DataFrame
        The content of cases.csv.
    axes : iterable of AxisValues
        The sweep's axes.
    changes : sequence of str
        What else has changed since the baseline.

    Returns
    -------
    str
        Markdown.
    """
    labels, names = case_names(cases, axes)
    shown, note = shown_verdicts(verdicts)
    columns = [column for column in verdict_columns(shown, labels) if any(column.cells)]
    parts = [f"**{escape_markdown(overall(verdicts, names))}**", markdown_table(columns)]
    if note:
        parts.append(escape_markdown(note))
    if changes:
        listed = "\n".join(f"- {escape_markdown(change)}" for change in changes)
        parts.append(f"Changed since the baseline was accepted:\n\n{listed}")
    return "\n\n".join(parts)


def interference_section(cases: pd.DataFrame, axes: Iterable[AxisValues], interference: Interference) -> str:
    """Write what interference leaves in each case, and what was assumed.

    Parameters
    ----------
    cases : DataFrame
        The content of cases.csv.
    axes : iterable of AxisValues
        The sweep's axes.
    interference : Interference
        The common-mode voltages.

    Returns
    -------
    str
        Markdown; empty where no case was done.
    """
    labels, _ = case_names(cases, axes)
    done = cases[cases["state"] == "done"]
    if done.empty:
        return ""
    total = "output_error_v" if "output_error_v" in done else "swept_output_error_v"
    shown = done if len(done) <= ROWS_OF_MANY else done.nlargest(ROWS_OF_MANY, total)
    numbers = shown["case"].tolist()
    columns = [Column("case", [str(number) for number in numbers])]
    columns += [
        Column(path.rpartition(".")[2], [texts[n - 1] for n in numbers], "left")
        for path, texts in labels.items()
    ]
    spectrum = interference.spectrum
    lines_hz = [hz for hz, _ in sorted(spectrum, key=lambda line: -line[1])[:_MOST_LINES]]
    columns += [
        _volts(shown, line_column("output", hz), f"output, {frequency_text(hz)}") for hz in sorted(lines_hz)
    ]
    columns += [
        _volts(shown, name, heading)
        for name, heading in (
            ("output_error_v", "output, all lines"),
            ("input_error_v", "input-referred, all lines"),
            ("swept_output_error_v", "output, profile"),
            ("swept_input_error_v", "input-referred, profile"),
        )
        if name in shown
    ]
    for name, heading in (
        ("output_error_codes", "codes, all lines"),
        ("swept_output_error_codes", "codes, profile"),
    ):
        if name in shown:
            columns.append(Column(heading, [codes_text(value) for value in shown[name]]))
    if "swept_output_error_at_hz" in shown:
        places = [frequency_text(hz) for hz in shown["swept_output_error_at_hz"]]
        columns.append(Column("output worst at", places))
    assumed = [f"{render(volts, 'V', 4)} at {frequency_text(hz, digits=6)}" for hz, volts in spectrum]
    parts = []
    if assumed:
        parts.append(escape_markdown(f"Common-mode lines, rms, all at the same time: {', '.join(assumed)}."))
    if profile := interference.swept:
        corners = ", ".join(
            f"{render(volts, 'V', 4)} at {frequency_text(hz, digits=6)}"
            for hz, volts in zip(profile.frequency_hz.tolist(), profile.volts.tolist(), strict=True)
        )
        parts.append(
            escape_markdown(
                f"Profile, rms, one frequency at a time, straight on logarithmic scales: {corners}."
            )
        )
    if interference.disturbance:
        parts.append(escape_markdown(FROM_MEMORY))
    if interference.converter:
        converter = interference.converter
        step = render(converter.code_volts, "V", 4)
        parts.append(escape_markdown(f"One code of the {converter.bits:.0f}-bit converter is {step}."))
    parts.append(markdown_table(columns))
    if len(shown) < len(done):
        parts.append(
            f"Shown: the {len(shown)} cases with the greatest error of {len(done)}; all are in cases.csv."
        )
    return "\n\n".join(parts)


def _volts(cases: pd.DataFrame, name: str, heading: str) -> Column:
    values = cases[name].to_numpy(np.float64).tolist()
    return Column(heading, [render(value, "V", 3) for value in values])
