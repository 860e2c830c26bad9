"""Panels of a plot: their look, their place in inches, their axes, and the zones that lie behind curves."""

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
from matplotlib.markers import TICKDOWN, MarkerStyle
from matplotlib.ticker import FixedFormatter, FixedLocator, MultipleLocator, NullLocator
from matplotlib.transforms import ScaledTranslation

from modepair.reports.pairs import FloatArray
from modepair.reports.readings import frequency_text

P = ParamSpec("P")
R = TypeVar("R")

INK = "#22262b"
FAINT = "#dcdfe2"
_ZONE = "#efece6"
_LOOK: dict[str, Any] = {
    "font.family": "DejaVu Sans",
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
    "svg.fonttype": "path",
    "figure.dpi": 100.0,
    "savefig.dpi": 140.0,
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


def frequency_axis(panel: Axes, frequency_hz: FloatArray, named: bool = True, sparse: bool = False) -> None:
    """Give a panel its frequency axis: logarithmic, ticks such as 10 Hz and 1 kHz.

    Parameters
    ----------
    panel : Axes
        The panel.
    frequency_hz : ndarray, shape (F,)
        Solved frequencies in Hz, ascending; the axis spans them.
    named : bool
        Whether to write ``frequency`` below.
    sparse : bool
        Whether to label every second decade of many.
    """
    low, high = float(frequency_hz[0]), float(frequency_hz[-1])
    if low == high:
        low, high = low / 2, high * 2
    panel.set_xscale("log")
    panel.set_xlim(low, high)
    decades = np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    steps = np.array([1.0, 2.0, 5.0]) if np.log10(high / low) < 2 else np.array([1.0])
    near = 1 + 1e-9
    major = [t for d in decades for t in 10.0**d * steps if low / near <= t <= high * near]
    minor = [t for d in decades for t in 10.0**d * np.arange(1, 10) if low <= t <= high]
    if frequency_hz.size == 1:
        major, minor = [float(frequency_hz[0])], []
    elif len(major) < 2:
        major = sorted({low, *major, high})
    every = 2 if sparse and len(major) > 6 else 1
    panel.xaxis.set_major_locator(FixedLocator(major))
    panel.xaxis.set_major_formatter(
        FixedFormatter([frequency_text(t) if i % every == 0 else "" for i, t in enumerate(major)])
    )
    panel.xaxis.set_minor_locator(NullLocator())
    _draw_minor_ticks(panel, minor)
    panel.grid(True, which="major", axis="x")
    panel.set_axisbelow(True)
    if named:
        panel.set_xlabel("frequency", loc="right")


def _draw_minor_ticks(panel: Axes, places: Sequence[float]) -> None:
    """Draw minor ticks as one artist: matplotlib's own are three each, and cost half of a picture's time."""
    panel.scatter(
        list(places),
        [0.0] * len(places),
        s=4.0,
        marker=MarkerStyle(TICKDOWN),
        color=INK,
        linewidths=0.6,
        transform=panel.get_xaxis_transform(),
        clip_on=False,
    )


def level_axis(panel: Axes, levels: Sequence[FloatArray], name: str, steps: Sequence[float]) -> None:
    """Give a panel its vertical axis, with its name and unit written above it.

    Parameters
    ----------
    panel : Axes
        The panel.
    levels : sequence of ndarray
        What must be in view; values that are not finite do not count.
    name : str
        Name with unit, such as ``CMRR (dB)``.
    steps : sequence of float
        Tick distances allowed, ascending.
    """
    known = np.concatenate([level[np.isfinite(level)] for level in levels])
    low, high = (float(known.min()), float(known.max())) if known.size else (0.0, 0.0)
    least = steps[0] * 2
    if high - low < least:
        low, high = (low + high - least) / 2, (low + high + least) / 2
    step = next((s for s in steps if (high - low) / s <= 9), steps[-1])
    margin = 0.04 * (high - low)
    panel.set_ylim(low - margin, high + margin)
    panel.yaxis.set_major_locator(MultipleLocator(step))
    panel.tick_params(axis="y", length=0)
    panel.spines["left"].set_visible(False)
    panel.grid(True, which="major", axis="y")
    panel.text(
        0.0,
        1.0,
        name,
        transform=_above(panel),
        ha="left",
        va="bottom",
        color=INK,
        parse_math=False,
        gid="level-name",
    )


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
            transform=_above(panel, shift, at + place * HEADING_LINE),
            ha="left",
            va="bottom",
            fontweight=weight,
            fontsize=size,
            parse_math=False,
            gid="heading" if weight == "bold" else "heading-note",
        )


def _above(panel: Axes, right: float = -0.42, up: float = 0.07) -> Any:
    figure = panel.get_figure(root=True)
    return panel.transAxes + ScaledTranslation(right, up, figure.dpi_scale_trans)  # type: ignore[union-attr]


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
