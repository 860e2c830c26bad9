"""The plots of a run's curves, drawn in a process of their own.

Matplotlib takes longer to import and to draw than a small sweep takes to solve. A process beside the others has it
ready by the time the curves are there, and draws while tables and summary are written.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator, Sequence
from concurrent.futures import BrokenExecutor, Future
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from modepair.runner.workers import submit, worker_pool

if TYPE_CHECKING:
    from concurrent.futures import Executor

    from modepair.reports.case_curves import CaseCurves
    from modepair.reports.differences import Measured

__all__ = ["CurvePlots", "Draughting", "draughting"]

CMRR, GAINS = "cmrr", "gains"
CAPTIONS = {"CMRR over frequency": CMRR, "Differential and common-mode gain over frequency": GAINS}
"""What each plot shows, and the stem of its files."""


@dataclass(frozen=True)
class CurvePlots:
    """What the plots show.

    Parameters
    ----------
    curves : CaseCurves
        Gains of the cases to draw.
    mask : sequence of (float, float)
        Least CMRR asked for, as for `modepair.reports.plot_cmrr`.
    measured : sequence of Measured
        Measurements to lay over the curves.
    """

    curves: CaseCurves
    mask: Sequence[tuple[float, float]] = ()
    measured: Sequence[Measured] = ()

    def write(self, folder: Path) -> None:
        """Draw both plots and write them into a folder, each as PNG and SVG."""
        from modepair.reports import plot_cmrr, plot_gains, write_plot

        write_plot(plot_cmrr(self.curves, mask=self.mask, measured=self.measured), folder / CMRR)
        write_plot(plot_gains(self.curves), folder / GAINS)


class Draughting:
    """Draws plots: beside this process where there is an executor for it, else in this process.

    Parameters
    ----------
    executor : Executor, optional
        Has one worker.
    """

    def __init__(self, executor: Executor | None = None) -> None:
        self._executor = executor
        if executor is not None:
            submit(executor, _make_ready)

    def begin(self, plots: CurvePlots, folder: Path) -> Drawing:
        """Begin to draw plots into a folder.

        Parameters
        ----------
        plots : CurvePlots
            What to draw.
        folder : Path
            Where to, absolute.

        Returns
        -------
        Drawing
            To wait for.
        """
        begun = submit(self._executor, plots.write, folder) if self._executor is not None else None
        return Drawing(plots, folder, begun)


@dataclass(frozen=True)
class Drawing:
    """Plots that are being drawn; made by `Draughting.begin`."""

    plots: CurvePlots
    folder: Path
    begun: Future[None] | None

    def finish(self) -> None:
        """Wait until the files are there.

        Raises
        ------
        OSError
            If they cannot be written.
        """
        try:
            if self.begun is not None:
                return self.begun.result()
        except BrokenExecutor:
            # The process is gone, for want of memory perhaps; this one is as good.
            pass
        self.plots.write(self.folder)


def _make_ready() -> None:
    """Import what plots need, and read the font."""
    from modepair.reports import plot_files, plots  # noqa: F401
    from modepair.reports.end_labels import text_width

    text_width("0", 9.0)


@contextmanager
def draughting(beside: bool = True) -> Iterator[Draughting]:
    """Give what draws plots, in a process beside this one where that saves time.

    Parameters
    ----------
    beside : bool
        Whether there may be a process for it. There is none on one processor, or where matplotlib is here already.

    Yields
    ------
    Draughting
        Its process ends with the block. The earlier it is started, the sooner it is ready.
    """
    if not beside or (os.cpu_count() or 1) == 1 or "matplotlib.figure" in sys.modules:
        yield Draughting()
        return
    with worker_pool() as executors:
        executor = executors(1)
        try:
            yield Draughting(executor)
        finally:
            # The pool ends it: to wait until it has put matplotlib away takes a tenth of a second.
            executor.shutdown(wait=False, cancel_futures=True)
