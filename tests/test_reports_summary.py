"""The summary page: its parts, escaping, cautions."""

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st
from markdown_it import MarkdownIt

from modepair.reports.markdown import escape_markdown
from modepair.reports.summary import CAUTIONS, Summary, cautions, summary_text
from tests.synthetic_cases import BAND_HZ, SPOTS_HZ, fail, one_pole_cases

MADE = one_pole_cases(2, 2, perfect=(3,))
PAGE = Summary(
    title="Silo weighing",
    asked={"stage": "three-opamp, gain 101", "parts": "RF1 10k, RF2 10k"},
    cases=fail(MADE, {2: "matrix is singular"}),
    axes=MADE.axes,
    spots_hz=SPOTS_HZ,
    band_hz=BAND_HZ,
    provenance={"modepair": "0.1.0", "digest": "sha256 1234"},
    plots={"CMRR over frequency": "cmrr.svg"},
)


def html_of(text: str) -> str:
    return MarkdownIt("commonmark", {"html": True}).enable("table").render(text)


def test_page():
    text = summary_text(PAGE)
    assert text.startswith("# Silo weighing\n\n3 of 4 cases done, 1 failed.\n")
    assert text.endswith("|\n")
    assert "\n\n\n" not in text
    parts = [line for line in text.splitlines() if line.startswith("## ")]
    assert parts == ["## What was asked", "## Results", "## Failed cases", "## Cautions", "## Provenance"]
    assert "| stage | three-opamp, gain 101 |" in text
    assert "![CMRR over frequency](cmrr.svg)" in text
    assert "- case 2 (quiet-bipolar, imbalance 20): matrix is singular" in text
    assert "| digest | sha256 1234 |" in text


def test_lowest_case_is_named():
    row = MADE.cases.drop(index=1).sort_values("cmrr_db_lowest").iloc[0]
    name = f"{row['stage.opamp']}, imbalance {row['source.imbalance']:g}"
    assert (
        f"**Lowest CMRR:** {row['cmrr_db_lowest']:.1f} dB at 1 MHz, case {row['case']} ({name})."
        in summary_text(PAGE)
    )


def test_result_table():
    html = html_of(summary_text(PAGE))
    for cell in ("CMRR 50 Hz, dB", "gain, V/V", "bandwidth", "lowest at 1 MHz, dB", "&gt; 240"):
        assert f">{cell}<" in html
    assert html.count("<tr>") == 3 + 4 + 3
    assert "CMRR marked \\> lies above the numerical floor" in summary_text(PAGE)


def test_all_at_the_floor():
    made = one_pole_cases(1, 2, perfect=(1, 2))
    assert "**Lowest CMRR:** above 200 dB at 1 MHz, case 1 (imbalance 10)." in summary_text(
        replace(PAGE, cases=made.cases, axes=made.axes)
    )


def test_nothing_done():
    cases = MADE.cases[["case", "stage.opamp", "source.imbalance"]].assign(state="failed: no solution")
    text = summary_text(replace(PAGE, cases=cases))
    assert "0 of 4 cases done, 4 failed." in text
    assert "No case was done." in text
    assert "Lowest" not in text


def test_many_cases():
    made = one_pole_cases(4, 16)
    text = summary_text(replace(PAGE, cases=made.cases, axes=made.axes))
    assert "Shown: the 20 cases with the lowest CMRR; the other 44 are in cases.csv." in text
    all_failed = made.cases.assign(state="failed: no solution")
    assert "- and 44 more, in cases.csv" in summary_text(replace(PAGE, cases=all_failed, axes=made.axes))


def test_names_from_a_spec_stay_text():
    nasty = "<script>alert(1)</script> | `x` **b** [l](http://e) ![i](j) &lt; $m$ a_b_"
    cases = PAGE.cases.assign(**{"stage.opamp": [nasty, nasty, "b", "b"]})
    axes = (replace(MADE.axes[0], values=(nasty, "b"), labels=(nasty, "b")), MADE.axes[1])
    text = summary_text(replace(PAGE, title=nasty, asked={nasty: nasty}, cases=cases, axes=axes))
    html = html_of(text)
    for mark in ("<script", "<code", "<a ", "<em"):
        assert mark not in html
    assert html.count("<strong>") == 1  # our own, of the lowest CMRR
    assert html.count("<img") == 1
    assert html.count("<tr>") == 2 + 4 + 3


@given(st.text(st.characters(codec="utf-8", exclude_categories=("Cc", "Cs", "Zl", "Zp"))))
def test_escaped_text_reads_back(text):
    line = " ".join(text.split())
    rendered = MarkdownIt("commonmark").render(escape_markdown(text))
    expected = line.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;").replace('"', "&quot;")
    assert rendered == (f"<p>{expected}</p>\n" if line else "")


@pytest.mark.parametrize("text", ["1. a", "- a", "+ a", "# a", "=== a", "---", "12) a", "a\n\n# b"])
def test_leading_marks_are_text(text):
    assert html_of(escape_markdown(text)) == f"<p>{' '.join(text.split())}</p>\n"


def test_numbers_are_left_alone():
    assert [escape_markdown(t) for t in ("100.5", "-3.1", "4k7", "1 kHz (10 %)")] == [
        "100.5", "-3.1", "4k7", "1 kHz (10 %)",
    ]  # fmt: skip


def test_plot_files_with_blanks_and_brackets():
    assert "](my%20plot%28%29.png)" in summary_text(replace(PAGE, plots={"x": "my plot().png"}))


@pytest.mark.parametrize("flag", ["medical", "mains", "safety"])
def test_cautions_for_people(flag):
    (text,) = cautions([flag])
    assert (
        "A simulation shows no compliance; the applicable standards, local codes and qualified people decide."
        in text
    )
    assert text in summary_text(replace(PAGE, caution_flags=[flag]))


def test_cautions_come_once_and_in_order():
    assert cautions(["mains", "model", "mains"]) == [CAUTIONS["model"], CAUTIONS["mains"]]


def test_an_unknown_caution_is_refused():
    with pytest.raises(
        ValueError, match="caution must be one of model, nominal, medical, mains, safety, not 'medcal'"
    ):
        cautions(["medcal"])
