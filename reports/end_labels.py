"""Labels at the ends of curves: what they say, how much room they take, how they join their curves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D

from modepair.reports.panels import FAINT
from modepair.reports.placement import spread

# Inches.
_SAMPLE, _TEXT_GAP = 0.3, 0.07


@dataclass(frozen=True)
class EndLabel:
    """A text for the end of a curve: the level there, what to write, and a sample of the line.

    Parameters
    ----------
    level : float
        Level at the end of the curve, in the panel's unit.
    text : str
        What to write, in one line or more.
    colour : str
        Of the curve, ``#rrggbb``.
    dashes : tuple of float
        Of the curve, in line widths; empty for a solid line.
    width : float
        Of the sample, in points.
    order : tuple of float
        What orders labels of one level: the curve's levels, last first.
    """

    level: float
    text: str
    colour: str
    dashes: tuple[float, ...] = ()
    width: float = 1.4
    order: tuple[float, ...] = ()


def _leader(ends: Sequence[EndLabel]) -> float:
    """Inches from the ends of the curves to the labels: the more labels fan out, the more."""
    return 0.24 if len(ends) <= 12 else 0.5


def _label_size(ends: Sequence[EndLabel]) -> float:
    return 8.5 if len(ends) <= 16 else 7.0


def text_width(text: str, size: float) -> float:
    """Measure a line of text.

    Parameters
    ----------
    text : str
        One line.
    size : float
        Of the type, in points.

    Returns
    -------
    float
        Inches.
    """
    renderer = FigureCanvasAgg(Figure(dpi=100)).get_renderer()  # type: ignore[no-untyped-call]
    font = FontProperties(family="DejaVu Sans", size=size)
    return float(renderer.get_text_width_height_descent(text, font, False)[0]) / 100


def _label_extent(ends: Sequence[EndLabel]) -> list[tuple[float, float]]:
    """Width and height of each label in inches."""
    size = _label_size(ends)
    extents = []
    for end in ends:
        lines = end.text.split("\n")
        width = max(text_width(line, size) for line in lines)
        extents.append((width, len(lines) * size * 1.3 / 72))
    return extents


def label_room(ends: Sequence[EndLabel]) -> float:
    """Tell the room that labels need right of a panel.

    Parameters
    ----------
    ends : sequence of EndLabel
        The labels.

    Returns
    -------
    float
        Inches.
    """
    if not ends:
        return 0.2
    return _leader(ends) + _SAMPLE + _TEXT_GAP + max(width for width, _ in _label_extent(ends)) + 0.05


def label_height(ends: Sequence[EndLabel]) -> float:
    """Tell the height that labels need above one another.

    Parameters
    ----------
    ends : sequence of EndLabel
        The labels.

    Returns
    -------
    float
        Inches.
    """
    return sum(height for _, height in _label_extent(ends)) * 1.02 if ends else 0.0


def write_labels(panel: Axes, ends: Sequence[EndLabel]) -> None:
    """Write labels right of a panel, each joined to the end of its curve by a line.

    Parameters
    ----------
    panel : Axes
        A panel of a figure, with its axes set.
    ends : sequence of EndLabel
        The labels, in any order.

    Raises
    ------
    ValueError
        Where the panel belongs to no figure.
    """
    if not ends:
        return
    figure = panel.get_figure(root=True)
    if figure is None:
        raise ValueError("the panel must belong to a figure")
    total_width, total_height = figure.get_size_inches()
    place = panel.get_position()
    low, high = panel.get_ylim()
    bottom, height = place.y0 * total_height, place.height * total_height
    right = place.x1 * total_width
    ordered = sorted(ends, key=lambda end: (end.level, end.order))
    at = [bottom + height * float(np.clip((end.level - low) / (high - low), 0.0, 1.0)) for end in ordered]
    heights = [extent[1] for extent in _label_extent(ordered)]
    slack = max(0.0, sum(heights) - height)
    centres = spread(at, heights, bottom - slack / 2, bottom + height + slack / 2)
    for end, start, centre in zip(ordered, at, centres, strict=True):
        knee = right + _leader(ends)
        leader = [(right, start), (right + 0.04, start), (knee, centre)]
        figure.add_artist(
            Line2D(
                [x / total_width for x, _ in leader],
                [y / total_height for _, y in leader],
                color=end.colour if end.width < 6 else FAINT,
                linewidth=0.6,
            )
        )
        sample = Line2D(
            [knee / total_width, (knee + _SAMPLE) / total_width],
            [centre / total_height] * 2,
            color=end.colour,
            linewidth=end.width,
            solid_capstyle="butt",
        )
        if end.dashes:
            sample.set_dashes(end.dashes)
        figure.add_artist(sample)
        figure.text(
            (knee + _SAMPLE + _TEXT_GAP) / total_width,
            centre / total_height,
            end.text,
            fontsize=_label_size(ends),
            va="center",
            linespacing=1.15,
            parse_math=False,
            gid="curve-label",
        )
