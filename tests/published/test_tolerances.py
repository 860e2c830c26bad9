"""Tolerances against closed forms: worst case, the half-normal law, sums of signed errors, yields.

Sources stand beside the checks. Draws are seeded; what a statistical check allows follows from the number of draws
alone. A quantile is an order statistic, so the law's distribution function at the k-th smallest of n draws is a draw
from Beta(k, n - k + 1), which is the exact binomial interval of the quantile turned round (David and Nagaraja, Order
Statistics; from memory). LEVEL is the probability with which a right program fails one such check for a seed picked
at random.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy import stats

from modepair.circuits import BuiltStage
from modepair.reports.budget import decibels
from modepair.runner import Run
from modepair.runner.analyses import spot_analyses
from modepair.runner.budgeting import SpotBudget, budget_case
from modepair.runner.plans import DrawnCase
from modepair.runner.pool import BatchSolver, worker_pool
from modepair.runner.solving import solve_rows
from modepair.sweeps import Streams, Variate, boards, variates
from modepair.sweeps.tolerances import Tolerance
from tests.drawing import run_without_pages, swept
from tests.published.parts import difference, three_opamp

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]

RESISTORS = ("R1", "R2", "R3", "R4")
SIGNS = (1, -1, -1, 1)

LEVEL = 1e-3

DRAWS = 4000


@pytest.fixture(scope="module")
def solver() -> Iterator[BatchSolver]:
    with worker_pool() as factory, BatchSolver(factory, 2) as found:
        yield found


class Drawn:
    """Draws of a stage solved at one frequency: rho, A_dm, and the errors in units of their bounds, each shape (n,)."""

    def __init__(
        self,
        solver: BatchSolver,
        topology: str,
        parts: Mapping[str, float],
        *entries: dict[str, Any],
        frequency_hz: float = 10.0,
        draws: int = DRAWS,
    ) -> None:
        section = Tolerance.model_validate({"draws": draws, "seed": 5, "parts": entries})
        values = {
            f"tolerance.parts[{index}].{key}": value
            for index, entry in enumerate(section.parts)
            for key, value in entry.model_dump(exclude_none=True).items()
            if isinstance(value, float)
        }
        causes = variates(section, values, parts)
        self.errors = Streams(section).errors(causes, 0, draws)
        made = boards(parts, causes, self.errors)
        self.k = {name: 1 / np.asarray(value) for name, value in made.items() if name.endswith(".cmrr")}
        pair = solve_rows(solver, BuiltStage(topology), made, draws, spot_analyses([frequency_hz]), {})
        self.rho: Complex = pair.error_ratio[:, 0]
        self.gain: Complex = pair.differential_gain[:, 0]

    def resistors(self, bound: float, gain: float) -> Floats:
        """First order of the difference stage: (d1 + d4 - d2 - d3)/(1 + G)."""
        total: Floats = sum(sign * self.errors[name] for name, sign in zip(RESISTORS, SIGNS, strict=True))
        return total * bound / (1 + gain)


def worst(solver: BatchSolver, gain: float, tolerance: float, **more: float) -> SpotBudget:
    """Extreme value of a difference stage with four resistors of one tolerance, by the tool's own search."""
    bounds = dict.fromkeys(RESISTORS, tolerance) | {
        name.replace("_", "."): bound for name, bound in more.items()
    }
    causes = tuple(Variate(n, n, (n,), b, "rectangular", n.endswith("cmrr"), 0) for n, b in bounds.items())
    case = DrawnCase(1, BuiltStage("difference"), difference(gain), causes)
    (spot,) = budget_case(case, solver, spot_analyses([1.0]), [1.0]).spots
    return spot


# Worst case


