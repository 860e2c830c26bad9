"""Ranking: by the worst condition, never by a bound, and equal where the figures cannot tell."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.reports import ModePair
from modepair.reports.comparison import Comparison, Target, band_of, compare, scores
from modepair.sweeps.limits import Mask

HZ = np.array([10.0, 100.0, 1000.0])
MASK = Mask(((10.0, 80.0), (1000.0, 60.0)))


def pair(*levels: tuple[float, float, float]) -> ModePair:
    rho = 10 ** (-np.array(levels) / 20)
    return ModePair(HZ, rho.astype(complex), np.ones(rho.shape, complex))


def cases(found: dict[tuple[str, str], float], **columns: dict[tuple[str, str], float]) -> pd.DataFrame:
    """A row per candidate and condition with its score."""
    rows = [
        {
            "run": "r", "case": number, "candidate": who, "condition": where, "state": "done", "score_db": score,
            "score_at_hz": 100.0, "score_is_bound": False, "accuracy_db": 0.002, "slope_db": -20.0,
            "differential_gain": 10.0, "bandwidth_hz": 1e5, "above_floor": "", "cmrr_db_at_50hz": 90.0 + score,
        }
        for number, ((who, where), score) in enumerate(found.items(), start=1)
    ]  # fmt: skip
    table = pd.DataFrame(rows)
    for name, values in columns.items():
        table[name] = list(values.values())
    return table


def ranks(comparison: Comparison) -> dict[str, float]:
    return dict(zip(comparison.table["candidate"], comparison.table["rank"], strict=True))


def test_scores_against_a_mask_are_the_smallest_margin_and_its_place() -> None:
    """Straight lines in dB over log f: the mask is 70 dB at 100 Hz."""
    table = scores(pair((90.0, 75.0, 70.0), (81.0, 90.0, 60.5)), Target((10.0, 1000.0), MASK))
    np.testing.assert_allclose(table["score_db"], [5.0, 0.5], atol=1e-9)
    assert table["score_at_hz"].tolist() == [100.0, 1000.0]
    assert not table["score_is_bound"].any()
    # From 10 Hz to 1 kHz, two decades: -20 dB, and -20.5 dB.
    np.testing.assert_allclose(table["slope_db"], [-10.0, -10.25], atol=1e-9)


def test_without_a_mask_the_band_of_the_spots_counts() -> None:
    assert band_of((50.0, 1e3, 60.0), (1.0, 1e6)) == (50.0, 1e3)
    assert band_of((), (1.0, 1e6)) == (1.0, 1e6)
    table = scores(pair((90.0, 75.0, 20.0)), Target((10.0, 100.0)))
    assert table["score_db"].tolist() == [pytest.approx(75.0, abs=1e-9)]
    with pytest.raises(ValueError, match="no solved frequency lies in the band"):
        scores(pair((90.0, 75.0, 20.0)), Target((2.0, 3.0)))


def test_a_mask_that_is_not_covered_is_refused() -> None:
    with pytest.raises(ValueError, match="2000 Hz is not among the 3 solved frequencies"):
        scores(pair((90.0, 75.0, 20.0)), Target((10.0, 1e3), Mask(((10.0, 80.0), (2000.0, 60.0)))))


def test_a_score_at_the_floor_is_a_bound() -> None:
    """The floor is 200 dB at 1 V/V: a lower certain value decides; a bound that is lowest does not."""
    common = np.array([[1e-12, 1e-12, 1e-12], [1e-12, 1e-4, 1e-12]], complex)
    table = scores(ModePair(HZ, common, np.ones((2, 3), complex)), Target((10.0, 1e3)))
    assert table["score_is_bound"].tolist() == [True, False]
    assert table["score_db"].tolist() == [pytest.approx(200.0, abs=1e-9), pytest.approx(80.0, abs=1e-9)]
    # Round-off as large as the output itself: 20 log10 2 above the accuracy of the solve.
    assert table["accuracy_db"][0] == pytest.approx(0.002 + 20 * math.log10(2), abs=1e-9)


def test_the_worst_condition_ranks_and_is_named() -> None:
    found = compare(
        cases({("a", "dry"): 20.0, ("a", "wet"): 3.0, ("b", "dry"): 8.0, ("b", "wet"): 5.0}),
        Target((10.0, 1e3), MASK),
    )
    assert ranks(found) == {"b": 1.0, "a": 2.0}
    first = found.table.iloc[0]
    assert (first["margin_db"], first["decided_by"], first["decided_in_case"]) == (5.0, "wet", 4)
    assert first["best_score_db"] == 8.0
    assert found.conditions == 2
    assert found.there_db == {"a": 3.0, "b": 5.0}
    assert first["cmrr_db_at_50hz"] == 95.0  # the lower of 98 and 95


def test_what_the_figures_cannot_tell_shares_a_rank() -> None:
    one = {("a", ""): 5.0, ("b", ""): 4.95, ("c", ""): 4.89, ("d", ""): 4.0}
    assert ranks(compare(cases(one), Target((10.0, 1e3), MASK))) == {"a": 1.0, "b": 1.0, "c": 3.0, "d": 4.0}
    assert ranks(compare(cases(one), Target((10.0, 1e3), MASK), 1.0)) == {
        "a": 1.0,
        "b": 1.0,
        "c": 1.0,
        "d": 1.0,
    }


def test_a_less_accurate_solve_widens_what_is_equal() -> None:
    table = cases({("a", ""): 5.0, ("b", ""): 4.0})
    table["accuracy_db"] = [0.002, 0.6]
    found = compare(table, Target((10.0, 1e3), MASK))
    assert ranks(found) == {"a": 1.0, "b": 1.0}
    assert found.accuracy_db == 1.2


def test_neither_a_bound_nor_a_failed_case_is_ranked() -> None:
    table = cases({("a", ""): 200.0, ("b", ""): 5.0, ("c", "x"): 9.0, ("c", "y"): 9.0, ("d", ""): 1.0})
    table.loc[0, "score_is_bound"] = True
    table.loc[3, "state"] = "failed: matrix is singular"
    table.loc[4, "state"] = "failed: matrix is singular"
    found = compare(table, Target((10.0, 1e3), MASK)).table
    assert found["candidate"].tolist() == ["b", "a", "c", "d"]
    assert found["rank"].notna().tolist() == [True, False, False, False]
    assert found["remark"].tolist() == [
        "",
        "not ranked: its score lies above the numerical floor, a bound and no result",
        "not ranked: 1 of 2 cases failed",
        "not ranked: all 1 cases failed",
    ]


def test_yield_ranks_where_boards_were_drawn() -> None:
    table = cases({("a", ""): 1.0, ("b", ""): 9.0, ("c", ""): 9.0})
    table["yield"], table["yield_low"], table["yield_high"] = (
        [0.99, 0.97, 0.5],
        [0.98, 0.96, 0.4],
        [1.0, 0.985, 0.6],
    )
    found = compare(table, Target((10.0, 1e3), MASK))
    assert found.by_yield
    assert ranks(found) == {"a": 1.0, "b": 1.0, "c": 3.0}  # the interval of b overlaps that of a


def test_no_case_is_refused() -> None:
    with pytest.raises(ValueError, match="there is no case to compare"):
        compare(pd.DataFrame(), Target((10.0, 1e3)))


@given(st.lists(st.floats(-40, 40), min_size=1, max_size=12), st.floats(0, 5))
def test_a_better_rank_never_has_the_lower_score(levels: list[float], accuracy_db: float) -> None:
    found = compare(
        cases({(f"c{number}", ""): level for number, level in enumerate(levels)}),
        Target((10.0, 1e3), MASK),
        accuracy_db,
    )
    table = found.table
    assert table["rank"].is_monotonic_increasing
    assert table["margin_db"].is_monotonic_decreasing
    for _, group in table.groupby("rank"):
        assert group["margin_db"].max() - group["margin_db"].min() <= found.accuracy_db
