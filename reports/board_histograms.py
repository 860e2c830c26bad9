"""Histograms of CMRR over the boards of a case, spot by spot, with the half-normal law where it holds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, MaxNLocator, MultipleLocator

from modepair.reports.half_normal import HalfNormal, departure, fit_half_normal
from modepair.reports.pairs import FloatArray
from modepair.reports.palette import HUES, mix
from modepair.reports.panels import HEADING_LINE, INK, in_our_look, make_panels, write_heading
from modepair.reports.readings import decibel_text, frequency_text, ratio_text

__all__ = ["BoardSpots", "plot_histograms"]

_BARS, _LAW, _NOMINAL = mix(HUES[0], "#ffffff", 0.55), HUES[1], HUES[3]
_BIN_STEPS_DB = (0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0)
_TICK_STEPS_DB = (0.2, 0.5, 1, 2, 5, 10, 20, 40)
# Share of boards, best first, that the scale leaves out; how far it follows a mark beyond the boards, as a share of
# their spread and in dB at least.
_BEYOND, _REACH, _REACH_DB = 0.005, 0.5, 3.0
# Inches: height of a mark's row of text, and the panel.
_ROW, _WIDTH, _HEIGHT = 0.17, 3.7, 2.5


@dataclass(frozen=True)
class BoardSpots:
    """The boards of one case at the spots.

    Parameters
    ----------
    frequency_hz : ndarray, shape (S,)
        Spots in Hz; at least one.
    rho : ndarray, shape (n, S)
        Complex error ratio of each board, V/V; at least one board.
    nominal : ndarray, shape (S,), optional
        That of the nominal circuit.
    least_db : ndarray, shape (S,), optional
        Least CMRR asked for in dB; NaN where nothing is asked for.
    floor_db : ndarray, shape (S,), optional
        Level in dB beyond which the solve tells nothing of the nominal circuit.
    label : str
        What tells the case from others.

    Raises
    ------
    ValueError
        Where the shapes do not match.
    """

    frequency_hz: FloatArray
    rho: npt.NDArray[np.complex128]
    nominal: npt.NDArray[np.complex128] | None = None
    least_db: FloatArray | None = None
    floor_db: FloatArray | None = None
    label: str = ""

    def __post_init__(self) -> None:
        spots = np.size(self.frequency_hz)
        if self.rho.ndim != 2 or self.rho.shape[1] != spots or not self.rho.size:
            raise ValueError(f"rho must have the shape (n, {spots}) with n at least 1, not {self.rho.shape}")
        for name in ("nominal", "least_db", "floor_db"):
            values = getattr(self, name)
            if values is not None and np.shape(values) != (spots,):
                raise ValueError(f"{name} must have the shape ({spots},), not {np.shape(values)}")


@dataclass(frozen=True)
class _Mark:
    """A level to mark in a histogram."""

    level_db: float
    text: str
    colour: str = INK
    dashes: tuple[float, ...] = ()
    width: float = 1.2
    gid: str = ""


@dataclass(frozen=True)
class _Spot:
    """One histogram, made up before it is drawn."""

    cmrr_db: FloatArray
    marks: tuple[_Mark, ...]
    law: HalfNormal | None
    note: str
    edges_db: FloatArray

    @property
    def range_db(self) -> tuple[float, float]:
        return float(self.edges_db[0]), float(self.edges_db[-1])


@in_our_look
def plot_histograms(spots: BoardSpots, *, title: str = "") -> Figure:
    """Draw a histogram of CMRR at each spot, with 1 % and 50 % marks, the nominal circuit and what is asked for.

    Parameters
    ----------
    spots : BoardSpots
        The boards of one case.
    title : str
        Text above the panels.

    Returns
    -------
    matplotlib.figure.Figure
        A panel per spot. Where rho of the boards follows the law that `modepair.reports.half_normal` tests for, its
        density with the boards' own sigma is drawn; where not, the panel says why.
    """
    made = [_spot(spots, column) for column in range(np.size(spots.frequency_hz))]
    columns = 1 if len(made) == 1 else 2
    rows = -(-len(made) // columns)
    figure, panels = make_panels(
        rows,
        columns,
        0.55,
        _HEIGHT,
        _WIDTH,
        title,
        _HEIGHT,
        between=1.0,
        above=2 * HEADING_LINE + (0.2 if rows > 1 else 0.0),
        subtitle=spots.label,
    )
    places = [panel for row in panels for panel in row]
    for panel in places[len(made) :]:
        panel.remove()
    for index, (panel, one) in enumerate(zip(places, made, strict=False)):
        _draw(panel, one)
        write_heading(panel, frequency_text(float(spots.frequency_hz[index])), [one.note])
        beyond = float(np.mean(one.cmrr_db > one.range_db[1]))
        outside = f"; {100 * beyond:.2g} % of boards beyond" if beyond else ""
        panel.set_xlabel(f"CMRR (dB){outside}", loc="right")
    return figure


def _spot(spots: BoardSpots, column: int) -> _Spot:
    rho = spots.rho[:, column]
    cmrr_db = _decibels(rho)
    p1, p50 = np.percentile(cmrr_db, [1, 50], method="inverted_cdf").tolist()
    marks = [
        _Mark(p1, f"1 %: {_level(p1)}", HUES[0], (1.0, 1.4), 1.6, "mark-1"),
        _Mark(p50, f"median: {_level(p50)}", HUES[0], (), 1.8, "mark-50"),
    ]
    if spots.nominal is not None and np.isfinite(spots.nominal[column]):
        level = float(_decibels(spots.nominal[column : column + 1])[0])
        floor_db = np.inf if spots.floor_db is None else float(spots.floor_db[column])
        written = _level(min(level, floor_db), level >= floor_db)
        marks.append(_Mark(level, f"nominal: {written}", _NOMINAL, (5.0, 2.0), 1.4, "mark-nominal"))
    if spots.least_db is not None and np.isfinite(spots.least_db[column]):
        level = float(spots.least_db[column])
        marks.append(_Mark(level, f"asked for: {_level(level)}", INK, (), 2.2, "mark-least"))
    reason = departure(rho)
    law = None if reason else fit_half_normal(rho)
    note = f"line: half-normal |rho|, sigma {ratio_text(law.sigma)}" if law else f"not half-normal: {reason}"
    return _Spot(cmrr_db, tuple(marks), law, note, _edges(cmrr_db, marks))


def _level(level_db: float, at_floor: bool = False) -> str:
    return f"{decibel_text(level_db, at_floor)} dB".replace("-", "−")


def _decibels(rho: npt.NDArray[np.complex128]) -> FloatArray:
    level: FloatArray = -20.0 * np.log10(np.maximum(np.abs(rho), 1e-15))
    return level


def _edges(cmrr_db: FloatArray, marks: Sequence[_Mark]) -> FloatArray:
    """Edges of the bars, over all boards but the best few, and marks near them."""
    low, high = float(cmrr_db.min()), float(np.quantile(cmrr_db, 1 - _BEYOND, method="higher"))
    reach = max(_REACH_DB, _REACH * (high - low))
    near = [mark.level_db for mark in marks if low - reach <= mark.level_db <= high + reach]
    low, high = min(low, *near), max(high, *near)
    # Freedman and Diaconis' width, from memory, rounded up to a step; at least three bars.
    spread_db = float(np.subtract(*np.quantile(cmrr_db, [0.75, 0.25])))
    wanted = 2.0 * spread_db / len(cmrr_db) ** (1 / 3)
    step = next((s for s in _BIN_STEPS_DB if s >= wanted), _BIN_STEPS_DB[-1])
    first, last = np.floor(low / step - 0.2), np.ceil(high / step + 0.2)
    edges: FloatArray = np.arange(min(first, last - 3), last + 1) * step
    return edges


def _draw(panel: Axes, one: _Spot) -> None:
    low, high = one.range_db
    edges = one.edges_db
    step = float(edges[1] - edges[0])
    counts, _ = np.histogram(one.cmrr_db, edges)
    percent = 100.0 * counts / len(one.cmrr_db) / step
    panel.set_xlim(low, high)
    panel.stairs(percent, edges, fill=True, color=_BARS, linewidth=0, zorder=1.2, gid="histogram")
    panel.stairs(percent, edges, color="#ffffff", linewidth=0.4, zorder=1.3)
    highest = max(float(percent.max()), 1e-9)
    if one.law is not None:
        at = np.linspace(low, high, 301)
        density = 100.0 * one.law.density(at)
        panel.plot(at, density, color=_LAW, linewidth=1.5, zorder=2.5, gid="half-normal")
        highest = max(highest, float(density.max()))
    rows = len(one.marks)
    top = highest / (1.0 - (rows + 0.6) * _ROW / _HEIGHT)
    panel.set_ylim(0.0, top)
    span = next((s for s in _TICK_STEPS_DB if (high - low) / s <= 9), _TICK_STEPS_DB[-1])
    panel.xaxis.set_major_locator(MultipleLocator(span))
    ticks = [
        tick
        for tick in MaxNLocator(5, steps=[1, 2, 5, 10]).tick_values(0.0, highest)
        if 0 <= tick <= highest * 1.02
    ]
    panel.set_yticks(ticks)
    panel.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    panel.tick_params(axis="y", length=0)
    panel.spines["left"].set_visible(False)
    panel.grid(True, which="major", axis="y")
    panel.set_axisbelow(True)
    write_heading(panel, "", ["boards (% per dB)"], at=0.07)
    _draw_marks(panel, one, highest, top)


def _draw_marks(panel: Axes, one: _Spot, highest: float, top: float) -> None:
    """Draw marks from the left down in rows, each as high as its text, so that no text meets another's line."""
    low, high = one.range_db
    figure = panel.get_figure(root=True)
    renderer = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]
    row_height = _ROW / _HEIGHT * top
    for row, mark in enumerate(sorted(one.marks, key=lambda mark: mark.level_db)):
        level = top - (row + 0.6) * row_height
        beyond = mark.level_db > high or mark.level_db < low
        text = mark.text
        if beyond:
            text = f"{mark.text} →" if mark.level_db > high else f"← {mark.text}"
        written = panel.text(
            0.0, level, text, color=INK, fontsize=8.5, va="center", parse_math=False, gid=mark.gid, zorder=4,
            bbox={"facecolor": "#ffffff", "edgecolor": "none", "pad": 0.8},
        )  # fmt: skip
        width = written.get_window_extent(renderer).width / figure.dpi / _WIDTH * (high - low)  # type: ignore[union-attr]
        gap = 0.012 * (high - low)
        if not beyond:
            line = Line2D([mark.level_db] * 2, [0.0, level + 0.4 * row_height], color=mark.colour, zorder=2.8)
            line.set_linewidth(mark.width)
            line.set_gid(f"{mark.gid}-line")
            if mark.dashes:
                line.set_dashes(mark.dashes)
            panel.add_line(line)
        start = mark.level_db + gap
        if mark.level_db > high or (not beyond and start + width > high + 0.1 * (high - low)):
            start = min(mark.level_db, high) - gap - width
        elif mark.level_db < low:
            start = low + gap
        written.set_x(start)
