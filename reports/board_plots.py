"""Plots of what a tolerance's boards do: bands of CMRR over frequency, case beside case."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from textwrap import wrap

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from modepair.reports.end_labels import EndLabel, label_height, label_room, write_labels
from modepair.reports.pairs import FloatArray
from modepair.reports.palette import HUES, CurveStyle, mix
from modepair.reports.panels import (
    HEADING_LINE,
    INK,
    draw_mask,
    in_our_look,
    make_panels,
    write_heading,
)
from modepair.reports.scales import frequency_axis, level_axis

__all__ = ["MOST_CASES", "BoardCurves", "plot_boards"]

MOST_CASES = 6
"""Cases that one picture shows."""
BAND_PERCENTS = (1, 5, 50, 95, 99)
"""Quantiles that a band is drawn from."""
NOMINAL_REACH_DB = 25.0
"""How far above the boards the axis follows the nominal curve."""

_ALL, _MOST, _MEDIAN = (
    mix(HUES[0], "#ffffff", 0.82),
    mix(HUES[0], "#ffffff", 0.5),
    mix(HUES[0], "#000000", 0.3),
)
_NOMINAL, _WORST = CurveStyle(HUES[3], (5.0, 2.0)), CurveStyle(HUES[1])
_LEVEL_STEPS_DB = (1, 2, 5, 10, 20, 40)
# Characters of a heading and of a note to the inch, safely.
_HEADING_WIDTH, _NOTE_WIDTH = 10.5, 13.5


@dataclass(frozen=True)
class BoardCurves:
    """What the boards of one case do over frequency.

    Parameters
    ----------
    frequency_hz : ndarray, shape (F,)
        Frequencies in Hz, ascending.
    cmrr_db : mapping of int to ndarray, each shape (F,)
        Percent to the CMRR in dB that this share of boards stays below; 1, 5, 50, 95 and 99.
    nominal_db : ndarray, shape (F,), optional
        CMRR of the nominal circuit.
    worst_db : ndarray, shape (F,), optional
        CMRR of the worst board.
    worst_draw : int
        Its number.
    label : str
        What tells the case from the others.
    note : str
        A line about its boards, such as their number and yield.

    Raises
    ------
    ValueError
        Where a quantile is absent or a curve has another shape than the frequencies.
    """

    frequency_hz: FloatArray
    cmrr_db: Mapping[int, FloatArray]
    nominal_db: FloatArray | None = None
    worst_db: FloatArray | None = None
    worst_draw: int = 0
    label: str = ""
    note: str = ""

    def __post_init__(self) -> None:
        missing = [str(percent) for percent in BAND_PERCENTS if percent not in self.cmrr_db]
        if missing:
            raise ValueError(
                f"cmrr_db must have the quantiles 1, 5, 50, 95 and 99 %; absent: {', '.join(missing)}"
            )
        curves = {f"cmrr_db[{percent}]": level for percent, level in self.cmrr_db.items()}
        curves |= {"nominal_db": self.nominal_db, "worst_db": self.worst_db}  # type: ignore[dict-item]
        for name, level in curves.items():
            if level is not None and np.shape(level) != self.frequency_hz.shape:
                raise ValueError(
                    f"{name} must have the shape {self.frequency_hz.shape}, not {np.shape(level)}"
                )


@in_our_look
def plot_boards(
    boards: Sequence[BoardCurves], *, title: str = "", mask: Sequence[tuple[float, float]] = ()
) -> Figure:
    """Draw what boards do over frequency, a panel per case on one scale.

    Parameters
    ----------
    boards : sequence of BoardCurves
        One to `MOST_CASES` cases.
    title : str
        Text above the panels.
    mask : sequence of (float, float)
        Least CMRR asked for: corners as frequency in Hz, ascending, and level in dB; straight between them
        over log f.

    Returns
    -------
    matplotlib.figure.Figure
        Per case the band of 1 % to 99 % of its boards, within it that of 5 % to 95 %, the median, the nominal
        circuit, the worst board with its draw number, and the mask. Each panel names its worst board; the
        others are named beside the upper right panel.

    Raises
    ------
    ValueError
        Where there is no case or there are too many.
    """
    if not 1 <= len(boards) <= MOST_CASES:
        raise ValueError(f"boards of 1 to {MOST_CASES} cases fit one picture, not {len(boards)}")
    alone = len(boards) == 1
    columns = 1 if alone else 2
    width, height = (6.6, 4.0) if alone else (3.9, 2.7)
    rows = -(-len(boards) // columns)
    headings = [_wrapped(one.label, width, _HEADING_WIDTH, 2) for one in boards]
    notes = [_wrapped(one.note, width, _NOTE_WIDTH, 2) for one in boards]
    lines = max(len(h) + len(n) for h, n in zip(headings, notes, strict=True))
    shown, top_db = _scale(boards, mask)
    full = [_ends(one, mask, top_db) for one in boards]
    short = [_worst_end(one, alone=False) for one in boards]
    named = 0 if alone else 1
    last = range(columns - 1, len(boards), columns)
    room = max(label_room(full[row] if row == named else short[row]) for row in last)
    figure, panels = make_panels(
        rows,
        columns,
        room,
        max(height, label_height(full[named])),
        width,
        title,
        lower_height=height,
        between=label_room(short[0]) + 0.62,
        above=lines * HEADING_LINE + (0.2 if rows > 1 else 0.0),
    )
    places = [panel for row in panels for panel in row]
    for panel in places[len(boards) :]:
        panel.remove()
    for index, (panel, one) in enumerate(zip(places, boards, strict=False)):
        level_axis(panel, shown, "CMRR (dB)", steps=_LEVEL_STEPS_DB)
        frequency_axis(panel, one.frequency_hz, named=index + columns >= len(boards), sparse=not alone)
        if mask:
            draw_mask(panel, mask)
        _draw(panel, one)
        write_heading(panel, "\n".join(headings[index]), notes[index][::-1])
        write_labels(panel, full[index] if index == named else short[index])
    return figure


def _wrapped(text: str, width: float, characters: float, most: int) -> list[str]:
    """Break a text to lines that fit a panel; what is left over ends in an ellipsis."""
    return wrap(text, int(width * characters), max_lines=most, placeholder=" …") if text else []


def _scale(
    boards: Sequence[BoardCurves], mask: Sequence[tuple[float, float]]
) -> tuple[list[FloatArray], float]:
    """Levels to be in view, and the highest."""
    shown = [level for one in boards for level in (one.cmrr_db[1], one.cmrr_db[99])]
    shown += [one.worst_db for one in boards if one.worst_db is not None]
    if mask:
        shown.append(np.array([level for _, level in mask]))
    top_db = max(float(np.nanmax(level)) for level in shown) + NOMINAL_REACH_DB
    # A circuit without errors of its own lies at the numerical floor, far above all that has been drawn.
    shown += [
        np.where(one.nominal_db <= top_db, one.nominal_db, np.nan)
        for one in boards
        if one.nominal_db is not None
    ]
    return shown, top_db


def _draw(panel: Axes, one: BoardCurves) -> None:
    low, q05, q50, q95, high = (one.cmrr_db[percent] for percent in BAND_PERCENTS)
    marker = "o" if one.frequency_hz.size == 1 else ""
    if marker:
        panel.vlines(one.frequency_hz, low, high, color=_ALL, linewidth=8, zorder=1.2, gid="all-boards")
        panel.vlines(one.frequency_hz, q05, q95, color=_MOST, linewidth=8, zorder=1.3, gid="most-boards")
    else:
        panel.fill_between(one.frequency_hz, low, high, color=_ALL, linewidth=0, zorder=1.2, gid="all-boards")
        panel.fill_between(
            one.frequency_hz, q05, q95, color=_MOST, linewidth=0, zorder=1.3, gid="most-boards"
        )
    panel.plot(one.frequency_hz, q50, color=_MEDIAN, linewidth=1.8, marker=marker, gid="median")
    for level, style, name in ((one.nominal_db, _NOMINAL, "nominal"), (one.worst_db, _WORST, "worst")):
        if level is not None:
            line = Line2D(one.frequency_hz, level, color=style.colour, linewidth=1.4, marker=marker, gid=name)
            if style.dashes:
                line.set_dashes(style.dashes)
            panel.add_line(line)


def _ends(one: BoardCurves, mask: Sequence[tuple[float, float]], top_db: float) -> list[EndLabel]:
    q50, q95, high = (float(one.cmrr_db[percent][-1]) for percent in (50, 95, 99))
    ends = [
        EndLabel((q95 + high) / 2, "1 % to 99 % of boards", _ALL, width=8),
        EndLabel((q50 + q95) / 2, "5 % to 95 %", _MOST, width=8),
        EndLabel(q50, "median", _MEDIAN, width=1.8),
    ]
    if one.nominal_db is not None:
        above = " (above the scale)" if float(np.nanmin(one.nominal_db)) > top_db else ""
        ends.append(EndLabel(float(one.nominal_db[-1]), f"nominal{above}", _NOMINAL.colour, _NOMINAL.dashes))
    if mask:
        ends.append(EndLabel(mask[-1][1], "least CMRR asked for", INK, width=2.2))
    return ends + _worst_end(one, alone=True)


def _worst_end(one: BoardCurves, alone: bool) -> list[EndLabel]:
    if one.worst_db is None:
        return []
    text = f"worst board: draw {one.worst_draw}" if alone else f"draw {one.worst_draw}"
    return [EndLabel(float(one.worst_db[-1]), text, _WORST.colour, _WORST.dashes)]
