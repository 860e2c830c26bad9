"""The page of a run or a comparison: one HTML file that opens without a network."""

from __future__ import annotations

import base64
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
from jinja2 import Template
from markupsafe import Markup

from modepair.reports.comparison import Comparison
from modepair.reports.interactive import MOST_POINTS, PageCurve, PageOverlay, curves_item
from modepair.reports.page_templates import page_template
from modepair.reports.palette import CurveStyle
from modepair.reports.ranking import finding, ranking_columns, remarks
from modepair.reports.readings import frequency_text
from modepair.reports.summary import CAUTIONS, cautions
from modepair.reports.tables import Column

DANGERS = ("medical", "mains", "safety")
"""Cautions that stand at the top of the page too."""


@dataclass(frozen=True)
class Page:
    """What the page tells; every text is plain and is escaped when written.

    Parameters
    ----------
    title : str
        Title of the spec.
    kicker : str
        What kind of sweep it is, in a few words.
    curves : sequence of PageCurve
        The curves to draw.
    overlays : sequence of PageOverlay
        What is laid over them.
    curves_note : str
        What is to be said where not all curves are drawn.
    keep_hz : sequence of float
        Frequencies that are never thinned out of the curves.
    comparison : Comparison, optional
        Candidates in their order, where there are any.
    statement : str
        The verdict in one sentence, where there is no comparison.
    met : bool, optional
        Whether the limits are kept; None where nothing is judged.
    judged : str
        The verdicts on the whole, in a line; empty where nothing is judged.
    verdicts : sequence of Column
        Table of verdicts that are shown; empty where nothing is judged.
    verdicts_note : str
        What is to be said below them.
    spots_hz : sequence of float
        Spot frequencies in Hz.
    schematics : mapping of str to str
        Caption to SVG, which is trusted.
    circuits : mapping of str to sequence of Column
        Caption to the parts of a stage that is not drawn.
    asked : mapping of str to str
        What was asked, name to text.
    opamps : mapping of str to str
        Data of the op-amps that are used, name to text.
    budget : DataFrame, optional
        The error budget, its columns as they are to be headed.
    budget_note : str
        What is to be said below it.
    causes : sequence of str
        What the budget says of the verdict, in a sentence or two.
    tables : mapping of str to sequence of Column
        Further tables by heading.
    measured : sequence of str
        What is to be said of measurements.
    measured_table : sequence of Column
        Their differences, per frequency.
    warnings : sequence of str
        What the op-amp models cannot show; they stand at the top.
    caution_flags : sequence of str
        Keys of `modepair.reports.summary.CAUTIONS`.
    provenance : mapping of str to str
        What makes it repeatable.
    stills : mapping of str to str
        Caption to SVG of the curves as they are printed.
    """

    title: str
    kicker: str
    curves: Sequence[PageCurve]
    asked: Mapping[str, str]
    provenance: Mapping[str, str]
    overlays: Sequence[PageOverlay] = ()
    curves_note: str = ""
    keep_hz: Sequence[float] = ()
    comparison: Comparison | None = None
    statement: str = ""
    met: bool | None = None
    judged: str = ""
    verdicts: Sequence[Column] = ()
    verdicts_note: str = ""
    spots_hz: Sequence[float] = ()
    schematics: Mapping[str, str] = field(default_factory=dict)
    circuits: Mapping[str, Sequence[Column]] = field(default_factory=dict)
    opamps: Mapping[str, str] = field(default_factory=dict)
    budget: pd.DataFrame | None = None
    budget_note: str = ""
    causes: Sequence[str] = ()
    tables: Mapping[str, Sequence[Column]] = field(default_factory=dict)
    measured: Sequence[str] = ()
    measured_table: Sequence[Column] = ()
    caution_flags: Sequence[str] = ("model", "nominal")
    warnings: Sequence[str] = ()
    stills: Mapping[str, str] = field(default_factory=dict)


