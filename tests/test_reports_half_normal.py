"""The half-normal law: its density and quantiles against closed forms, and what passes for it."""

import numpy as np
import pytest
from scipy.stats import halfnorm

from modepair.reports.half_normal import LEAST_BOARDS, MOST_DISTANCE, HalfNormal, departure, fit_half_normal

BOARDS = 2000


def normal(seed: int, count: int = BOARDS) -> np.ndarray:
    return np.random.default_rng(seed).standard_normal(count) * 2e-4 + 0j


@pytest.mark.parametrize("sigma", [1e-6, 3e-4, 0.5])
def test_density_integrates_to_one_and_to_its_shares(sigma):
    law = HalfNormal(sigma)
    centre = -20 * np.log10(sigma)
    level_db = np.linspace(centre - 30, centre + 200, 23_001)
    density = law.density(level_db)
    # 8e-11 of all lies beyond 200 dB; the trapezoids of so smooth a density err by less.
    assert np.trapezoid(density, level_db) == pytest.approx(1.0, abs=1e-9)
    part = level_db <= centre + 5 + 1e-6
    # Up to a level the trapezoids err by step^2/12 times the slope there, at most 0.01 per dB^2: 1e-7.
    assert np.trapezoid(density[part], level_db[part]) == pytest.approx(
        float(law.share_below(centre + 5)), abs=1e-7
    )


def test_share_below_is_that_of_an_independent_half_normal():
    level_db = np.linspace(40, 120, 9)
    expected = halfnorm(scale=2e-4).sf(10 ** (-level_db / 20))
    assert HalfNormal(2e-4).share_below(level_db) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(("gain", "deviation"), [(1.0, 1e-3), (10.0, 0.05e-2 / 3), (100.0, 1e-4)])
def test_median_is_the_closed_form_of_the_difference_stage(gain, deviation):
    law = HalfNormal(2 * deviation / (1 + gain))
    median = (1 + gain) / (0.6745 * 2 * deviation)
    # 0.6745 has four digits: 20 log10(1 + 0.5e-4) is 4e-4 dB.
    assert law.quantile_db(0.5) == pytest.approx(20 * np.log10(median), abs=5e-4)


def test_quantiles_invert_shares():
    law = HalfNormal(1e-4)
    assert law.share_below(law.quantile_db(0.01)) == pytest.approx(0.01, rel=1e-9)
    # 1 % of boards lie beyond 2.576 sigma, from the usual tables of the normal law.
    assert law.quantile_db(0.01) == pytest.approx(80 - 20 * np.log10(2.576), abs=1e-3)


@pytest.mark.parametrize("share", [0.0, 1.0, -0.1])
def test_refuses_no_share(share):
    with pytest.raises(ValueError, match=rf"share must be above 0 and below 1, not {share:g}"):
        HalfNormal(1.0).quantile_db(share)


def test_fit_finds_sigma():
    # The standard error of an rms of 2000 is 1/sqrt(4000) = 1.6 %; four of them.
    assert fit_half_normal(normal(1)).sigma == pytest.approx(2e-4, rel=0.064)
    with pytest.raises(ValueError, match="rho must not be zero on all boards"):
        fit_half_normal(np.zeros(3, complex))


@pytest.mark.parametrize("turn", [1.0, 1j, np.exp(2.1j)])
def test_accepts_normal_boards_along_any_line(turn):
    assert departure(normal(2) * turn) == ""


def test_rejects_one_true_sample_in_a_hundred_or_so():
    # 1000 samples at a level of 1 % for shape and 0.27 % for the mean: 12.7 expected, standard deviation 3.5.
    found = sum(departure(normal(seed, 400)) != "" for seed in range(1000))
    assert 1 <= found <= 26


def test_the_limit_of_distance_is_the_one_per_cent_point():
    # Simulated anew: the 99 % point of 4000 samples lies within about 0.05 of the true one (three standard errors).
    size = np.sort(np.abs(np.random.default_rng(5).standard_normal((4000, 200))), axis=1)
    below = halfnorm.cdf(size / np.sqrt((size**2).mean(axis=1, keepdims=True)))
    steps = np.arange(1, 201) / 200
    distance = np.maximum((steps - below).max(axis=1), (below - steps + 1 / 200).max(axis=1))
    assert np.quantile(distance, 0.99) * np.sqrt(200) == pytest.approx(MOST_DISTANCE, abs=0.06)


def uniform(seed):
    return np.random.default_rng(seed).uniform(-3e-4, 3e-4, BOARDS) + 0j


@pytest.mark.parametrize(
    ("rho", "reason"),
    [
        (normal(3)[: LEAST_BOARDS - 1], "fewer than 50 boards"),
        (np.zeros(100, complex), "rho is zero"),
        (np.full(100, 1e-4 + 1e-4j), "rho does not vary"),
        (normal(3) - normal(3).mean() + 4e-5, "mean of rho off zero, 0.2 sigma"),
        (normal(3) + 1j * normal(4) * 0.1, "phases differ, rho spreads 10 % across"),
        (normal(3) + 1j * normal(4), "phases differ, rho spreads 9"),
        (uniform(3), "rho is not normal, Kolmogorov-Smirnov distance 0."),
        (np.random.default_rng(3).standard_t(3, BOARDS) * 1e-4 + 0j, "rho is not normal"),
    ],
)
def test_refuses_others_and_says_why(rho, reason):
    assert departure(rho).startswith(reason)
