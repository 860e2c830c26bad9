"""Scales of a panel: its frequencies and its levels, each with ticks, grid and name.

Matplotlib's own axes take half of a picture's time: a tick is five artists, drawn and measured one by one. Here ticks
and grid are one artist each, and only their texts stand alone.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.collections import LineCollection
from matplotlib.markers import TICKDOWN, MarkerStyle
from matplotlib.ticker import NullLocator
from matplotlib.transforms import ScaledTranslation, Transform

from modepair.reports.pairs import FloatArray
from modepair.reports.panels import FAINT, INK, above_left
from modepair.reports.readings import frequency_text

# Points.
_MAJOR, _MINOR, _PAD, _NAME_DOWN = 4.0, 2.0, 3.5, 20.5


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
    _bare(panel.xaxis)
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
    across = panel.get_xaxis_transform()
    for places, size in ((minor, _MINOR), (major, _MAJOR)):
        _draw_ticks(panel, places, size, across)
    _draw_grid(panel, [[(t, 0.0), (t, 1.0)] for t in major], across)
    below = _moved(panel, across, 0.0, -_MAJOR - _PAD)
    for place in major[::every]:
        panel.text(place, 0.0, frequency_text(place), transform=below, ha="center", va="top", gid="frequency")
    if named:
        lower = _moved(panel, panel.transAxes, 0.0, -_NAME_DOWN)
        panel.text(1.0, 0.0, "frequency", transform=lower, ha="right", va="top", gid="frequency-name")


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
    low, high = low - margin, high + margin
    panel.set_ylim(low, high)
    _bare(panel.yaxis)
    panel.spines["left"].set_visible(False)
    across = panel.get_yaxis_transform()
    ticks = (np.arange(np.ceil(low / step), np.floor(high / step) + 1) * step + 0.0).tolist()
    _draw_grid(panel, [[(0.0, t), (1.0, t)] for t in ticks], across)
    beside = _moved(panel, across, -_PAD, 0.0)
    for tick in ticks:
        text = f"{tick:g}".replace("-", "−")
        panel.text(0.0, tick, text, transform=beside, ha="right", va="center_baseline", gid="level")
    panel.text(
        0.0,
        1.0,
        name,
        transform=above_left(panel),
        ha="left",
        va="bottom",
        parse_math=False,
        gid="level-name",
    )


def _bare(axis: Axis) -> None:
    """Take matplotlib's own ticks and names from an axis."""
    axis.set_major_locator(NullLocator())
    axis.set_minor_locator(NullLocator())
    axis.set_visible(False)


def _moved(panel: Axes, place: Transform, right: float, up: float) -> Transform:
    """Move a place by so many points."""
    return place + ScaledTranslation(right / 72, up / 72, panel.figure.dpi_scale_trans)


def _draw_grid(panel: Axes, lines: Sequence[Sequence[tuple[float, float]]], across: Transform) -> None:
    grid = LineCollection(lines, colors=FAINT, linewidths=0.6, transform=across, zorder=0.5, gid="grid")
    panel.add_collection(grid, autolim=False)


def _draw_ticks(panel: Axes, places: Sequence[float], size: float, across: Transform) -> None:
    panel.scatter(
        list(places),
        [0.0] * len(places),
        s=size**2,
        marker=MarkerStyle(TICKDOWN),
        color=INK,
        linewidths=0.6,
        transform=across,
        clip_on=False,
    )