def page_html(page: Page) -> str:
    """Write the page.

    Parameters
    ----------
    page : Page
        What it tells.

    Returns
    -------
    str
        HTML that refers to nothing outside itself, and forbids its browser to fetch anything.
    """
    said = finding(page.comparison) if page.comparison else None
    item = curves_item(page.curves, page.overlays, page.keep_hz) if page.curves else None
    switches = _switches(page.curves, page.overlays)
    thin = any(curve.pair.frequency_hz.size > MOST_POINTS for curve in page.curves)
    return _template().render(
        page=page,
        headline=said.headline if said else page.statement,
        met=page.met if page.judged or said is None else said.met,
        reasons=(*(said.reasons if said else ()), *page.causes),
        terms=said.terms if said else (),
        ranking=_ranking(page) if page.comparison else None,
        notes=remarks(page.comparison) if page.comparison else (),
        verdicts=_table(page.verdicts),
        further=[(heading, _table(columns)) for heading, columns in page.tables.items()],
        measured_table=_table(page.measured_table),
        budget=_budget(page.budget),
        switches=switches,
        curve_keys=_script_json([[list(key) for key in curve.keys] for curve in page.curves]),
        item=_script_json(item) if item else "",
        bokeh=_bokeh() if item else "",
        thinned=MOST_POINTS if thin else 0,
        schematics={name: Markup(svg) for name, svg in page.schematics.items()},
        circuits=[(caption, _table(columns)) for caption, columns in page.circuits.items()],
        stills={name: base64.b64encode(svg.encode()).decode() for name, svg in page.stills.items()},
        dangers=[*page.warnings, *(CAUTIONS[flag] for flag in DANGERS if flag in page.caution_flags)],
        cautions=cautions(page.caution_flags),
    )


