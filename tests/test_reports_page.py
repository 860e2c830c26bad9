"""The page: it refers to nothing outside itself, escapes what a spec says, and tells all it is given."""

from __future__ import annotations

import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest

from modepair.reports import ModePair
from modepair.reports.comparison import Target, compare
from modepair.reports.interactive import MOST_POINTS, PageCurve, PageOverlay, curves_item, thinned, tick_texts
from modepair.reports.page import Page, page_html
from modepair.reports.palette import CurveStyle
from modepair.reports.summary import CAUTIONS
from modepair.reports.tables import Column
from tests.synthetic_cases import one_pole_cases
from tests.test_reports_comparison import MASK, cases

MADE = one_pole_cases(2, 2, perfect=(3,))
HOSTILE = "</script><img src=x onerror=alert(1)>\"'&{{ 7*7 }}</style><!--"


def curve(row: int, name: str = "curve") -> PageCurve:
    pair = ModePair(MADE.pair.frequency_hz, MADE.pair.common_gain[row], MADE.pair.differential_gain[row])
    return PageCurve(name, (("opamp", name),), CurveStyle("#008a9e", (5.0, 2.0)), pair)


PAGE = Page(
    title="Silo weighing",
    kicker="24 cases",
    curves=[curve(row, f"case {row + 1}") for row in range(4)],
    asked={"stage": "three-opamp"},
    provenance={"digest": "sha256 1234"},
    overlays=[PageOverlay("mask", "mask", np.array([50.0, 1e3]), np.array([90.0, 80.0]))],
    statement="The lowest CMRR is 40 dB.",
)


