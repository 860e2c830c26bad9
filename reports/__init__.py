"""What is read: CMRR and gain figures, tables, plots and the summary page.

Tables, plots and summary load when first asked for: matplotlib alone takes half a second to import.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from modepair.reports.figures import figures, spot_column
from modepair.reports.pairs import FLOOR_VOLTS, ModePair

if TYPE_CHECKING:
    from modepair.reports.axis_labels import axis_columns
    from modepair.reports.case_curves import CaseCurves
    from modepair.reports.plot_files import write_plot
    from modepair.reports.plots import plot_cmrr, plot_gains
    from modepair.reports.summary import Summary, cautions, summary_text
    from modepair.reports.tables import console_for, print_cases

__all__ = [
    "FLOOR_VOLTS",
    "CaseCurves",
    "ModePair",
    "Summary",
    "axis_columns",
    "cautions",
    "console_for",
    "figures",
    "plot_cmrr",
    "plot_gains",
    "print_cases",
    "spot_column",
    "summary_text",
    "write_plot",
]

_LATER = {
    "CaseCurves": "case_curves",
    "Summary": "summary",
    "axis_columns": "axis_labels",
    "cautions": "summary",
    "console_for": "tables",
    "plot_cmrr": "plots",
    "plot_gains": "plots",
    "print_cases": "tables",
    "summary_text": "summary",
    "write_plot": "plot_files",
}


def __getattr__(name: str) -> Any:
    if name not in _LATER:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_LATER[name]}"), name)
