"""Plots of the error budget: what each cause adds to rho at the spots, and its share over frequency."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from matplotlib.ticker import FixedFormatter, FixedLocator, FuncFormatter, MaxNLocator
from matplotlib.transforms import blended_transform_factory

from modepair.reports.budget import Contribution, decibels
from modepair.reports.end_labels import EndLabel, label_height, label_room, text_width, write_labels
from modepair.reports.pairs import FloatArray
from modepair.reports.palette import HUES, mix
from modepair.reports.panels import (
    FAINT,
    HEADING_LINE,
    INK,
    in_our_look,
    make_panels,
    write_heading,
)
from modepair.reports.readings import decibel_text, frequency_text, ratio_text
from modepair.reports.scales import frequency_axis

__all__ = ["MOST_CAUSES", "MOST_SHARES", "SpotContributions", "plot_budget_shares", "plot_budget_spots"]

MOST_CAUSES = 8
"""Causes that have a bar of their own at a spot."""
MOST_SHARES = 7
"""Causes that have an area of their own over frequency."""

_TOLERANCE, _NOMINAL, _OTHERS = mix(HUES[0], "#ffffff", 0.65), HUES[1], FAINT
_HATCH = "////"
# A contribution below this share of the largest has no bar: it changes nothing, 0.01 dB.
_SMALLEST = 1e-3
# A cause at a larger angle to the sum takes more from it than half of what it is; below, it adds or stands across.
_AGAINST_DEG = 120.0
# A cause whose share never reaches this many percent has no area.
_LEAST_SHARE = 1.0
# Inches: a bar's row, the bars' width, right edges of the columns of figures beyond it, room that these take.
_ROW, _BARS, _COLUMNS, _FIGURES = 0.235, 2.5, (0.95, 1.55, 2.1), 2.2
_UNITS = ((1e-6, 1e9, "nV/V"), (1e-3, 1e6, "µV/V"), (1.0, 1e3, "mV/V"))


@dataclass(frozen=True)
class SpotContributions:
    """What adds up to rho at one spot.

    Parameters
    ----------
    frequency_hz : float
        The spot.
    contributions : sequence of Contribution
        At this spot only, rho of the shape (1,), in any order; tolerances with the signs that they have on the
        board that was solved.
    solved : float
        |rho| as solved for that board, or for the nominal circuit where there are no tolerances, V/V.

    Raises
    ------
    ValueError
        Where a contribution has more than one frequency.
    """

    frequency_hz: float
    contributions: Sequence[Contribution]
    solved: float

    def __post_init__(self) -> None:
        for one in self.contributions:
            if np.shape(one.rho) != (1,):
                raise ValueError(f"{one.name}: rho must have the shape (1,), not {np.shape(one.rho)}")


@dataclass(frozen=True)
class _Bar:
    """A bar of a spot, with the colours of its kind."""

    name: str
    kind: str
    rho: complex
    angle_deg: float


@in_our_look
def plot_budget_spots(spots: Sequence[SpotContributions], *, title: str = "", subtitle: str = "") -> Figure:
    """Draw the error budget at each spot, a bar per cause, the largest first.

    Parameters
    ----------
    spots : sequence of SpotContributions
        At least one.
    title : str
        Text above the panels.
    subtitle : str
        A smaller line below the title, such as the case's name.

    Returns
    -------
    matplotlib.figure.Figure
        A panel per spot. The length of a bar is |rho| of the cause, to the left of zero where it
        works against the sum of all, at more than 120 degrees to it. The columns beside tell |rho|, the
        CMRR that this cause alone would leave, and its angle to the sum; of a tolerance either sign may be on a board,
        and the one on the worst board is drawn. Causes beyond `MOST_CAUSES` are one bar, their sum as phasors.

    Raises
    ------
    ValueError
        Where there is no spot.
    """
    if not spots:
        raise ValueError("a budget has at least one spot to plot, not 0")
    bars = [_bars(spot) for spot in spots]
    columns = 1 if len(spots) == 1 else 2
    rows = -(-len(spots) // columns)
    height = _ROW * max(2, *(len(one) for one in bars))
    left = 0.3 + max((text_width(bar.name, 8.5) for one in bars for bar in one), default=0.5)
    kinds = {bar.kind for one in bars for bar in one}
    figure, panels = make_panels(
        rows, columns, _FIGURES, height, _BARS, title, height,
        left=left, between=_FIGURES + left + 0.25, above=HEADING_LINE + 0.5,
        subtitle=subtitle or " ",
    )  # fmt: skip
    places = [panel for row in panels for panel in row]
    for panel in places[len(spots) :]:
        panel.remove()
    total = max(2, *(len(one) for one in bars))
    for panel, spot, made in zip(places, spots, bars, strict=False):
        _draw_spot(panel, spot, made, total, left)
    _write_key(figure, kinds)
    return figure


def _bars(spot: SpotContributions) -> list[_Bar]:
    """The largest causes at a spot, and the sum of the others."""
    ordered = sorted(spot.contributions, key=lambda one: (-_rounded(abs(one.rho[0])), one.name))
    largest = abs(ordered[0].rho[0]) if ordered else 0.0
    whole = complex(sum(one.rho[0] for one in ordered))
    named = [one for one in ordered[:MOST_CAUSES] if abs(one.rho[0]) > _SMALLEST * largest]
    if len(ordered) == len(named) + 1 and len(named) < MOST_CAUSES:
        named = ordered
    bars = [
        _Bar(one.name, one.kind, complex(one.rho[0]), _angle_deg(complex(one.rho[0]), whole)) for one in named
    ]
    others = ordered[len(named) :]
    if others:
        rho = complex(sum(one.rho[0] for one in others))
        name = f"{len(others)} other{'s' if len(others) > 1 else ''}"
        bars.append(_Bar(name, "others", rho, _angle_deg(rho, whole)))
    return bars


def _rounded(size: float) -> float:
    """Four digits: causes that only rounding tells apart are equal."""
    return float(f"{size:.3e}")


def _angle_deg(rho: complex, whole: complex) -> float:
    """Angle from the whole to a part of it, -180 to 180 degrees; 0 where one of them is zero."""
    if rho == 0 or whole == 0:
        return 0.0
    return float(np.degrees(np.angle(rho / (abs(rho)) * np.conj(whole) / abs(whole))))


def _draw_spot(panel: Axes, spot: SpotContributions, bars: Sequence[_Bar], rows: int, left: float) -> None:
    lengths = np.array([abs(bar.rho) * (-1.0 if abs(bar.angle_deg) > _AGAINST_DEG else 1.0) for bar in bars])
    largest = float(np.abs(lengths).max(initial=0.0))
    lengths[np.abs(lengths) < _SMALLEST * largest] = 0.0
    factor, unit = next(((f, u) for most, f, u in _UNITS if largest < most), (1.0, "V/V"))
    lengths = lengths * factor
    low, high = min(0.0, float(lengths.min(initial=0.0))), max(0.0, float(lengths.max(initial=0.0)))
    if low == high:
        high = 1.0
    margin = 0.03 * (high - low)
    panel.set_xlim(low - margin * (low < 0), high + margin)
    panel.set_ylim(rows - 0.5, -0.5)
    for place, (bar, length) in enumerate(zip(bars, lengths.tolist(), strict=True)):
        panel.barh(place, length, height=0.68, zorder=2, gid=f"bar-{bar.kind}", **_fill(bar.kind))
    panel.axvline(0.0, color=INK, linewidth=0.8, zorder=3)
    panel.yaxis.set_major_locator(FixedLocator(range(len(bars))))
    panel.yaxis.set_major_formatter(FixedFormatter([bar.name for bar in bars]))
    panel.tick_params(axis="y", length=0, labelsize=8.5)
    for label in panel.get_yticklabels():
        label.set_parse_math(False)
    panel.spines["left"].set_visible(False)
    panel.xaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 2.5, 5, 10]))
    panel.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}".replace("-", "−")))
    panel.grid(True, which="major", axis="x")
    panel.set_axisbelow(True)
    panel.set_xlabel(
        f"|rho| ({unit}), left of 0 against the sum" if low < 0 else f"|rho| ({unit})", loc="right"
    )
    _write_figures(panel, bars)
    shift = -left + 0.12
    name = "worst board" if any(one.kind == "tolerance" for one in spot.contributions) else "nominal circuit"
    level = decibel_text(float(decibels(spot.solved))).replace("-", "−") if spot.solved > 0 else "∞"
    whole = abs(complex(sum(one.rho[0] for one in spot.contributions)))
    note = f"{name}, solved: {level} dB, {ratio_text(spot.solved)}"
    if spot.solved > 0 and abs(whole / spot.solved - 1) >= 0.001:
        note += f"; sum of causes: {ratio_text(whole)}"
    write_heading(panel, frequency_text(spot.frequency_hz), [note], at=0.3, shift=shift)


def _write_figures(panel: Axes, bars: Sequence[_Bar]) -> None:
    """Write the columns beside the bars."""
    at_right = blended_transform_factory(panel.transAxes, panel.transData)
    heads = ("|rho|", "CMRR\nalone, dB", "angle\nto sum")
    for index, (head, column) in enumerate(zip(heads, _COLUMNS, strict=True)):
        place = 1 + column / _BARS
        panel.text(
            place, -0.65, head, transform=at_right, ha="right", va="bottom", fontsize=8, color="#5b6168",
            parse_math=False, gid="figures-head",
        )  # fmt: skip
        for row, bar in enumerate(bars):
            panel.text(
                place, row, _cell(bar, index), transform=at_right, ha="right", va="center", fontsize=8.5,
                parse_math=False, gid=f"figures-{row}",
            )  # fmt: skip


def _cell(bar: _Bar, column: int) -> str:
    size = abs(bar.rho)
    if column == 0:
        return f"{'±' if bar.kind == 'tolerance' and size >= 1e-10 else ''}{ratio_text(size)}"
    if size < 1e-10:
        return "> 200" if column == 1 else ""
    text = decibel_text(float(decibels(bar.rho))) if column == 1 else f"{round(bar.angle_deg):d}°"
    return text.replace("-180", "180").replace("-", "−")


def _fill(kind: str) -> dict[str, Any]:
    """How a bar or an area of a kind is filled: tolerances pale and hatched, nominal errors dark, others grey."""
    if kind == "tolerance":
        return {"facecolor": _TOLERANCE, "edgecolor": HUES[0], "hatch": _HATCH, "linewidth": 0.6}
    if kind == "nominal":
        return {"facecolor": _NOMINAL, "edgecolor": _NOMINAL, "linewidth": 0.6}
    return {"facecolor": _OTHERS, "edgecolor": "#8d939a", "linewidth": 0.6}


def _write_key(figure: Figure, kinds: set[str]) -> None:
    """Write what the fillings mean, below the title."""
    total_width, total_height = figure.get_size_inches()
    texts = {"tolerance": "tolerance, at the worst board's edge", "nominal": "error of the nominal circuit"}
    x, y = 0.12, total_height - 0.7
    for kind in ("tolerance", "nominal"):
        if kind not in kinds:
            continue
        corner = (x / total_width, (y - 0.06) / total_height)
        size = (0.32 / total_width, 0.13 / total_height)
        figure.add_artist(Rectangle(corner, *size, transform=figure.transFigure, **_fill(kind)))
        x += 0.4
        figure.text(
            x / total_width,
            y / total_height,
            texts[kind],
            fontsize=8.5,
            va="center",
            parse_math=False,
            gid="key",
        )
        x += text_width(texts[kind], 8.5) + 0.3


@in_our_look
def plot_budget_shares(
    frequency_hz: FloatArray, contributions: Sequence[Contribution], *, title: str = "", subtitle: str = ""
) -> Figure:
    """Draw the causes' shares of the budget over frequency, stacked.

    Parameters
    ----------
    frequency_hz : ndarray, shape (F,)
        Frequencies in Hz, ascending, two at least.
    contributions : sequence of Contribution
        One per cause at least, rho of the shape (F,).
    title : str
        Text above the panel.
    subtitle : str
        A smaller line below the title, such as the case's name.

    Returns
    -------
    matplotlib.figure.Figure
        |c| of each cause over the sum of all |c|, in percent, over log frequency: the `MOST_SHARES` causes with the
        largest mean share over the band, the largest at the bottom, then the others, small ones among them. Where
        both kinds are among those named, tolerances are hatched and say so.

    Raises
    ------
    ValueError
        Where there are no contributions or their shapes do not match the frequencies.

    Notes
    -----
    A share of magnitudes says what the error is made of, not what removing a cause would gain: phasors of the nominal
    circuit may cancel.
    """
    if not contributions or np.size(frequency_hz) < 2:
        raise ValueError("shares over frequency take one cause at least and two frequencies at least")
    for one in contributions:
        if np.shape(one.rho) != np.shape(frequency_hz):
            raise ValueError(
                f"{one.name}: rho must have the shape {np.shape(frequency_hz)}, not {np.shape(one.rho)}"
            )
    size = np.abs(np.array([one.rho for one in contributions]))
    whole = size.sum(axis=0)
    share = 100.0 * np.divide(size, whole, out=np.zeros_like(size), where=whole > 0)
    mean = np.trapezoid(share, np.log(frequency_hz), axis=1)
    order = np.argsort([-_rounded(value) for value in mean], kind="stable")
    shown = share.max(axis=1) >= _LEAST_SHARE
    named = [i for i in order.tolist() if shown[i]][:MOST_SHARES]
    rest = [i for i in order.tolist() if i not in named]
    fills = [contributions[i].kind for i in named]
    mixed = len(set(fills)) > 1
    names = [_shared_name(contributions[i], mixed) for i in named]
    levels = [share[i] for i in named]
    if rest:
        names.append(f"{len(rest)} other{'s' if len(rest) > 1 else ''}")
        fills.append("others")
        levels.append(share[rest].sum(axis=0))
    colours = [*HUES[: len(named)], _OTHERS]
    hatched = [mixed and kind == "tolerance" for kind in fills]
    return _stack(frequency_hz, np.array(levels), names, hatched, colours, title, subtitle)


def _shared_name(one: Contribution, mixed: bool) -> str:
    return f"{one.name}, tolerance" if mixed and one.kind == "tolerance" else one.name


def _stack(
    frequency_hz: FloatArray,
    share: FloatArray,
    names: Sequence[str],
    hatched: Sequence[bool],
    colours: Sequence[str],
    title: str,
    subtitle: str,
) -> Figure:
    edges = np.vstack([np.zeros_like(share[0]), np.cumsum(share, axis=0)])
    height, width = 4.0, 6.6
    places = [
        _inside(frequency_hz, edges[i], edges[i + 1], name, width, height) for i, name in enumerate(names)
    ]
    ends = [
        EndLabel(float(edges[i, -1] + edges[i + 1, -1]) / 2, name, colours[i], width=8, order=(float(i),))
        for i, name in enumerate(names)
        if places[i] is None
    ]
    figure, ((panel,),) = make_panels(
        1, 1, label_room(ends), max(height, label_height(ends)), width, title, subtitle=subtitle
    )
    frequency_axis(panel, frequency_hz)
    panel.set_ylim(0.0, 100.0)
    panel.yaxis.set_major_locator(FixedLocator([0, 20, 40, 60, 80, 100]))
    panel.tick_params(axis="y", length=0)
    panel.spines["left"].set_visible(False)
    write_heading(panel, "", ["share of the sum of |rho| of the causes listed (%)"], at=0.07)
    for i, name in enumerate(names):
        panel.fill_between(
            frequency_hz, edges[i], edges[i + 1], facecolor=colours[i], edgecolor="#ffffff", linewidth=0.7,
            hatch=_HATCH if hatched[i] else None, zorder=2, gid=f"share-{i + 1}",
        )  # fmt: skip
        place = places[i]
        if place is not None:
            panel.text(
                *place, name, ha="center", va="center", fontsize=8.5, color=_ink_on(colours[i]), parse_math=False,
                gid="share-label", zorder=3, bbox={"facecolor": colours[i], "edgecolor": "none", "pad": 1.0},
            )  # fmt: skip
    write_labels(panel, ends)
    return figure


def _inside(
    frequency_hz: FloatArray, low: FloatArray, high: FloatArray, name: str, width: float, height: float
) -> tuple[float, float] | None:
    """Find where a name fits into an area; none where it fits nowhere."""
    octave = np.log(frequency_hz)
    at = np.linspace(octave[0], octave[-1], 201)
    floor, roof = np.interp(at, octave, low), np.interp(at, octave, high)
    half = int(np.ceil((text_width(name, 8.5) / 2 + 0.08) / width * 200))
    best, place = 0.17 / height * 100.0, None
    for centre in range(half, 201 - half):
        span = slice(centre - half, centre + half + 1)
        lowest, highest = float(floor[span].max()), float(roof[span].min())
        if highest - lowest > best:
            best, place = highest - lowest, (float(np.exp(at[centre])), (lowest + highest) / 2)
    return place


def _ink_on(colour: str) -> str:
    """Black or white, whichever reads better on a colour, by its luma (ITU-R BT.601, from memory)."""
    red, green, blue = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
    return INK if 0.299 * red + 0.587 * green + 0.114 * blue > 130 else "#ffffff"
