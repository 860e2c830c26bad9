"""Curves over frequency, with a label at each curve, as PNG and SVG.

Nothing here touches pyplot or its global state; the same arrays give the same bytes.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import Any, ParamSpec, TypeVar

import matplotlib as mpl
import matplotlib.style
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D
from matplotlib.ticker import FixedFormatter, FixedLocator, MultipleLocator, NullFormatter
from matplotlib.transforms import ScaledTranslation
from modepair.reports.axis_labels import case_texts, varying
from modepair.reports.pairs import FLOOR_VOLTS, BoolArray, FloatArray, ModePair
from modepair.reports.palette import HUES, CurveStyle, curve_styles, mix
from modepair.reports.placement import spread
from modepair.reports.readings import frequency_text

MOST_CURVES = 40
"""Cases beyond which their spread is drawn instead of each curve."""

P = ParamSpec("P")
R = TypeVar("R")

_INK = "#22262b"
_FAINT = "#dcdfe2"
_ZONE = "#efece6"
_BAND = HUES[0]
_LOOK: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "text.color": _INK,
    "axes.edgecolor": _INK,
    "axes.labelcolor": _INK,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "grid.color": _FAINT,
    "grid.linewidth": 0.6,
    "xtick.color": _INK,
    "ytick.color": _INK,
    "xtick.major.size": 4.0,
    "xtick.minor.size": 2.0,
    "hatch.linewidth": 0.5,
    "svg.hashsalt": "modepair",
    "svg.fonttype": "path",
    "figure.dpi": 100.0,
    "savefig.dpi": 160.0,
}

# Inches.
_LEFT, _BOTTOM, _TOP, _RIGHT = 0.62, 0.5, 0.62, 0.15
_SAMPLE, _TEXT_GAP = 0.3, 0.07


@dataclass(frozen=True)
class _EndLabel:
    """A text for the end of a curve: the level there, what to write, and a sample of the line."""

    level: float
    text: str
    colour: str
    dashes: tuple[float, ...] = ()
    width: float = 1.4
    order: tuple[float, ...] = ()


def _in_our_look(function: Callable[P, R]) -> Callable[P, R]:
    @wraps(function)
    def wrapped(*args: P.args, **kwargs: P.kwargs) -> R:
        with mpl.style.context(["default", _LOOK]):
            return function(*args, **kwargs)

    return wrapped


@_in_our_look
def plot_cmrr(
    pair: ModePair,
    labels: Mapping[str, Sequence[str]],
    *,
    title: str = "",
    case: Sequence[int] | None = None,
    total: int | None = None,
    rank_db: Sequence[float] | None = None,
    mask: Sequence[tuple[float, float]] = (),
    baseline: ModePair | None = None,
) -> Figure:
    """Draw CMRR over frequency, all cases in one panel.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), n at least 1.
    labels : mapping of str to sequence of str
        Axis path to one text per case, as from `modepair.reports.axis_labels.axis_columns`.
    title : str
        Text above the panel.
    case : sequence of int, optional
        Case numbers, 1 to n where not given; they name the lowest and the highest of many cases.
    total : int, optional
        Number of cases of which the pair holds a choice, where it does not hold all.
    rank_db : sequence of float, optional
        What makes a case the lowest or the highest of many, in dB; where not given, its lowest CMRR.
        A case above the numerical floor is never the highest unless all are.
    mask : sequence of (float, float)
        Least CMRR asked for: corners as frequency in Hz, ascending, and level in dB; straight between them
        over log f.
    baseline : ModePair, optional
        Earlier curves to draw behind, of the shape (m, F') or (F',).

    Returns
    -------
    matplotlib.figure.Figure
        Curves of up to `MOST_CURVES` cases, each labelled; of more the spread, the lowest and the highest.

    Raises
    ------
    ValueError
        Where the pair is not two-dimensional or the labels do not match it in number.
    """
    texts, styles = _names_and_styles(pair, labels)
    level_db = pair.cmrr_db
    extremes = _extremes(pair, rank_db)
    numbers = list(case) if case is not None else list(range(1, len(level_db) + 1))
    if len(level_db) <= MOST_CURVES:
        ends = _curve_ends(level_db, texts, styles, _always(pair.above_floor))
    else:
        ends = _spread_ends(level_db, pair, extremes, texts, numbers, total)
    if baseline is not None:
        ends.append(
            _EndLabel(
                float(np.median(np.atleast_2d(baseline.cmrr_db)[:, -1])), "baseline", "#cdd0d4", width=4
            )
        )
    if mask:
        ends.append(_EndLabel(mask[-1][1], "least CMRR asked for", _INK, width=2.2))
    touching = pair.above_floor.any(axis=1)
    floor_db = pair.floor_db[touching].min(axis=0) if touching.any() else None
    figure, ((panel,),) = _panels(1, 1, _label_room(ends), max(4.0, _label_height(ends)), 6.6, title)

    shown = [level_db]
    if floor_db is not None:
        shown.append(floor_db[np.newaxis] + 14.0)
    if baseline is not None:
        shown.append(np.atleast_2d(baseline.cmrr_db))
    if mask:
        shown.append(np.array([[db for _, db in mask]]))
    _level_axis(panel, shown, "CMRR (dB)", steps=(1, 2, 5, 10, 20, 40))
    _frequency_axis(panel, pair.frequency_hz)
    if floor_db is not None:
        _draw_floor(panel, pair.frequency_hz, floor_db, "above the numerical floor of the solve", up=True)
    if mask:
        _draw_mask(panel, mask)
    if baseline is not None:
        before_db = np.atleast_2d(baseline.cmrr_db)
        rows = (
            before_db
            if len(before_db) <= MOST_CURVES
            else np.array([before_db.min(axis=0), before_db.max(axis=0)])
        )
        for row in rows:
            panel.plot(baseline.frequency_hz, row, color="#cdd0d4", linewidth=4, zorder=1.5, gid="baseline")
    _draw(panel, pair.frequency_hz, level_db, styles, pair.above_floor, extremes)
    _write_ends(panel, ends)
    return figure


@_in_our_look
def plot_gains(
    pair: ModePair,
    labels: Mapping[str, Sequence[str]],
    *,
    title: str = "",
    case: Sequence[int] | None = None,
    total: int | None = None,
    rank_db: Sequence[float] | None = None,
) -> Figure:
    """Draw differential and common-mode gain, magnitude above phase.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), n at least 1.
    labels : mapping of str to sequence of str
        Axis path to one text per case, as from `modepair.reports.axis_labels.axis_columns`.
    title : str
        Text above the panels.
    case : sequence of int, optional
        Case numbers, 1 to n where not given.
    total : int, optional
        As for `plot_cmrr`.
    rank_db : sequence of float, optional
        As for `plot_cmrr`: the cases with the lowest and highest CMRR of many are drawn and labelled.

    Returns
    -------
    matplotlib.figure.Figure
        Four panels over one frequency axis: A_dm at the left, A_cm at the right with a label at each curve;
        magnitude in dB, phase in degrees, unwrapped. A_cm below the numerical floor has no phase.

    Raises
    ------
    ValueError
        Where the pair is not two-dimensional or the labels do not match it in number.
    """
    texts, styles = _names_and_styles(pair, labels)
    numbers = list(case) if case is not None else list(range(1, len(styles) + 1))
    common_db = 20.0 * np.log10(np.maximum(np.abs(pair.common_gain), FLOOR_VOLTS))
    extremes = _extremes(pair, rank_db)
    if len(styles) <= MOST_CURVES:
        ends = _curve_ends(common_db, texts, styles, _always(pair.above_floor), "below the floor")
    else:
        ends = _spread_ends(common_db, pair, extremes, texts, numbers, total, " CMRR")
    height = max(2.9, _label_height(ends))
    figure, panels = _panels(2, 2, _label_room(ends), height, 4.3, title, lower_height=2.2)
    touching = bool(pair.above_floor.any())
    nowhere = np.zeros_like(pair.above_floor)
    sides = (
        (pair.differential_gain, pair.differential_gain_db, "differential gain A_dm", nowhere),
        (pair.common_gain, common_db, "common-mode gain A_cm", pair.above_floor),
    )
    for column, (gain, gain_db, name, at_floor) in enumerate(sides):
        upper, lower = panels[0][column], panels[1][column]
        floored = touching and column == 1
        room = [gain_db, 20.0 * np.log10(FLOOR_VOLTS) + np.array([-14.0, 20.0])] if floored else [gain_db]
        _level_axis(upper, room, f"{name} (dB)", steps=(1, 2, 5, 10, 20, 40))
        phase_deg = _phase_deg(gain, at_floor)
        _level_axis(
            lower, [phase_deg], f"phase of {name.rsplit(' ', 1)[1]} (degrees)", steps=(15, 45, 90, 180)
        )
        for panel in (upper, lower):
            _frequency_axis(panel, pair.frequency_hz, named=panel is lower, sparse=True)
        if floored:
            floor_db = np.full(pair.frequency_hz.shape, 20.0 * np.log10(FLOOR_VOLTS))
            _draw_floor(upper, pair.frequency_hz, floor_db, "below the numerical floor", up=False)
        _draw(upper, pair.frequency_hz, gain_db, styles, at_floor, extremes)
        _draw(lower, pair.frequency_hz, phase_deg, styles, nowhere, extremes)
        if at_floor.all():
            lower.text(
                0.5, 0.5, "below the numerical floor: no phase", transform=lower.transAxes, ha="center"
            )
    _write_ends(panels[0][1], ends)
    return figure


@_in_our_look
def write_plot(figure: Figure, stem: Path) -> tuple[Path, Path]:
    """Write a figure as PNG and SVG.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        As from `plot_cmrr` and `plot_gains`.
    stem : Path
        Path without a suffix.

    Returns
    -------
    tuple of Path
        The PNG and the SVG file. The same curves give the same bytes: no date, no random identifiers.
    """
    png, svg = stem.with_name(f"{stem.name}.png"), stem.with_name(f"{stem.name}.svg")
    figure.savefig(png, metadata={"Software": "modepair"})
    figure.savefig(svg, metadata={"Date": None, "Creator": "modepair"})
    return png, svg


def _names_and_styles(
    pair: ModePair, labels: Mapping[str, Sequence[str]]
) -> tuple[list[str], list[CurveStyle]]:
    if pair.common_gain.ndim != 2 or not len(pair.common_gain):
        raise ValueError(
            f"plots take gains of the shape (n, F) with n at least 1, not {pair.common_gain.shape}"
        )
    count = len(pair.common_gain)
    for path, column in labels.items():
        if len(column) != count:
            raise ValueError(f"labels of {path} must be one per case, {count}, not {len(column)}")
    vary, _ = varying(labels)
    keys = list(zip(*vary.values(), strict=True)) if vary else [()] * count
    return case_texts(labels) or [""] * count, curve_styles(keys)


def _always(at_floor: BoolArray) -> BoolArray:
    rows: BoolArray = np.asarray(at_floor.all(axis=1))
    return rows


def _extremes(pair: ModePair, rank_db: Sequence[float] | None) -> tuple[int, int]:
    """Rows of the lowest and the highest case; one that touches the floor is the highest only if all do."""
    rank = np.asarray(pair.cmrr_db.min(axis=1) if rank_db is None else rank_db, dtype=np.float64)
    at_floor = pair.above_floor.any(axis=1)
    known = np.where(at_floor, -np.inf, rank) if not at_floor.all() else rank
    return int(np.argmin(rank)), int(np.argmax(known))


def _phase_deg(gain: Any, hidden: BoolArray) -> FloatArray:
    phase = np.degrees(np.unwrap(np.angle(np.where(hidden, 1.0, gain)), axis=-1))
    first = np.argmax(~hidden, axis=-1)
    start = np.take_along_axis(phase, first[:, np.newaxis], axis=-1)
    # An inverted gain starts at 180 degrees, whichever side of the cut its rounding falls on.
    turns = np.ceil((start - 225.0) / 360.0) * 360.0
    result: FloatArray = np.where(hidden, np.nan, phase - turns)
    return result


def _panels(
    rows: int, columns: int, room: float, height: float, width: float, title: str, lower_height: float = 0.0
) -> tuple[Figure, list[list[Axes]]]:
    """Lay out panels in inches, with room for labels right of the last column."""
    between_rows, between_columns = 0.62, 0.72
    heights = [height, *[lower_height] * (rows - 1)]
    total_width = _LEFT + columns * width + (columns - 1) * between_columns + room + _RIGHT
    total_height = _BOTTOM + sum(heights) + (rows - 1) * between_rows + _TOP
    figure = Figure(figsize=(total_width, total_height))
    FigureCanvasAgg(figure)
    panels = []
    top = total_height - _TOP
    for row_height in heights:
        top -= row_height
        panels.append(
            [
                figure.add_axes(
                    (
                        (_LEFT + column * (width + between_columns)) / total_width,
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
    return figure, panels


def _frequency_axis(panel: Axes, frequency_hz: FloatArray, named: bool = True, sparse: bool = False) -> None:
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
    panel.xaxis.set_minor_locator(FixedLocator(minor))
    panel.xaxis.set_minor_formatter(NullFormatter())
    panel.grid(True, which="major", axis="x")
    panel.set_axisbelow(True)
    if named:
        panel.set_xlabel("frequency", loc="right")


def _level_axis(panel: Axes, levels: Sequence[FloatArray], name: str, steps: Sequence[float]) -> None:
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
        color=_INK,
        parse_math=False,
        gid="level-name",
    )


def _above(panel: Axes) -> Any:
    figure = panel.get_figure(root=True)
    return panel.transAxes + ScaledTranslation(-0.42, 0.07, figure.dpi_scale_trans)  # type: ignore[union-attr]


def _draw(
    panel: Axes,
    frequency_hz: FloatArray,
    level: FloatArray,
    styles: Sequence[CurveStyle],
    at_floor: BoolArray,
    extremes: tuple[int, int],
) -> None:
    marker = "o" if frequency_hz.size == 1 else ""
    if len(level) > MOST_CURVES:
        _draw_spread(panel, frequency_hz, level, extremes)
        return
    width = 1.6 if len(level) <= 12 else 1.1
    for row, style in enumerate(styles):
        line = Line2D(
            frequency_hz,
            np.where(at_floor[row], np.nan, level[row]),
            color=style.colour,
            linewidth=width,
            marker=marker,
            gid=f"curve-{row + 1}",
        )
        if style.dashes:
            line.set_dashes(style.dashes)
        panel.add_line(line)
        if at_floor[row].any():
            stretch = at_floor[row].copy()
            stretch[:-1] |= at_floor[row, 1:]
            stretch[1:] |= at_floor[row, :-1]
            bound = np.where(stretch, level[row], np.nan)
            panel.plot(
                frequency_hz, bound, color=style.colour, linewidth=0.7, alpha=0.7, gid=f"bound-{row + 1}"
            )


def _draw_spread(panel: Axes, frequency_hz: FloatArray, level: FloatArray, extremes: tuple[int, int]) -> None:
    unknown = np.isnan(level).all(axis=0)
    spread_at = np.nanquantile(np.where(unknown, 0.0, level), [0.0, 0.05, 0.5, 0.95, 1.0], axis=0)
    low, q05, q50, q95, high = np.where(unknown, np.nan, spread_at)
    panel.fill_between(
        frequency_hz, low, high, color=mix(_BAND, "#ffffff", 0.82), linewidth=0, gid="all-cases"
    )
    panel.fill_between(
        frequency_hz, q05, q95, color=mix(_BAND, "#ffffff", 0.55), linewidth=0, gid="most-cases"
    )
    panel.plot(frequency_hz, q50, color=_BAND, linewidth=1.8, gid="median")
    for row, style, name in zip(extremes, _EXTREME_STYLES, ("lowest", "highest"), strict=True):
        line = Line2D(frequency_hz, level[row], color=style.colour, linewidth=1.4, gid=name)
        if style.dashes:
            line.set_dashes(style.dashes)
        panel.add_line(line)


_EXTREME_STYLES = (CurveStyle(HUES[1]), CurveStyle(HUES[2], (5.0, 2.0)))


def _draw_floor(panel: Axes, frequency_hz: FloatArray, floor_db: FloatArray, text: str, up: bool) -> None:
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


def _draw_mask(panel: Axes, mask: Sequence[tuple[float, float]]) -> None:
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
    panel.plot(frequency_hz, level_db, color=_INK, linewidth=2.2, zorder=1.8, gid="mask")


def _curve_ends(
    level: FloatArray,
    texts: Sequence[str],
    styles: Sequence[CurveStyle],
    bounded: BoolArray,
    note: str = "above the floor",
) -> list[_EndLabel]:
    ends = []
    for row, (text, style) in enumerate(zip(texts, styles, strict=True)):
        if bounded[row]:
            text = f"{text} ({note})" if text else note
        if text:
            order = tuple(np.round(level[row, ::-1], 2).tolist())
            ends.append(_EndLabel(float(level[row, -1]), text, style.colour, style.dashes, order=order))
    return ends


def _spread_ends(
    level: FloatArray,
    pair: ModePair,
    extremes: tuple[int, int],
    texts: Sequence[str],
    case: Sequence[int],
    total: int | None,
    of: str = "",
) -> list[_EndLabel]:
    count = len(level)
    drawn = f"all {count} cases" if total in (None, count) else f"{count} of {total} cases"
    touching = pair.above_floor.any(axis=1)
    known = " below the floor" if touching.any() and not touching.all() else ""
    q50, q95 = np.quantile(level[:, -1], [0.5, 0.95])
    ends = [
        _EndLabel(float(level[:, -1].max()), drawn, mix(_BAND, "#ffffff", 0.82), width=8),
        _EndLabel(float((q50 + q95) / 2), "5 % to 95 % of them", mix(_BAND, "#ffffff", 0.55), width=8),
        _EndLabel(float(q50), "median", _BAND, width=1.8),
    ]
    for row, style, name in zip(
        extremes, _EXTREME_STYLES, (f"lowest{of}", f"highest{of}{known}"), strict=True
    ):
        text = f"{name}: case {case[row]}" + (f"\n{texts[row]}" if texts[row] else "")
        ends.append(_EndLabel(float(level[row, -1]), text, style.colour, style.dashes))
    return ends


def _leader(ends: Sequence[_EndLabel]) -> float:
    """Inches from the ends of the curves to the labels: the more labels fan out, the more."""
    return 0.24 if len(ends) <= 12 else 0.5


def _label_size(ends: Sequence[_EndLabel]) -> float:
    return 8.5 if len(ends) <= 16 else 7.0


def _label_extent(ends: Sequence[_EndLabel]) -> list[tuple[float, float]]:
    """Width and height of each label in inches."""
    size = _label_size(ends)
    canvas = FigureCanvasAgg(Figure(dpi=100))
    renderer = canvas.get_renderer()  # type: ignore[no-untyped-call]
    font = FontProperties(family="DejaVu Sans", size=size)
    extents = []
    for end in ends:
        lines = end.text.split("\n")
        width = max(renderer.get_text_width_height_descent(line, font, False)[0] for line in lines) / 100
        extents.append((width, len(lines) * size * 1.3 / 72))
    return extents


def _label_room(ends: Sequence[_EndLabel]) -> float:
    if not ends:
        return 0.2
    return _leader(ends) + _SAMPLE + _TEXT_GAP + max(width for width, _ in _label_extent(ends)) + 0.05


def _label_height(ends: Sequence[_EndLabel]) -> float:
    return sum(height for _, height in _label_extent(ends)) * 1.02 if ends else 0.0


def _write_ends(panel: Axes, ends: Sequence[_EndLabel]) -> None:
    """Write the labels right of a panel, each joined to the end of its curve by a line."""
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
                color=end.colour if end.width < 6 else _FAINT,
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
