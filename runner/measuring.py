"""Bench data of a run: the difference from its curves, written to the run folder and said on its summary."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from modepair.reports.axis_labels import axis_columns, case_texts
from modepair.reports.differences import agreements, all_differences, matching_cases
from modepair.reports.markdown import escape_markdown
from modepair.runner.folder import RunFolder
from modepair.runner.reading import curves_of
from modepair.sweeps import Spec

__all__ = ["measured_lines", "measured_section", "write_measured"]


def write_measured(folder: RunFolder, spec: Spec, cases: pd.DataFrame) -> pd.DataFrame:
    """Write `measured.csv`.

    Parameters
    ----------
    folder : RunFolder
        Where to; its curves are written already.
    spec : Spec
        With its measurements.
    cases : DataFrame
        The table of cases.

    Returns
    -------
    DataFrame
        The content of the file; no rows, and no file, where there is no measurement.
    """
    table = measured_table(folder.path("curves.parquet"), spec, cases)
    if spec.measured:
        table.to_csv(folder.path("measured.csv"), index=False)
    return table


def measured_table(curves: Path, spec: Spec, cases: pd.DataFrame) -> pd.DataFrame:
    """Compare the measurements of a spec with the curves of its run.

    Parameters
    ----------
    curves : Path
        The curves file.
    spec : Spec
        With its measurements.
    cases : DataFrame
        The table of cases.

    Returns
    -------
    DataFrame
        The content of `measured.csv`.
    """
    measured = spec.measurements
    numbers = {case for one in measured for case in matching_cases(one, cases)}
    return all_differences(measured, cases, curves_of(curves, numbers))


def measured_lines(table: pd.DataFrame, spec: Spec, cases: pd.DataFrame) -> list[str]:
    """Say how far each measurement lies from the cases that it belongs to.

    Parameters
    ----------
    table : DataFrame
        As from `write_measured`.
    spec : Spec
        The spec.
    cases : DataFrame
        The table of cases.

    Returns
    -------
    list of str
        A plain sentence or two for each measurement and case.
    """
    if table.empty:
        return []
    texts = case_texts(axis_columns(cases, spec.axes)) or [""] * len(cases)
    names = dict(zip(cases["case"].tolist(), texts, strict=True))
    return [one.text(names.get(one.case, "")) for one in agreements(table)]


def measured_section(table: pd.DataFrame, spec: Spec, cases: pd.DataFrame) -> str:
    """Write the section of the summary on measurements, in Markdown; empty where there is none."""
    lines = measured_lines(table, spec, cases)
    if not lines:
        return ""
    shown = [f"- {escape_markdown(line)}" for line in lines[:20]]
    if len(lines) > 20:
        shown.append(f"- and {len(lines) - 20} more cases")
    note = (
        "Measured minus simulated, the curves read between solved frequencies; every row is in measured.csv."
    )
    return "\n".join([*shown, "", note])