@pytest.mark.parametrize(
    ("gain", "tolerance", "figure_db"),
    [(100.0, 0.01, 68), (100.0, 0.0025, 80), (1.0, 0.01, 34), (1.0, 0.001, 54), (1.0, 0.0001, 74)],
)
def test_printed_worst_cases(solver: BatchSolver, gain: float, tolerance: float, figure_db: float) -> None:
    """CMRR = (1 + G)/(4 t): Sedra and Smith, Microelectronic Circuits, a problem on the difference amplifier, for
    G = 100; Jung (ed.), Op Amp Applications Handbook, 2005 (from memory), for G = 1.

    The sources print whole decibels. The exact vertex, (1 + G - t^2 (G - 1))/(4 t) (derivation), is met to 0.01 dB.
    """
    spot = worst(solver, gain, tolerance)
    assert decibels(spot.worst) == pytest.approx(figure_db, abs=0.5)
    exact = (1 + gain - tolerance**2 * (gain - 1)) / (4 * tolerance)
    assert decibels(spot.worst) == pytest.approx(20 * np.log10(exact), abs=0.01)
    assert np.array([spot.signs[name] for name in RESISTORS]) @ SIGNS in (4, -4)


def test_eighty_decibels_need_a_quarter_per_cent(solver: BatchSolver) -> None:
    """The same problem's second figure: of the trade's grades, 0.25 % is the widest that keeps 80 dB at G = 100."""
    kept = [
        grade for grade in (0.01, 0.005, 0.0025, 0.001) if decibels(worst(solver, 100.0, grade).worst) >= 80
    ]
    assert kept[0] == 0.0025


def test_a_linear_budget_against_full_removal(solver: BatchSolver) -> None:
    """4 t/(1 + G) + 1/CMRR at the worst board, a quarter of the first term less without one resistor, the second
    gone without the op-amp's; solved and from the sum. Neglected: t relative, 1e-3."""
    t, k = 1e-3, 1e-4
    spot = worst(solver, 10.0, t, A1_cmrr=k)
    assert abs(spot.worst) == pytest.approx(4 * t / 11 + k, rel=2e-3)
    for one, solved in zip(spot.contributions, spot.without, strict=True):
        left = 4 * t / 11 if one.name == "A1.cmrr" else 3 * t / 11 + k
        assert solved == pytest.approx(left, rel=3e-3), one.name
        assert abs(spot.worst - one.rho[0]) == pytest.approx(left, rel=3e-3), one.name


# Normal resistors: rho is normal with sigma 2 s/(1 + G), so |rho| is half-normal

MASK_DB = 86.0
SIGMA = 2 * (5e-4 / 3) / 11
"""G = 10, 0.05 % at 3 sigma."""


@pytest.fixture(scope="module")
def normal(tmp_path_factory: pytest.TempPathFactory) -> Run:
    """The whole path, from a spec to its run folder. A CMRR of 85 dB or so is far above every floor."""
    text = f"""\
stage: {{topology: difference, parts: {{R1: 10k, R3: 10k}}, gain: 10, opamp: near-ideal}}
frequency: {{start: 50, stop: 50, spots: [50]}}
opamps: {{near-ideal: {{open_loop_gain: 160 dB, gain_bandwidth: 1G}}}}
tolerance:
  draws: {DRAWS}
  seed: 7
  keep: curves
  parts: [{{of: [R1, R2, R3, R4], absolute: 0.05 %, distribution: normal}}]
limits: {{cmrr: [[50, {MASK_DB:g} dB]]}}
"""
    folder = tmp_path_factory.mktemp("normal")
    return run_without_pages(swept(folder, text).spec, folder / "run", jobs=2)


@pytest.mark.parametrize("percent", [1, 5, 50, 95, 99])
def test_quantiles_of_normal_resistors_are_half_normal(normal: Run, percent: int) -> None:
    """Derivation above; median (1 + G)/(0.6745 * 2 s). The n-th part per cent of CMRR in dB is the (100 - n)-th of
    |rho|, the same board."""
    table = pd.read_parquet(normal.folder / "quantiles.parquet")
    rho = 10 ** (-table[f"cmrr_db_p{percent}"][0] / 20)
    rank = DRAWS - percent * DRAWS // 100 + 1  # from the smallest |rho|
    reached = 2 * stats.norm.cdf(rho / SIGMA) - 1
    low, high = stats.beta(rank, DRAWS - rank + 1).interval(1 - LEVEL)
    # First order misses 1e-3 of rho, its second order; the law is no steeper than one per unit of log rho.
    assert low - 1e-3 < reached < high + 1e-3
    if percent == 50:
        assert high - low < 0.06
        median_db = 20 * np.log10(11 / (0.6745 * 2 * 5e-4 / 3))
        assert normal.cases["cmrr_db_p50_at_50hz"][0] == pytest.approx(median_db, abs=0.5)


