"""Panels of a plot: their look, their place in inches, their headings, and the zones that lie behind curves."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import wraps
from typing import Any, ParamSpec, TypeVar

import matplotlib as mpl
import matplotlib.style
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.transforms import ScaledTranslation, Transform

from modepair.reports.pairs import FloatArray

P = ParamSpec("P")
R = TypeVar("R")

INK = "#22262b"
FAINT = "#dcdfe2"
_ZONE = "#efece6"
_LOOK: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Verdana"],
    "font.size": 9.0,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "grid.color": FAINT,
    "grid.linewidth": 0.6,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.major.size": 4.0,
    "hatch.linewidth": 0.5,
    "svg.hashsalt": "modepair",
    "svg.fonttype": "none",
    "text.hinting": "no_hinting",
    "figure.dpi": 140.0,
}

# Inches.
_LEFT, _BOTTOM, _TOP, _RIGHT = 0.62, 0.5, 0.62, 0.15
HEADING_LINE = 0.18
"""Height of a line of a heading, in inches."""


def in_our_look(function: Callable[P, R]) -> Callable[P, R]:
    """Run a function under this package's plot settings, whatever the user's matplotlib settings are.

    Parameters
    ----------
    function : callable
        Draws or writes a figure.

    Returns
    -------
    callable
        The same, wrapped; the settings outside are left as they were.
    """

    @wraps(function)
    def wrapped(*args: P.args, **kwargs: P.kwargs) -> R:
        with mpl.style.context(["default", _LOOK]):
            return function(*args, **kwargs)

    return wrapped


def make_panels(
    rows: int,
    columns: int,
    room: float,
    height: float,
    width: float,
    title: str,
    lower_height: float = 0.0,
    *,
    left: float = _LEFT,
    between: float = 0.72,
    above: float = 0.0,
    subtitle: str = "",
) -> tuple[Figure, list[list[Axes]]]:
    """Lay out panels in inches, with room for labels right of the last column.

    Parameters
    ----------
    rows, columns : int
        How many panels.
    room : float
        Room right of the last column, in inches.
    height, width : float
        Height of the first row and width of each column, in inches.
    title : str
        Text above them.
    lower_height : float
        Height of the other rows, in inches.
    left, between : float
        Room left of the first column and between columns, in inches.
    above : float
        Room above every row beside that for the name of its axis, such as for headings, in inches.
    subtitle : str
        A smaller line of text below the title.

    Returns
    -------
    figure : matplotlib.figure.Figure
        The figure, with a canvas and no place in pyplot.
    panels : list of list of Axes
        Rows of panels.
    """
    between_rows, top_room = 0.62 + above, _TOP + above + (0.3 if subtitle else 0.0)
    heights = [height, *[lower_height] * (rows - 1)]
    total_width = left + columns * width + (columns - 1) * between + room + _RIGHT
    total_height = _BOTTOM + sum(heights) + (rows - 1) * between_rows + top_room
    figure = Figure(figsize=(total_width, total_height))
    FigureCanvasAgg(figure)
    panels = []
    top = total_height - top_room
    for row_height in heights:
        top -= row_height
        panels.append(
            [
                figure.add_axes(
                    (
                        (left + column * (width + between)) / total_width,
                        top / total_height,
                        width / total_width,
                        row_height / total_height,
                    )
                )
                for column in range(columns)
            ]
        )
        top -= between_rows
    if title:
        figure.text(
            0.12 / total_width,
            1 - 0.1 / total_height,
            title,
            fontsize=11,
            fontweight="bold",
            va="top",
            parse_math=False,
        )
    if subtitle:
        figure.text(
            0.12 / total_width,
            1 - (0.36 if title else 0.1) / total_height,
            subtitle,
            fontsize=9,
            va="top",
            parse_math=False,
            gid="subtitle",
        )
    return figure, panels


def write_heading(
    panel: Axes, heading: str, notes: Sequence[str] = (), at: float = 0.32, shift: float = -0.42
) -> None:
    """Write a panel's heading above it, in bold, and lines of notes between the two.

    Parameters
    ----------
    panel : Axes
        A panel whose figure has room above it.
    heading : str
        One line or more.
    notes : sequence of str
        Lines below the heading, the first one nearest to it.
    at : float
        Where the lowest line stands, in inches above the panel.
    shift : float
        Where lines start, in inches right of the panel's left edge.
    """
    lines = [(line, "bold", 9.5) for line in heading.split("\n") if line]
    lines += [(note, "normal", 8.5) for note in notes]
    for place, (line, weight, size) in enumerate(reversed(lines)):
        panel.text(
            0.0,
            1.0,
            line,
            transform=above_left(panel, shift, at + place * HEADING_LINE),
            ha="left",
            va="bottom",
            fontweight=weight,
            fontsize=size,
            parse_math=False,
            gid="heading" if weight == "bold" else "heading-note",
        )


def above_left(panel: Axes, right: float = -0.42, up: float = 0.07) -> Transform:
    """Give the place from which texts above a panel start.

    Parameters
    ----------
    panel : Axes
        A panel.
    right, up : float
        Inches from its upper left corner.

    Returns
    -------
    matplotlib.transforms.Transform
        Takes (0, 1) there.

    Raises
    ------
    ValueError
        Where the panel belongs to no figure.
    """
    figure = panel.get_figure(root=True)
    if figure is None:
        raise ValueError("the panel must belong to a figure")
    return panel.transAxes + ScaledTranslation(right, up, figure.dpi_scale_trans)


def draw_floor(panel: Axes, frequency_hz: FloatArray, floor_db: FloatArray, text: str, up: bool) -> None:
    """Shade where the solve can tell nothing.

    Parameters
    ----------
    panel : Axes
        A panel that has its vertical axis.
    frequency_hz : ndarray, shape (F,)
        Frequencies in Hz.
    floor_db : ndarray, shape (F,)
        Edge of the zone in dB.
    text : str
        What the zone is.
    up : bool
        Whether it lies above the edge.
    """
    low, high = panel.get_ylim()
    edge = np.full(frequency_hz.shape, high if up else low)
    panel.fill_between(
        frequency_hz,
        floor_db,
        edge,
        facecolor=_ZONE,
        edgecolor="#d9d3c7",
        hatch="...",
        linewidth=0,
        zorder=0.4,
        gid="floor",
    )
    panel.text(
        0.5,
        0.985 if up else 0.015,
        text,
        transform=panel.transAxes,
        ha="center",
        va="top" if up else "bottom",
        color="#6b6459",
        fontsize=8,
        bbox={"facecolor": _ZONE, "edgecolor": "none", "pad": 1.5},
        gid="floor-name",
    )


def draw_mask(panel: Axes, mask: Sequence[tuple[float, float]]) -> None:
    """Draw the least level asked for, and hatch what lies below it.

    Parameters
    ----------
    panel : Axes
        A panel that has its vertical axis.
    mask : sequence of (float, float)
        Corners: frequency in Hz, ascending, and level in dB.
    """
    frequency_hz, level_db = np.array(mask, dtype=np.float64).T
    low, _ = panel.get_ylim()
    panel.fill_between(
        frequency_hz,
        level_db,
        low,
        facecolor="none",
        edgecolor="#a9adb2",
        hatch="////",
        linewidth=0,
        zorder=0.5,
    )
    marker = "_" if len(mask) == 1 else ""
    panel.plot(frequency_hz, level_db, marker=marker, color=INK, linewidth=2.2, zorder=1.8, gid="mask")