class Outline(HTMLParser):
    """Tags with their attributes, and the text that stands outside scripts and styles."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.inside = ""
        self.feed(html)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag in {"script", "style"}:
            self.inside = tag

    def handle_endtag(self, tag: str) -> None:
        if tag == self.inside:
            self.inside = ""

    def handle_data(self, data: str) -> None:
        if not self.inside:
            self.text += data


def counted(html: str) -> dict[str, int]:
    tags = [tag for tag, _ in Outline(html).tags]
    return {tag: tags.count(tag) for tag in sorted(set(tags))}


def test_the_page_refers_to_nothing_outside_itself() -> None:
    outline = Outline(page_html(replace(PAGE, stills={"CMRR": "<svg xmlns='http://www.w3.org/2000/svg'/>"})))
    for tag, attributes in outline.tags:
        for name in ("src", "href", "srcset", "data", "action", "poster"):
            address = attributes.get(name)
            assert address is None or address.startswith("data:"), (tag, address)
    policy = next(a["content"] for t, a in outline.tags if a.get("http-equiv") == "Content-Security-Policy")
    assert (
        policy
        == "default-src 'none'; script-src 'unsafe-inline'; style-src 'unsafe-inline'; img-src data: blob:"
    )


def test_hostile_names_change_no_tag_of_the_page() -> None:
    """Every text of a spec, replaced by one that tries to break out: the same elements, the same attributes."""

    def page(text: str) -> str:
        table = cases({(text, text): 3.0, ("b", text): -1.0})
        table["note"] = text
        return page_html(
            Page(
                title=text,
                kicker=text,
                curves=[curve(0, text), curve(1, f"{text} too")],
                overlays=[PageOverlay(text, "measured", np.array([50.0]), np.array([90.0]))],
                curves_note=text,
                comparison=compare(table, Target((10.0, 1e3), MASK)),
                judged=text,
                verdicts=[Column(text, [text], "left")],
                verdicts_note=text,
                asked={text: text},
                opamps={text: text},
                budget=pd.DataFrame({text: [text]}),
                budget_note=text,
                causes=[text],
                tables={text: [Column(text, [text])]},
                circuits={text: [Column(text, [text])]},
                measured=[text],
                measured_table=[Column(text, [text], "left")],
                provenance={text: text},
                schematics={text: "<svg></svg>"},
                stills={text: "<svg></svg>"},
            )
        )

    tame, hostile = page("tame"), page(HOSTILE)
    assert counted(hostile) == counted(tame)
    assert not any(name.startswith("on") for _, attributes in Outline(hostile).tags for name in attributes)
    assert Outline(hostile).text.count(HOSTILE) >= 20
    assert "49" not in re.findall(r"<title>(.*?)</title>", hostile)[0]


def test_data_in_scripts_is_plain_json() -> None:
    html = page_html(replace(PAGE, curves=[curve(0, HOSTILE)]))
    for name in ("curves-data", "curves-keys"):
        found = re.search(rf'<script type="application/json" id="{name}">(.*?)</script>', html, re.DOTALL)
        assert found
        assert HOSTILE in json.dumps(json.loads(found[1]), ensure_ascii=False).replace('\\"', '"')


def test_the_verdict_comes_first() -> None:
    table = cases({("a", "dry"): 3.0, ("b", "dry"): -1.0})
    html = page_html(replace(PAGE, comparison=compare(table, Target((10.0, 1e3), MASK))))
    headings = re.findall(r"<h2>(.*?)</h2>", html)
    assert headings == ["Verdict", "Candidates", "Curves", "What was asked", "Cautions", "Made from"]
    assert '<p class="headline">a wins: 3.0 dB above the mask at worst, at 100 Hz with dry.</p>' in html
    assert '<p class="stamp">limits kept</p>' in html


@pytest.mark.parametrize(("met", "stamp"), [(True, "limits kept"), (False, "limits not kept"), (None, None)])
def test_the_stamp_is_that_of_the_verdicts(met: bool | None, stamp: str | None) -> None:
    html = page_html(replace(PAGE, judged="1 of 2 cases fails." if met is not None else "", met=met))
    assert re.findall(r'<p class="stamp">(.*?)</p>', html) == ([stamp] if stamp else [])


def test_the_budget_stands_where_there_is_one() -> None:
    assert 'id="budget"' not in page_html(PAGE)
    budget = pd.DataFrame({"cause": ["R4", "A1.cmrr"], "share_percent": [71.25, float("nan")]})
    html = page_html(replace(PAGE, budget=budget, budget_note="At 50 Hz."))
    section = html[html.index('id="budget"') :]
    assert re.findall(r'<td.*?data-order="(.*?)">(.*?)</td>', section)[:4] == [
        ("", "R4"), ("71.2", "71.2"), ("", "A1.cmrr"), ("", "–"),
    ]  # fmt: skip


def test_dangers_stand_at_the_top_and_all_cautions_at_the_end() -> None:
    html = page_html(replace(PAGE, caution_flags=("model", "nominal", "mains")))
    assert html.index(CAUTIONS["mains"]) < html.index('id="curves"')
    assert html.count(CAUTIONS["mains"]) == 2
    assert html.count(CAUTIONS["model"]) == 1


def test_columns_sort_by_what_their_texts_mean() -> None:
    column = Column("bandwidth", ["900 Hz", "> 1 kHz", "1.2 MHz", "–", "-3.5"])
    html = page_html(replace(PAGE, tables={"Cases": [column]}))
    orders = re.findall(r'<td class="number" data-order="(.*?)">', html)
    assert orders == ["900", "1000", "1200000", "", "-3.5"]


def test_curves_are_thinned_but_keep_what_matters() -> None:
    frequency_hz = np.geomspace(1.0, 1e6, 5000)
    chosen = thinned(frequency_hz, (float(frequency_hz[1234]),))
    assert MOST_POINTS <= chosen.sum() <= MOST_POINTS + 1
    assert chosen[[0, 1234, -1]].all()
    assert thinned(frequency_hz[:MOST_POINTS], ()).all()


def test_ticks_stand_at_engineering_frequencies() -> None:
    assert list(tick_texts(1.0, 1e6).values()) == [
        "1 Hz",
        "10 Hz",
        "100 Hz",
        "1 kHz",
        "10 kHz",
        "100 kHz",
        "1 MHz",
    ]
    assert list(tick_texts(20.0, 2e3).values()) == [
        "20 Hz",
        "50 Hz",
        "100 Hz",
        "200 Hz",
        "500 Hz",
        "1 kHz",
        "2 kHz",
    ]


def test_a_page_of_no_curve_has_none() -> None:
    html = page_html(replace(PAGE, curves=[]))
    assert "application/json" not in html
    assert len(html) < 100_000
    with pytest.raises(ValueError, match="there must be a curve to draw"):
        curves_item([], [])