def test_rho_of_normal_resistors_is_normal_with_its_sign(normal: Run) -> None:
    """Kolmogorov and Smirnov on the signed rho of the kept curves."""
    curves = normal.curves[normal.curves["draw"] > 0]
    common = curves["common_re"] + 1j * curves["common_im"]
    rho = (common / (curves["differential_re"] + 1j * curves["differential_im"])).to_numpy()
    assert np.abs(rho.imag).max() < 1e-6 * SIGMA + 1e-9
    assert stats.kstest(rho.real, stats.norm(0, SIGMA).cdf).pvalue > LEVEL


def test_the_yields_interval_covers_the_closed_form(normal: Run) -> None:
    """The share of |rho| below the mask by the half-normal law, 90.2 % here; and the ends of the interval are those
    of Clopper and Pearson, Biometrika 26, 1934: quantiles of the beta distribution."""
    case = normal.cases.iloc[0]
    expected = 2 * stats.norm.cdf(10 ** (-MASK_DB / 20) / SIGMA) - 1
    assert case["yield_low"] < expected < case["yield_high"]
    passed = round(case["yield"] * DRAWS)
    assert 0.8 < case["yield"] < 1
    assert case["yield_low"] == pytest.approx(stats.beta.ppf(0.025, passed, DRAWS - passed + 1), rel=1e-9)
    assert case["yield_high"] == pytest.approx(stats.beta.ppf(0.975, passed + 1, DRAWS - passed), rel=1e-9)


def test_the_worst_draw_is_short_of_the_worst_case(normal: Run, solver: BatchSolver) -> None:
    """Of the three ways, Monte Carlo meets about 3.7 sigma of 2 s/(1 + G) in 4000 draws, the vertex is at 6 sigma."""
    worst_db = decibels(worst(solver, 10.0, 5e-4).worst)
    low, high = (
        stats.norm.isf(q / 2) ** -1
        for q in (1 - (LEVEL / 2) ** (1 / DRAWS), 1 - (1 - LEVEL / 2) ** (1 / DRAWS))
    )
    met = SIGMA / 10 ** (-normal.cases["cmrr_db_lowest_at_50hz"][0] / 20)
    assert min(low, high) * 0.999 < met < max(low, high) * 1.001
    assert normal.cases["cmrr_db_lowest_at_50hz"][0] > worst_db + 2


# Signed sums


def assert_sigma(rho: Floats, sigma: float, kurtosis: float = 3.0) -> None:
    """Standard deviation and mean of the draws, within what LEVEL allows for so many."""
    z = stats.norm.isf(LEVEL / 2)
    count = len(rho)
    assert abs(rho.mean()) < z * sigma / np.sqrt(count)
    assert abs(rho.std() / sigma - 1) < z * np.sqrt((kurtosis - 1) / (4 * count)) + 1e-3


def test_resistors_and_opamp_add_as_signed_reciprocals(solver: BatchSolver) -> None:
    """1/CMRR = 1/CMRR_R + 1/CMRR_OA with signs, on each board and so in their variances.

    Pallas-Areny and Webster, IEEE Trans. Instrum. Meas. 40(4), 1991 (from memory). Neglected: second order, t.
    """
    t, least = 1e-3, 1e4
    drawn = Drawn(
        solver, "difference", difference(10.0),
        {"of": list(RESISTORS), "absolute": t, "distribution": "normal"}, {"of": ["A1.cmrr"], "least": "80 dB"},
    )  # fmt: skip
    resistors, opamp = drawn.resistors(t, 10.0), drawn.k["A1.cmrr"]
    np.testing.assert_allclose(
        drawn.rho, resistors + opamp, atol=2e-3 * (np.abs(resistors).max() + np.abs(opamp).max())
    )
    assert_sigma(drawn.rho.real, np.hypot(2 * t / 3 / 11, 1 / (3 * least)))
    # Adding sizes instead, without signs, would be far off.
    assert np.abs(np.abs(drawn.rho) - np.abs(resistors) - np.abs(opamp)).max() > 0.1 * np.abs(drawn.rho).max()


