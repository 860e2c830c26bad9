"""The ranking in words: who wins, what decides, what is equal."""

from __future__ import annotations

import io
import math

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from modepair.reports.comparison import Target, compare
from modepair.reports.ranking import finding, level_text, print_ranking, ranking_csv, ranking_markdown
from tests.test_reports_comparison import MASK, cases

WITH_MASK, WITHOUT = Target((10.0, 1e3), MASK), Target((50.0, 1e3))


def said(found: dict[tuple[str, str], float], target: Target = WITH_MASK) -> list[str]:
    told = finding(compare(cases(found), target))
    return [told.headline, *told.reasons]


def test_a_winner_that_meets_the_mask() -> None:
    told = said({("a", "dry"): 20.0, ("a", "wet"): 3.0, ("b", "dry"): 8.0, ("b", "wet"): 1.0})
    assert told == [
        "a wins: 3.0 dB above the mask at worst, at 100 Hz with wet.",
        "The choice matters: in that condition b falls behind by 2.0 dB.",
        "CMRR falls by 20 dB a decade there: a capacitance, an op-amp's bandwidth or its CMRR corner limits it rather "
        "than resistors.",
        "Wet costs a 17.0 dB against its best condition.",
    ]


def test_no_candidate_meets_the_mask_and_none_differs() -> None:
    told = said({("a", ""): -3.0, ("b", ""): -3.05})
    assert told[0] == "No candidate meets the mask. a and b come nearest: 3.0 dB short, at 100 Hz."
    assert told[1] == "These 2 cannot be told apart: their figures differ by no more than 0.1 dB."
    assert told[2].startswith("In that condition all 2 candidates lie within 0.05 dB of one another")


def test_some_fall_behind() -> None:
    told = said({("a", ""): 9.0, ("b", ""): 8.5, ("c", ""): 2.0, ("d", ""): -11.0})
    assert told[1] == (
        "In that condition 2 of 4 candidates lie within 0.5 dB of one another, so the choice among them hardly "
        "matters: the source and the parts around them, which they have in common, set the limit; d and c fall behind "
        "by 7.0 to 20.0 dB."
    )


def test_without_a_mask() -> None:
    told = finding(compare(cases({("a", ""): 93.2, ("b", ""): 80.0}), WITHOUT))
    assert told.headline == "a keeps the most: 93.2 dB of CMRR at worst, at 100 Hz."
    assert told.met is None
    assert told.terms[0] == (
        "No mask is given: ranked by the lowest CMRR from 50 Hz to 1 kHz, the band of the spots."
    )


def test_nothing_can_be_ranked() -> None:
    table = cases({("a", ""): 200.0})
    table["score_is_bound"] = True
    assert finding(compare(table, WITHOUT)).headline == (
        "No candidate can be ranked: see the remarks in the table."
    )


def test_a_small_failure_never_reads_as_a_pass() -> None:
    assert level_text(-0.004, True) == "-0.004"
    assert level_text(math.nan, True) == "–"
    told = said({("a", ""): -0.004, ("b", ""): -9.0})
    assert told[0] == "No candidate meets the mask. a comes nearest: 0.004 dB short, at 100 Hz."


def test_console_csv_and_markdown_say_the_same() -> None:
    table = cases({("a", ""): 3.0, ("b|<i>", ""): -1.0})
    table["note"], table["unit_price"] = ["costs *more*", None], [2.5, np.nan]
    found = compare(table, WITH_MASK)
    out = io.StringIO()
    print_ranking(Console(file=out, width=100), found, (50.0,), "Title")
    text = out.getvalue()
    assert text.startswith("Title\n\na wins: 3.0 dB above the mask at worst")
    assert "a: costs *more*" in text
    assert "2.50" in text
    page = ranking_markdown(found, (50.0,), "Title")
    assert page.startswith("# Title\n\n**a wins: 3.0 dB above the mask at worst, at 100 Hz.**\n")
    assert r"b\|\<i\>" in page
    assert r"costs \*more\*" in page
    written = ranking_csv(found)
    assert written["rank"].tolist() == [1, 2]
    assert written["margin_db"].tolist() == [3.0, -1.0]


@pytest.mark.parametrize("bound", [False, True])
def test_a_spot_above_the_floor_is_written_as_a_bound(bound: bool) -> None:
    table = cases({("a", ""): 3.0})
    table["cmrr_db_at_50hz"] = 210.0
    table["above_floor"] = "50 Hz" if bound else ""
    page = ranking_markdown(compare(table, WITH_MASK), (50.0,))
    assert (r"\> 210" in page) == bound
    assert ("210.0" in page) == (not bound)


def test_the_table_without_boards_has_no_yield() -> None:
    assert "yield" not in ranking_markdown(compare(cases({("a", ""): 3.0}), WITH_MASK), ())
    table = cases({("a", ""): 3.0}).assign(**{"yield": 0.973, "yield_low": 0.95, "yield_high": 0.99})
    page = ranking_markdown(compare(pd.DataFrame(table), WITH_MASK), ())
    assert "97.3 (95.0 to 99.0)" in page
    assert page.count("a has the best yield: 97.3 % of boards keep the mask in the worst condition.") == 1
