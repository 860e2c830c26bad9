"""The plots of a run's boards: from what the draws came to, to pictures in the run folder."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
import pandas as pd

from modepair.reports import ModePair, axis_columns, write_plot
from modepair.reports.axis_labels import case_texts
from modepair.reports.board_histograms import BoardSpots, plot_histograms
from modepair.reports.board_plots import BAND_PERCENTS, BoardCurves, plot_boards
from modepair.reports.figures import spot_indices
from modepair.reports.yields import Yield
from modepair.runner.boards import CaseBoards
from modepair.runner.folder import RunFolder
from modepair.runner.results import Results
from modepair.sweeps import Sweep

__all__ = ["plot_board_pages"]


def plot_board_pages(folder: RunFolder, sweep: Sweep, results: Results) -> dict[str, str]:
    """Write the plots of a run's boards.

    Parameters
    ----------
    folder : RunFolder
        Where to; its `curves.parquet` has been written.
    sweep : Sweep
        What was asked.
    results : Results
        What it came to.

    Returns
    -------
    dict of str to str
        Caption to file name; empty where nothing was drawn or every draw failed.
    """
    boards = results.boards
    if boards is None or not boards.plotted:
        return {}
    spec = sweep.spec
    masked = spec.limits is not None and spec.limits.cmrr is not None
    shown = sorted(boards.plotted, key=lambda one: one.case)
    texts = _texts(sweep, results, shown)
    nominal = _nominal(folder, shown, boards.frequency_hz)
    curves = [
        BoardCurves(
            boards.frequency_hz,
            {percent: one.table[f"cmrr_db_p{percent}"].to_numpy() for percent in BAND_PERCENTS},
            nominal[one.case].cmrr_db if one.case in nominal else None,
            None if one.worst_gains is None else ModePair(boards.frequency_hz, *one.worst_gains).cmrr_db,
            one.worst_draw,
            texts[one.case],
            _note(one, masked),
        )
        for one in shown
    ]
    mask = spec.limits.cmrr if spec.limits else None
    figure = plot_boards(curves, title=spec.title, mask=mask.corners if mask else ())
    of = "" if len(shown) == sweep.count else f" of the {len(shown)} cases whose boards reject least"
    plots = {f"Boards over frequency{of}": write_plot(figure, folder.path("boards"))[0].name}
    spots_hz = np.asarray(spec.frequency.spots, dtype=np.float64)
    if not spots_hz.size:
        return plots
    columns = spot_indices(boards.frequency_hz, spec.frequency.spots)
    worst = boards.plotted[0]
    spots = BoardSpots(
        spots_hz,
        np.concatenate(worst.rho).astype(np.complex128),
        nominal[worst.case].error_ratio[columns] if worst.case in nominal else None,
        mask.at(spots_hz) if mask else None,
        nominal[worst.case].floor_db[columns] if worst.case in nominal else None,
        texts[worst.case],
    )
    figure = plot_histograms(spots, title=spec.title)
    which = "" if sweep.count == 1 else f", case {worst.case}"
    return plots | {f"Boards at the spots{which}": write_plot(figure, folder.path("histograms"))[0].name}


def _texts(sweep: Sweep, results: Results, shown: list[CaseBoards]) -> dict[int, str]:
    """A text for each case, from its axes."""
    if sweep.count == 1:
        return {one.case: "" for one in shown}
    rows = results.cases.set_index("case", drop=False).loc[[one.case for one in shown]]
    texts = case_texts(axis_columns(rows, sweep.axes)) or [""] * len(shown)
    return {
        one.case: f"case {one.case}: {text}" if text else f"case {one.case}"
        for one, text in zip(shown, texts, strict=True)
    }


def _note(one: CaseBoards, masked: bool) -> str:
    tried = one.drawn + len(one.reasons)
    if not masked:
        return f"{tried} boards"
    found = Yield(one.passed, tried)
    low, high = (_percent(share) for share in found.interval)
    return f"{tried} boards, yield {_percent(found.value)} % ({low} to {high} %)"


def _percent(share: float) -> str:
    """Two digits of the share or of what it lacks to all, whichever is smaller."""
    small = min(share, 1 - share)
    return f"{100 * share:.{max(0, 1 - math.floor(math.log10(100 * small))) if small > 0 else 0}f}"


def _nominal(
    folder: RunFolder, shown: list[CaseBoards], frequency_hz: npt.NDArray[np.float64]
) -> dict[int, ModePair]:
    """Gains of the nominal circuits, read back: of many cases, those kept for plots may lack them."""
    columns = ["case", "common_re", "common_im", "differential_re", "differential_im"]
    wanted = [("case", "in", [one.case for one in shown]), ("draw", "==", 0)]
    table = pd.read_parquet(folder.path("curves.parquet"), columns=columns, filters=wanted)
    return {
        int(str(case)): ModePair(
            frequency_hz,
            (rows["common_re"] + 1j * rows["common_im"]).to_numpy(),
            (rows["differential_re"] + 1j * rows["differential_im"]).to_numpy(),
        )
        for case, rows in table.groupby("case")
    }
