"""Curves over frequency, with a label at each curve.

Nothing here touches pyplot or its global state; the same arrays give the same picture.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from modepair.reports.axis_labels import case_texts, varying
from modepair.reports.end_labels import EndLabel, label_height, label_room, write_labels
from modepair.reports.pairs import FLOOR_VOLTS, BoolArray, FloatArray, ModePair
from modepair.reports.palette import HUES, CurveStyle, curve_styles, mix
from modepair.reports.panels import (
    INK,
    draw_floor,
    draw_mask,
    in_our_look,
    make_panels,
)
from modepair.reports.scales import frequency_axis, level_axis

if TYPE_CHECKING:
    from modepair.reports.differences import Measured

MOST_CURVES = 40
"""Cases beyond which their spread is drawn instead of each curve."""

_ALL, _MOST, _MEDIAN = mix(HUES[0], "#ffffff", 0.82), mix(HUES[0], "#ffffff", 0.55), HUES[0]
_EXTREMES = (CurveStyle(HUES[1]), CurveStyle(HUES[3], (5.0, 2.0)))
_MARKERS, _POINTS = "oDs^v", (0.8, 1.6)
_LEVEL_STEPS_DB = (1, 2, 5, 10, 20, 40)
_PHASE_STEPS_DEG = (15, 45, 90, 180)


@in_our_look
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
    measured: Sequence[Measured] = (),
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
    measured : sequence of Measured
        Measurements to lay over the curves, as points; those outside the solved band are left out.

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
            EndLabel(float(np.median(np.atleast_2d(baseline.cmrr_db)[:, -1])), "baseline", "#cdd0d4", width=4)
        )
    if mask:
        ends.append(EndLabel(mask[-1][1], "least CMRR asked for", INK, width=2.2))
    points = [_within(one, pair.frequency_hz) for one in measured]
    ends += [
        EndLabel(float(level[-1]), f"measured: {name}", INK, _POINTS, width=3.0)
        for name, _, level in points
        if level.size
    ]
    touching = pair.above_floor.any(axis=1)
    floor_db = pair.floor_db[touching].min(axis=0) if touching.any() else None
    figure, ((panel,),) = make_panels(1, 1, label_room(ends), max(4.0, label_height(ends)), 6.6, title)

    shown = [level_db]
    if floor_db is not None:
        shown.append(floor_db[np.newaxis] + 14.0)
    if baseline is not None:
        shown.append(np.atleast_2d(baseline.cmrr_db))
    if mask:
        shown.append(np.array([[db for _, db in mask]]))
    shown += [level for _, _, level in points if level.size]
    level_axis(panel, shown, "CMRR (dB)", steps=_LEVEL_STEPS_DB)
    frequency_axis(panel, pair.frequency_hz)
    if floor_db is not None:
        draw_floor(panel, pair.frequency_hz, floor_db, "above the numerical floor of the solve", up=True)
    if mask:
        draw_mask(panel, mask)
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
    for index, (_, at_hz, level) in enumerate(points):
        panel.plot(
            at_hz,
            level,
            linestyle="none",
            marker=_MARKERS[index % len(_MARKERS)],
            markersize=5,
            markerfacecolor="white",
            markeredgecolor=INK,
            markeredgewidth=1.1,
            zorder=4,
            gid=f"measured-{index + 1}",
        )
    write_labels(panel, ends)
    return figure


def _within(measured: Measured, frequency_hz: FloatArray) -> tuple[str, FloatArray, FloatArray]:
    """Name, frequencies and levels of a measurement, as far as it lies in the solved band."""
    near = 1 + 1e-9
    inside = (measured.frequency_hz >= frequency_hz[0] / near) & (
        measured.frequency_hz <= frequency_hz[-1] * near
    )
    return measured.name, measured.frequency_hz[inside], measured.cmrr_db[inside]


@in_our_look
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
    height = max(2.9, label_height(ends))
    figure, panels = make_panels(2, 2, label_room(ends), height, 4.3, title, lower_height=2.2)
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
        level_axis(upper, room, f"{name} (dB)", steps=_LEVEL_STEPS_DB)
        phase_deg = _phase_deg(gain, at_floor)
        level_axis(lower, [phase_deg], f"phase of {name.rsplit(' ', 1)[1]} (degrees)", steps=_PHASE_STEPS_DEG)
        for panel in (upper, lower):
            frequency_axis(panel, pair.frequency_hz, named=panel is lower, sparse=True)
        if floored:
            floor_db = np.full(pair.frequency_hz.shape, 20.0 * np.log10(FLOOR_VOLTS))
            draw_floor(upper, pair.frequency_hz, floor_db, "below the numerical floor", up=False)
        _draw(upper, pair.frequency_hz, gain_db, styles, at_floor, extremes)
        _draw(lower, pair.frequency_hz, phase_deg, styles, nowhere, extremes)
        if at_floor.all():
            lower.text(
                0.5, 0.5, "below the numerical floor: no phase", transform=lower.transAxes, ha="center"
            )
    write_labels(panels[0][1], ends)
    return figure


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
    panel.fill_between(frequency_hz, low, high, color=_ALL, linewidth=0, gid="all-cases")
    panel.fill_between(frequency_hz, q05, q95, color=_MOST, linewidth=0, gid="most-cases")
    panel.plot(frequency_hz, q50, color=_MEDIAN, linewidth=1.8, gid="median")
    for row, style, name in zip(extremes, _EXTREMES, ("lowest", "highest"), strict=True):
        line = Line2D(frequency_hz, level[row], color=style.colour, linewidth=1.4, gid=name)
        if style.dashes:
            line.set_dashes(style.dashes)
        panel.add_line(line)


def _curve_ends(
    level: FloatArray,
    texts: Sequence[str],
    styles: Sequence[CurveStyle],
    bounded: BoolArray,
    note: str = "above the floor",
) -> list[EndLabel]:
    ends = []
    for row, (text, style) in enumerate(zip(texts, styles, strict=True)):
        if bounded[row]:
            text = f"{text} ({note})" if text else note
        if text:
            order = tuple(np.round(level[row, ::-1], 2).tolist())
            ends.append(EndLabel(float(level[row, -1]), text, style.colour, style.dashes, order=order))
    return ends


def _spread_ends(
    level: FloatArray,
    pair: ModePair,
    extremes: tuple[int, int],
    texts: Sequence[str],
    case: Sequence[int],
    total: int | None,
    of: str = "",
) -> list[EndLabel]:
    count = len(level)
    drawn = f"all {count} cases" if total in (None, count) else f"{count} of {total} cases"
    touching = pair.above_floor.any(axis=1)
    known = " below the floor" if touching.any() and not touching.all() else ""
    q50, q95 = np.quantile(level[:, -1], [0.5, 0.95])
    ends = [
        EndLabel(float(level[:, -1].max()), drawn, _ALL, width=8),
        EndLabel(float((q50 + q95) / 2), "5 % to 95 % of them", _MOST, width=8),
        EndLabel(float(q50), "median", _MEDIAN, width=1.8),
    ]
    for row, style, name in zip(extremes, _EXTREMES, (f"lowest{of}", f"highest{of}{known}"), strict=True):
        text = f"{name}: case {case[row]}" + (f"\n{texts[row]}" if texts[row] else "")
        ends.append(EndLabel(float(level[row, -1]), text, style.colour, style.dashes))
    return ends