@pytest.mark.parametrize("absolute", [1e-4, 0.01, 0.2])
def test_a_matched_sets_absolute_tolerance_leaves_cmrr(solver: BatchSolver, absolute: float) -> None:
    """Derivation: one factor common to R1..R4 cancels in rho, so only the matching reaches it, whatever the
    absolute tolerance. To second order of the matching, and the near-ideal op-amp's loading, 1e-9."""
    matching = 1e-4
    entry = {"of": list(RESISTORS), "absolute": absolute, "matching": matching}
    drawn = Drawn(solver, "difference", difference(10.0), entry, draws=1000)
    expected = drawn.resistors(matching, 10.0)
    np.testing.assert_allclose(drawn.rho, expected, atol=3e-4 * np.abs(expected).max() + 1e-9)
    assert_sigma(drawn.rho.real, 2 * matching / np.sqrt(3) / 11)
    assert np.abs(drawn.gain / 10 - 1).max() < 2.1 * matching


def test_three_opamp_stages_take_the_difference_of_cmrrs(solver: BatchSolver) -> None:
    """rho = k1 - k2 + k3/G1 (derivation), so sigma is sqrt(2 + 1/G1^2)/(3 CMRR) for one least CMRR."""
    entry = {"of": ["A1.cmrr", "A2.cmrr", "A3.cmrr"], "least": "80 dB"}
    drawn = Drawn(solver, "three-opamp", three_opamp(first_gain=11.0), entry)
    expected = drawn.k["A1.cmrr"] - drawn.k["A2.cmrr"] + drawn.k["A3.cmrr"] / 11
    np.testing.assert_allclose(drawn.rho, expected, atol=1e-3 * np.abs(expected).max())
    assert_sigma(drawn.rho.real, np.sqrt(2 + 1 / 121) * 1e-4 / 3)
    assert stats.kstest(drawn.rho.real, stats.norm(0, np.sqrt(2 + 1 / 121) * 1e-4 / 3).cdf).pvalue > LEVEL


def test_three_opamp_stages_take_the_difference_of_reciprocal_bandwidths(solver: BatchSolver) -> None:
    """rho = j f (1/GBW2 - 1/GBW1), any gain (derivation), as a distribution.

    With GBW rectangular, 1 +- b of 1 MHz: E[1/x] = artanh(b)/b and E[1/x^2] = 1/(1 - b^2), so the variance of the
    difference is twice 1/(1 - b^2) - (artanh(b)/b)^2; its distribution function by quadrature over one of the two.
    Neglected: f/GBW times the closed-loop gain of the near-ideal A3, and of the first stage, 1e-2 together.
    """
    b, frequency_hz = 0.3, 100.0
    parts = three_opamp(first_gain=11.0) | {
        f"{name}.{key}": value
        for name in ("A1", "A2")
        for key, value in (("gain_bandwidth", 1e6), ("open_loop_gain", 1e9))
    }
    entry = {"of": ["A1.gain_bandwidth", "A2.gain_bandwidth"], "absolute": b}
    drawn = Drawn(solver, "three-opamp", parts, entry, frequency_hz=frequency_hz)
    first, second = (1e6 * (1 + b * drawn.errors[f"{name}.gain_bandwidth"]) for name in ("A1", "A2"))
    np.testing.assert_allclose(
        drawn.rho, 1j * frequency_hz * (1 / second - 1 / first), atol=2e-3 * np.abs(drawn.rho).max()
    )

    scaled = drawn.rho.imag * 1e6 / frequency_hz
    variance = 2 * (1 / (1 - b * b) - (np.arctanh(b) / b) ** 2)
    assert_sigma(scaled, float(np.sqrt(variance)), kurtosis=float(stats.kurtosis(scaled, fisher=False)))
    x = np.linspace(1 - b, 1 + b, 4001)

    def below(limit: Floats) -> Floats:
        """P(1/x2 - 1/x1 <= limit): x2 is at least 1/(limit + 1/x1), where that is positive."""
        edge = np.atleast_1d(limit)[:, np.newaxis] + 1 / x
        least = np.where(edge > 0, 1 / np.where(edge > 0, edge, 1.0), np.inf)
        share: Floats = np.trapezoid(np.clip((1 + b - least) / (2 * b), 0, 1), x, axis=1) / (2 * b)
        return share

    assert stats.kstest(scaled, below).pvalue > LEVEL
