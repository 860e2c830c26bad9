"""Labels at the ends of curves: what they say, how much room they take, how they join their curves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, lru_cache

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import RendererAgg
from matplotlib.collections import LineCollection
from matplotlib.font_manager import FontProperties

from modepair.reports.panels import FAINT
from modepair.reports.placement import spread

# Inches.
_SAMPLE, _TEXT_GAP = 0.3, 0.07
_RULER_DPI = 100.0


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


@cache
def _ruler() -> RendererAgg:
    return RendererAgg(1, 1, _RULER_DPI)  # type: ignore[no-untyped-call]


@lru_cache(4096)
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
    font = FontProperties(family="DejaVu Sans", size=size)
    width = _ruler().get_text_width_height_descent(text, font, False)[0]  # type: ignore[no-untyped-call]
    return float(width) / _RULER_DPI


def _label_heights(ends: Sequence[EndLabel]) -> list[float]:
    """Height of each label in inches."""
    size = _label_size(ends)
    return [(end.text.count("\n") + 1) * size * 1.3 / 72 for end in ends]


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
    size = _label_size(ends)
    widest = max(text_width(line, size) for end in ends for line in end.text.split("\n"))
    return _leader(ends) + _SAMPLE + _TEXT_GAP + widest + 0.05


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
    return sum(_label_heights(ends)) * 1.02


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
    heights = _label_heights(ordered)
    slack = max(0.0, sum(heights) - height)
    centres = spread(at, heights, bottom - slack / 2, bottom + height + slack / 2)
    knee = right + _leader(ends)
    inches = figure.dpi_scale_trans
    # Two artists for all labels: one of their own for each takes several times as long to draw.
    figure.add_artist(
        LineCollection(
            [
                [(right, start), (right + 0.04, start), (knee, centre)]
                for start, centre in zip(at, centres, strict=True)
            ],
            colors=[end.colour if end.width < 6 else FAINT for end in ordered],
            linewidths=0.6,
            transform=inches,
            gid="leaders",
        )
    )
    figure.add_artist(
        LineCollection(
            [[(knee, centre), (knee + _SAMPLE, centre)] for centre in centres],
            colors=[end.colour for end in ordered],
            linewidths=[end.width for end in ordered],
            linestyles=[(0.0, end.dashes or None) for end in ordered],
            capstyle="butt",
            transform=inches,
            gid="samples",
        )
    )
    for end, centre in zip(ordered, centres, strict=True):
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