def _script_json(content: object) -> Markup:
    """Write JSON that can stand in a script element, whatever its texts hold."""
    text = json.dumps(content, ensure_ascii=True, separators=(",", ":"), allow_nan=False)
    return Markup(text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026"))


@cache
def _bokeh() -> Markup:
    """The drawing library's script, without its widgets."""
    from bokeh.resources import Resources

    script = "\n".join(Resources(mode="inline", components=["bokeh"]).js_raw)
    # Nothing in it may end the element that it stands in.
    return Markup(script.replace("</script", "<\\/script"))


@cache
def _template() -> Template:
    filters: dict[str, Callable[..., Any]] = {"frequency": frequency_text, "swatch": _swatch}
    return page_template("report.html.j2", html=True, filters=filters)


def _swatch(style: CurveStyle | None) -> Markup:
    """A sample of a curve's line."""
    if style is None:
        return Markup("")
    dashes = " ".join(f"{2 * length:g}" for length in style.dashes)
    return Markup(
        '<svg class="swatch" viewBox="0 0 28 8" aria-hidden="true"><line x1="0" x2="28" y1="4" y2="4" '
        'stroke="{}" stroke-width="2.4" stroke-dasharray="{}"/></svg>'
    ).format(style.colour, dashes)


@dataclass(frozen=True)
class Switch:
    """A button that shows and hides curves or an overlay: its group, its name, a sample of its line."""

    group: str
    name: str
    style: CurveStyle | None = None
    overlay: int = 0


def _switches(curves: Sequence[PageCurve], overlays: Sequence[PageOverlay]) -> dict[str, list[Switch]]:
    """Buttons by group: the first group has the curves' hues, the others their dashes."""
    groups: dict[str, dict[str, Switch]] = {}
    for curve in curves:
        for place, (group, value) in enumerate(curve.keys):
            style = CurveStyle(curve.style.colour, curve.style.dashes if len(curve.keys) == 1 else ())
            if place == 1 and len(curve.keys) == 2:
                style = CurveStyle("#22262b", curve.style.dashes)
            elif place:
                groups.setdefault(group, {}).setdefault(value, Switch(group, value))
                continue
            groups.setdefault(group, {}).setdefault(value, Switch(group, value, style))
    found = {group: list(values.values()) for group, values in groups.items()}
    if overlays:
        looks: dict[str, CurveStyle | None] = {
            "mask": CurveStyle("#22262b"),
            "baseline": CurveStyle("#cdd0d4"),
            "spread": CurveStyle("#cce7ec"),
            "measured": CurveStyle("#22262b", (0.8, 1.6)),
            "mark": None,
        }
        found["also drawn"] = [
            Switch("also drawn", overlay.name, looks[overlay.kind], index)
            for index, overlay in enumerate(overlays, start=1)
        ]
    return found


@dataclass(frozen=True)
class Cell:
    """A cell of a table: its text, and what it is sorted by."""

    text: str
    order: str


@dataclass(frozen=True)
class PageTable:
    """A table of the page: headings, which of them are numbers, and rows of cells."""

    headings: list[str]
    numbers: list[bool]
    rows: list[list[Cell]]


def _table(
    columns: Sequence[Column], orders: Mapping[int, Sequence[float]] | None = None
) -> PageTable | None:
    """Make a table of columns; `orders` gives the numbers by which some of them are sorted."""
    shown = [c for c in columns if any(cell.strip() for cell in c.cells)]
    if not shown:
        return None
    keys = []
    for place, column in enumerate(columns):
        if column not in shown:
            continue
        numbers = (orders or {}).get(place)
        keys.append(
            [_order(text) for text in column.cells]
            if numbers is None
            else ["" if value is None or np.isnan(value) else f"{value:.9g}" for value in numbers]
        )
    rows = [
        [Cell(column.cells[row], key[row]) for column, key in zip(shown, keys, strict=True)]
        for row in range(len(shown[0].cells))
    ]
    headings = [c.header.replace("-\n", "").strip().replace(" ", "\u00a0") for c in shown]
    return PageTable(headings, [column.justify == "right" for column in shown], rows)


def _order(text: str) -> str:
    """What a cell is sorted by: its number with its SI prefix worked in, or nothing where it is a text."""
    number = text.lstrip("<> ").replace("−", "-").split(" ")
    try:
        value = float(number[0])
    except ValueError:
        return ""
    prefix = number[1][:1] if len(number) > 1 and len(number[1]) > 1 else ""
    return f"{value * _PREFIXES.get(prefix, 1.0):.9g}"


_PREFIXES = {"p": 1e-12, "n": 1e-9, "µ": 1e-6, "μ": 1e-6, "u": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6, "G": 1e9}


@dataclass(frozen=True)
class RankingTable:
    """The ranking: its table, the place and the share of the bar that shows each candidate's score."""

    table: PageTable
    bars: list[tuple[float, float, bool]]
    score_column: int


def _ranking(page: Page) -> RankingTable | None:
    comparison = page.comparison
    if comparison is None:
        return None
    lead, rest = ranking_columns(comparison, page.spots_hz)
    columns = [*lead, *rest]
    place = next(
        index for index, column in enumerate(columns) if column.header.startswith(("smallest", "lowest"))
    )
    scores = comparison.table[comparison.target.column].to_numpy(np.float64)
    table = _table(columns, {0: comparison.table["rank"].tolist(), place: scores.tolist()})
    if table is None:
        return None
    known = scores[np.isfinite(scores)]
    low, high = min(0.0, float(known.min(initial=0.0))), max(0.0, float(known.max(initial=0.0)))
    span = (high - low) or 1.0
    zero = (0.0 - low) / span
    bars = [
        (0.0, 0.0, True)
        if not np.isfinite(score)
        else (min(zero, (score - low) / span), abs(score) / span, score >= 0)
        for score in scores.tolist()
    ]
    return RankingTable(table, bars, place)


def _budget(budget: pd.DataFrame | None) -> PageTable | None:
    if budget is None or budget.empty:
        return None
    columns = []
    for name in budget.columns.tolist():
        values = budget[name].tolist()
        number = pd.api.types.is_numeric_dtype(budget[name])
        texts = [_plain(value) for value in values]
        columns.append(Column(str(name).replace("_", " "), texts, "right" if number else "left"))
    return _table(columns)


def _plain(value: Any) -> str:
    if isinstance(value, float):
        return "–" if np.isnan(value) else f"{value:.1f}" if abs(value) >= 0.1 else f"{value:.2g}"
    return str(value)
