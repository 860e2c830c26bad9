"""Curves over frequency, with a label at each curve.

Nothing here touches pyplot or its global state; the same arrays give the same picture.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from modepair.reports.case_curves import CaseCurves
from modepair.reports.end_labels import EndLabel, label_height, label_room, write_labels
from modepair.reports.pairs import FLOOR_VOLTS, BoolArray, FloatArray, ModePair
from modepair.reports.palette import HUES, CurveStyle, mix
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
    curves: CaseCurves,
    *,
    mask: Sequence[tuple[float, float]] = (),
    baseline: ModePair | None = None,
    measured: Sequence[Measured] = (),
) -> Figure:
    """Draw CMRR over frequency, all cases in one panel.

    Parameters
    ----------
    curves : CaseCurves
        What to draw.
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
    """
    pair, level_db = curves.pair, curves.pair.cmrr_db
    ends = _ends(curves, level_db)
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
    figure, ((panel,),) = make_panels(1, 1, label_room(ends), max(4.0, label_height(ends)), 6.6, curves.title)

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
    _draw(panel, curves, level_db, pair.above_floor)
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
def plot_gains(curves: CaseCurves) -> Figure:
    """Draw differential and common-mode gain, magnitude above phase.

    Parameters
    ----------
    curves : CaseCurves
        What to draw; of many cases those with the lowest and the highest CMRR are drawn and labelled.

    Returns
    -------
    matplotlib.figure.Figure
        Four panels over one frequency axis: A_dm at the left, A_cm at the right with a label at each curve;
        magnitude in dB, phase in degrees, unwrapped. A_cm below the numerical floor has no phase.
    """
    pair = curves.pair
    common_db = 20.0 * np.log10(np.maximum(np.abs(pair.common_gain), FLOOR_VOLTS))
    ends = _ends(curves, common_db, "below the floor", " CMRR")
    height = max(2.9, label_height(ends))
    figure, panels = make_panels(2, 2, label_room(ends), height, 4.3, curves.title, lower_height=2.2)
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
        _draw(upper, curves, gain_db, at_floor)
        _draw(lower, curves, phase_deg, nowhere)
        if at_floor.all():
            lower.text(
                0.5, 0.5, "below the numerical floor: no phase", transform=lower.transAxes, ha="center"
            )
    write_labels(panels[0][1], ends)
    return figure


def _phase_deg(gain: Any, hidden: BoolArray) -> FloatArray:
    phase = np.degrees(np.unwrap(np.angle(np.where(hidden, 1.0, gain)), axis=-1))
    first = np.argmax(~hidden, axis=-1)
    start = np.take_along_axis(phase, first[:, np.newaxis], axis=-1)
    # An inverted gain starts at 180 degrees, whichever side of the cut its rounding falls on.
    turns = np.ceil((start - 225.0) / 360.0) * 360.0
    result: FloatArray = np.where(hidden, np.nan, phase - turns)
    return result


def _draw(panel: Axes, curves: CaseCurves, level: FloatArray, at_floor: BoolArray) -> None:
    frequency_hz = curves.pair.frequency_hz
    marker = "o" if frequency_hz.size == 1 else ""
    if len(level) > MOST_CURVES:
        _draw_spread(panel, frequency_hz, level, curves.extremes)
        return
    width = 1.6 if len(level) <= 12 else 1.1
    for row, style in enumerate(curves.styles):
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


def _ends(
    curves: CaseCurves, level: FloatArray, bounded: str = "above the floor", of: str = ""
) -> list[EndLabel]:
    """Label curves, or the spread of many; `bounded` says of a level that it is a bound, `of` what is ranked."""
    if len(level) > MOST_CURVES:
        return _spread_ends(curves, level, of)
    always: BoolArray = np.asarray(curves.pair.above_floor.all(axis=1))
    ends = []
    for row, (text, style) in enumerate(zip(curves.texts, curves.styles, strict=True)):
        if always[row]:
            text = f"{text} ({bounded})" if text else bounded
        if text:
            order = tuple(np.round(level[row, ::-1], 2).tolist())
            ends.append(EndLabel(float(level[row, -1]), text, style.colour, style.dashes, order=order))
    return ends


def _spread_ends(curves: CaseCurves, level: FloatArray, of: str) -> list[EndLabel]:
    count, total = curves.count, curves.total
    drawn = f"all {count} cases" if total in (None, count) else f"{count} of {total} cases"
    touching = curves.pair.above_floor.any(axis=1)
    known = " below the floor" if touching.any() and not touching.all() else ""
    q50, q95 = np.quantile(level[:, -1], [0.5, 0.95])
    ends = [
        EndLabel(float(level[:, -1].max()), drawn, _ALL, width=8),
        EndLabel(float((q50 + q95) / 2), "5 % to 95 % of them", _MOST, width=8),
        EndLabel(float(q50), "median", _MEDIAN, width=1.8),
    ]
    for row, style, name in zip(
        curves.extremes, _EXTREMES, (f"lowest{of}", f"highest{of}{known}"), strict=True
    ):
        named = f"\n{curves.texts[row]}" if curves.texts[row] else ""
        text = f"{name}: case {curves.numbers[row]}{named}"
        ends.append(EndLabel(float(level[row, -1]), text, style.colour, style.dashes))
    return ends
