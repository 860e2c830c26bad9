"""The pages of a run folder: plots and summary."""

from __future__ import annotations

from modepair.reports.axis_labels import axis_columns
from modepair.reports.plots import plot_cmrr, plot_gains, write_plot
from modepair.runner.folder import RunFolder
from modepair.runner.results import Results
from modepair.sweeps import Sweep

__all__ = ["write_reports"]


def write_reports(folder: RunFolder, sweep: Sweep, results: Results) -> None:
    """Write plots and summary of a run.

    Parameters
    ----------
    folder : RunFolder
        Where to.
    sweep : Sweep
        What was asked.
    results : Results
        What it came to.
    """
    if results.kept is None:
        return
    rows = results.cases.set_index("case", drop=False).loc[results.kept_case]
    labels = axis_columns(rows, sweep.axes)
    case = results.kept_case.tolist()
    title = sweep.spec.title
    write_plot(plot_cmrr(results.kept, labels, title=title, case=case), folder.path("cmrr"))
    write_plot(plot_gains(results.kept, labels, title=title, case=case), folder.path("gains"))
