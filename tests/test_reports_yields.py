"""Yields: the exact binomial interval against its definition, closed forms, scipy and printed values."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from modepair.reports.yields import CONFIDENCE, Yield, draws_needed

COUNTS = [(0, 1), (1, 1), (0, 50), (50, 50), (1, 10), (7, 10), (499, 500), (1970, 2000), (99990, 100000)]


@pytest.mark.parametrize(("passed", "drawn"), COUNTS)
def test_against_scipy(passed: int, drawn: int) -> None:
    """By binomtest, and by the quantiles of the beta distribution that the interval's ends are."""
    low, high = Yield(passed, drawn).interval
    expected = stats.binomtest(passed, drawn).proportion_ci(0.95, method="exact")
    assert (low, high) == (expected.low, expected.high)
    alpha = 0.05
    if passed:
        assert low == pytest.approx(stats.beta.ppf(alpha / 2, passed, drawn - passed + 1), rel=1e-9)
    if passed < drawn:
        assert high == pytest.approx(stats.beta.ppf(1 - alpha / 2, passed + 1, drawn - passed), rel=1e-9)
    assert low <= Yield(passed, drawn).value <= high


@pytest.mark.parametrize(("passed", "drawn"), COUNTS)
def test_against_its_definition(passed: int, drawn: int) -> None:
    """At each end, as many passes or more (or fewer) have a probability of 2.5 %."""
    low, high = Yield(passed, drawn).interval
    if passed:
        assert stats.binom.sf(passed - 1, drawn, low) == pytest.approx(0.025, rel=1e-6)
    if passed < drawn:
        assert stats.binom.cdf(passed, drawn, high) == pytest.approx(0.025, rel=1e-6)


@pytest.mark.parametrize("drawn", [1, 10, 300, 3688, 100000])
def test_all_or_none_have_a_closed_form(drawn: int) -> None:
    """k = n: (alpha/2)^(1/n) to 1; k = 0: 0 to 1 - (alpha/2)^(1/n)."""
    edge = 0.025 ** (1 / drawn)
    assert Yield(drawn, drawn).interval == (pytest.approx(edge, rel=1e-9), 1.0)
    assert Yield(0, drawn).interval == (0.0, pytest.approx(1 - edge, rel=1e-9))


@pytest.mark.parametrize(
    ("passed", "drawn", "low", "high"),
    # Four printed digits, as in tables of the exact interval (from memory).
    [(1, 10, 0.0025, 0.4450), (5, 10, 0.1871, 0.8129), (0, 10, 0.0, 0.3085), (10, 100, 0.0490, 0.1762)],
)
def test_printed_values(passed: int, drawn: int, low: float, high: float) -> None:
    assert Yield(passed, drawn).interval == (pytest.approx(low, abs=5e-5), pytest.approx(high, abs=5e-5))


@pytest.mark.parametrize("drawn", [5, 40])
def test_it_covers_every_true_yield_at_least_as_often_as_it_says(drawn: int) -> None:
    """Exact coverage, the sum of the binomial probabilities of the counts whose interval holds the yield."""
    intervals = np.array([Yield(passed, drawn).interval for passed in range(drawn + 1)])
    for true in np.linspace(0.001, 0.999, 999):
        covers = (intervals[:, 0] <= true) & (true <= intervals[:, 1])
        assert stats.binom.pmf(np.flatnonzero(covers), drawn, true).sum() >= CONFIDENCE - 1e-12


@pytest.mark.parametrize(
    ("share", "needed"), [(0.999, 3688), (0.99, 368), (0.95, 72), (0.9, 36), (0.5, 6), (0.9999, 36887)]
)
def test_draws_that_a_claim_needs(share: float, needed: int) -> None:
    """One draw less, all passing, does not reach it."""
    assert draws_needed(share) == needed
    assert Yield(needed, needed).interval[0] >= share
    assert Yield(needed - 1, needed - 1).interval[0] < share


@pytest.mark.parametrize("share", [0.0, 1.0, -0.1, 1.5, float("nan")])
def test_a_share_that_no_draws_can_show_is_refused(share: float) -> None:
    with pytest.raises(ValueError, match=f"share must be above 0 and below 1, not {share:g}"):
        draws_needed(share)


@pytest.mark.parametrize(("passed", "drawn"), [(-1, 10), (11, 10), (0, 0)])
def test_counts_that_make_no_sense_are_refused(passed: int, drawn: int) -> None:
    with pytest.raises(ValueError, match=f"passed must be from 0 to drawn, {drawn}, not {passed}"):
        Yield(passed, drawn)
