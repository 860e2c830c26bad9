"""Interactive curves for the page: CMRR over frequency, and below it what reaches the output."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from modepair.reports.pairs import FLOOR_VOLTS, BoolArray, FloatArray, ModePair
from modepair.reports.palette import HUES, CurveStyle, mix
from modepair.reports.readings import decibel_text, frequency_text

MOST_POINTS = 400
"""Points of a curve beyond which it is thinned out."""

INK = "#22262b"
GRID = "#e3e5e7"
POINTS = ("measured", "mark")
"""Kinds of overlays that are points, drawn above the curves."""

_ROOM = 0.012
_FLOOR_DB = 20.0 * float(np.log10(FLOOR_VOLTS))


@dataclass(frozen=True, eq=False)
class PageCurve:
    """A curve of the page.

    Parameters
    ----------
    name : str
        What the pointer shows.
    keys : tuple of (str, str)
        Group and value of each button that shows or hides it.
    style : CurveStyle
        How it is drawn.
    pair : ModePair
        Its gains, shape (F,).
    asked_db : ndarray, shape (F,), optional
        The mask's level, NaN outside it.
    band_db : tuple of ndarray, optional
        Lowest and highest of most boards drawn, shape (F,) each.
    """

    name: str
    keys: tuple[tuple[str, str], ...]
    style: CurveStyle
    pair: ModePair
    asked_db: FloatArray | None = None
    band_db: tuple[FloatArray, FloatArray] | None = None


@dataclass(frozen=True, eq=False)
class PageOverlay:
    """What is laid over the curves of the page.

    Parameters
    ----------
    name : str
        What the pointer and its button show.
    kind : {"mask", "baseline", "spread", "measured", "mark"}
        How it is drawn.
    frequency_hz : ndarray, shape (m,)
        Frequencies, Hz.
    level_db : ndarray, shape (m,)
        CMRR, dB; of a spread, its lower edge.
    upper_db : ndarray, shape (m,), optional
        Upper edge of a spread.
    """

    name: str
    kind: str
    frequency_hz: FloatArray
    level_db: FloatArray
    upper_db: FloatArray | None = None


def thinned(frequency_hz: FloatArray, keep_hz: Sequence[float]) -> BoolArray:
    """Choose the points of a curve that a page draws.

    Parameters
    ----------
    frequency_hz : ndarray, shape (F,)
        Solved frequencies, Hz.
    keep_hz : sequence of float
        Frequencies that stay: spots, corners of the mask, where candidates are decided.

    Returns
    -------
    ndarray of bool, shape (F,)
        All of up to `MOST_POINTS`; of more, so many evenly spaced ones and those that stay.
    """
    count = frequency_hz.size
    if count <= MOST_POINTS:
        return np.ones(count, dtype=np.bool_)
    chosen = np.zeros(count, dtype=np.bool_)
    chosen[np.unique(np.linspace(0, count - 1, MOST_POINTS).round().astype(int))] = True
    for hz in keep_hz:
        chosen[int(np.argmin(np.abs(frequency_hz - hz)))] = True
    return chosen


def tick_texts(low_hz: float, high_hz: float) -> dict[float, str]:
    """Place the ticks of a frequency axis: whole decades, and 2 and 5 in between where there are few.

    Parameters
    ----------
    low_hz, high_hz : float
        Ends of the axis, Hz.

    Returns
    -------
    dict of float to str
        Frequency to its text with an SI prefix.
    """
    decades = range(int(np.floor(np.log10(low_hz))), int(np.ceil(np.log10(high_hz))) + 1)
    steps = (1, 2, 5) if np.log10(high_hz / low_hz) < 3 else (1,)
    near = 1 + 1e-9
    ticks = [step * 10.0**decade for decade in decades for step in steps]
    return {tick: frequency_text(tick) for tick in ticks if low_hz / near <= tick <= high_hz * near}


def curves_item(
    curves: Sequence[PageCurve], overlays: Sequence[PageOverlay], keep_hz: Sequence[float] = ()
) -> dict[str, Any]:
    """Make the interactive curves.

    Parameters
    ----------
    curves : sequence of PageCurve
        At least one.
    overlays : sequence of PageOverlay
        Mask, baseline, measurements, spread of cases.
    keep_hz : sequence of float
        Frequencies that are never thinned out.

    Returns
    -------
    dict
        A document for bokeh's `embed_item`. Every part of a curve has the tag ``curve-1`` and so on, of an overlay
        ``overlay-1``, so that a page can show and hide them. What has a name can be read by the pointer: the
        columns ``f`` and ``t`` of its source say what is there.

    Raises
    ------
    ValueError
        Where there is no curve.
    """
    from bokeh.embed import json_item
    from bokeh.layouts import column
    from bokeh.models import Line, Scatter

    if not curves:
        raise ValueError("there must be a curve to draw")
    low = min(float(curve.pair.frequency_hz[0]) for curve in curves)
    high = max(float(curve.pair.frequency_hz[-1]) for curve in curves)
    upper = _panel("cmrr", low, high, "CMRR (dB)", 460)
    lower = _panel("common", low, high, "common-mode gain A_cm (dB)", 240)
    lower.x_range = upper.x_range
    levels: list[FloatArray] = []
    for index, overlay in enumerate(overlays, start=1):
        levels += [overlay.level_db] if overlay.upper_db is None else [overlay.level_db, overlay.upper_db]
        if overlay.kind not in POINTS:
            _draw_overlay(upper, overlay, index)
    commons: list[FloatArray] = []
    for index, curve in enumerate(curves, start=1):
        source, level_db, common_db = _source(curve, keep_hz)
        levels.append(level_db)
        commons.append(common_db)
        tag = f"curve-{index}"
        look: dict[str, Any] = {"line_color": curve.style.colour, "line_dash": _dash(curve.style)}
        if curve.band_db is not None:
            _band(upper, curve, tag, keep_hz)
        for panel, certain, bound in ((upper, "y", "b"), (lower, "c", "d")):
            glyph = Line(x="x", y=certain, line_width=2, **look)
            panel.add_glyph(source, glyph, name=curve.name, tags=[tag])
            if curve.pair.above_floor.any():
                thin = Line(x="x", y=bound, line_width=0.8, line_alpha=0.7, **look)
                panel.add_glyph(source, thin, tags=[tag])
            if curve.pair.frequency_hz.size == 1:
                dot = Scatter(x="x", y=certain, size=8, fill_color=curve.style.colour, line_color=None)
                panel.add_glyph(source, dot, tags=[tag])
    for index, overlay in enumerate(overlays, start=1):
        if overlay.kind in POINTS:
            _draw_overlay(upper, overlay, index)
    _level_range(upper, levels)
    _level_range(lower, commons)
    item: dict[str, Any] = json_item(column(upper, lower, sizing_mode="stretch_width"))  # type: ignore[assignment]
    return item


def _panel(name: str, low_hz: float, high_hz: float, title: str, height: int) -> Any:
    from bokeh.models import BoxZoomTool, CrosshairTool, FixedTicker
    from bokeh.plotting import figure as make_figure

    figure: Any = make_figure  # its own types know neither ranges as pairs nor tags
    if low_hz == high_hz:
        low_hz, high_hz = low_hz / 2, high_hz * 2
    panel = figure(
        name=f"panel-{name}",
        height=height,
        sizing_mode="stretch_width",
        x_axis_type="log",
        x_range=(low_hz * (low_hz / high_hz) ** _ROOM, high_hz * (high_hz / low_hz) ** _ROOM),
        tools=[BoxZoomTool()],
        toolbar_location=None,
        title=title,
        min_border_right=18,
    )
    panel.add_tools(CrosshairTool(dimensions="height", line_color="#9aa0a6", line_width=1))
    ticks = tick_texts(low_hz, high_hz)
    panel.xaxis.ticker = FixedTicker(ticks=list(ticks), minor_ticks=_minor_ticks(low_hz, high_hz))
    panel.xaxis.major_label_overrides = dict(ticks)
    panel.xgrid.ticker = panel.xaxis[0].ticker
    panel.xaxis.name = f"frequency-{name}"
    panel.title.text_font_style = "normal"
    panel.title.text_color = INK
    panel.title.text_font_size = "13px"
    for axis in (*panel.xaxis, *panel.yaxis):
        axis.axis_line_color = INK
        axis.major_label_text_color = INK
        axis.major_label_text_font_size = "12px"
        axis.major_tick_line_color = INK
        axis.minor_tick_line_color = "#9aa0a6"
    panel.yaxis.axis_line_color = None
    panel.yaxis.major_tick_line_color = None
    panel.yaxis.minor_tick_line_color = None
    panel.grid.grid_line_color = GRID
    panel.outline_line_color = None
    panel.background_fill_color = None
    panel.border_fill_color = None
    return panel


def _minor_ticks(low_hz: float, high_hz: float) -> list[float]:
    decades = range(int(np.floor(np.log10(low_hz))), int(np.ceil(np.log10(high_hz))) + 1)
    ticks = [step * 10.0**decade for decade in decades for step in range(1, 10)]
    return [tick for tick in ticks if low_hz <= tick <= high_hz]


def _level_range(panel: Any, levels: Sequence[FloatArray]) -> None:
    from bokeh.models import Range1d

    known = np.concatenate([level[np.isfinite(level)] for level in levels])
    low, high = (float(known.min()), float(known.max())) if known.size else (0.0, 1.0)
    margin = max(1.0, 0.05 * (high - low))
    panel.y_range = Range1d(start=low - margin, end=high + margin)


def _source(curve: PageCurve, keep_hz: Sequence[float]) -> tuple[Any, FloatArray, FloatArray]:
    """Columns of a curve: x; y, b: CMRR, certain and as a bound; c, d: A_cm likewise; f, t: what is shown."""
    from bokeh.models import ColumnDataSource

    pair = curve.pair
    chosen = thinned(pair.frequency_hz, keep_hz)
    frequency_hz = pair.frequency_hz[chosen]
    level_db = pair.cmrr_db[chosen]
    at_floor = pair.above_floor[chosen]
    common_db = np.maximum(20 * np.log10(np.maximum(np.abs(pair.common_gain), 1e-300)), _FLOOR_DB)[chosen]
    stretch = at_floor.copy()
    stretch[:-1] |= at_floor[1:]
    stretch[1:] |= at_floor[:-1]
    texts = []
    asked_db = np.full(pair.frequency_hz.shape, np.nan) if curve.asked_db is None else curve.asked_db
    for level, bound, common, asked in zip(level_db, at_floor, common_db, asked_db[chosen], strict=True):
        text = f"CMRR {decibel_text(level, bool(bound))} dB"
        if np.isfinite(asked):
            text += f", {level - asked:+.1f} dB to the mask"
        texts.append(f"{text}; A_cm {'< ' if bound else ''}{common:.1f} dB")
    columns: dict[str, Any] = {
        "x": frequency_hz,
        "y": np.where(at_floor, np.nan, level_db),
        "b": np.where(stretch, level_db, np.nan),
        "c": np.where(at_floor, np.nan, common_db),
        "d": np.where(stretch, common_db, np.nan),
        "f": [frequency_text(hz, digits=4) for hz in frequency_hz.tolist()],
        "t": texts,
    }
    if not at_floor.any():
        columns["b"] = columns["d"] = np.full(frequency_hz.shape, np.nan)
    return ColumnDataSource(columns), level_db, common_db


def _band(panel: Any, curve: PageCurve, tag: str, keep_hz: Sequence[float]) -> None:
    from bokeh.models import ColumnDataSource, VArea

    if curve.band_db is None:
        return
    chosen = thinned(curve.pair.frequency_hz, keep_hz)
    low, high = (edge[chosen] for edge in curve.band_db)
    source = ColumnDataSource({"x": curve.pair.frequency_hz[chosen], "low": low, "high": high})
    area = VArea(x="x", y1="low", y2="high", fill_color=curve.style.colour, fill_alpha=0.14)
    panel.add_glyph(source, area, tags=[tag])


def _draw_overlay(panel: Any, overlay: PageOverlay, index: int) -> None:
    from bokeh.models import ColumnDataSource, Line, Scatter, VArea

    mark = overlay.kind == "mark"
    said = {"mark": "", "measured": "measured ", "mask": "asked for: ", "baseline": "accepted: "}.get(
        overlay.kind, ""
    )
    low_db = overlay.level_db if overlay.kind == "spread" else np.full(overlay.level_db.shape, -1000.0)
    source = ColumnDataSource(
        {
            "x": overlay.frequency_hz,
            "y": overlay.level_db,
            "low": low_db,
            "high": overlay.level_db if overlay.upper_db is None else overlay.upper_db,
            "f": [frequency_text(hz, digits=4) for hz in overlay.frequency_hz.tolist()],
            "t": [f"{said}CMRR {level:.1f} dB" for level in overlay.level_db.tolist()],
        }
    )
    area: dict[str, Any] = {"x": "x", "y1": "low", "y2": "high"}
    glyphs: dict[str, list[Any]] = {
        "spread": [VArea(**area, fill_color=mix(HUES[0], "#ffffff", 0.8))],
        "mask": [
            VArea(
                **area, fill_color=INK, fill_alpha=0.04,
                hatch_pattern="/", hatch_alpha=0.16, hatch_scale=16, hatch_weight=0.7,
            ),
            Line(x="x", y="y", line_color=INK, line_width=3),
        ],
        "baseline": [Line(x="x", y="y", line_color="#cdd0d4", line_width=5)],
        "measured": [Scatter(x="x", y="y", size=8, fill_color="white", line_color=INK)],
        "mark": [Scatter(x="x", y="y", size=17, fill_color=None, line_color=INK, line_width=2)],
    }  # fmt: skip
    for glyph in glyphs[overlay.kind]:
        named = {} if isinstance(glyph, VArea) or mark else {"name": overlay.name}
        panel.add_glyph(source, glyph, tags=[f"overlay-{index}"], **named)


def _dash(style: CurveStyle) -> list[int]:
    return [max(1, round(2 * length)) for length in style.dashes]
