"""Figures against closed forms of rational functions, their order, and their bounds at the floor."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from modepair.reports.figures import (
    HALF_POWER_DB,
    figures,
    in_order_of_figures,
    passband,
    spot_column,
    spot_indices,
    spot_text,
)
from modepair.reports.pairs import ModePair

SPOTS = (50.0, 60.0, 1e3)
F = np.unique(np.concatenate([np.geomspace(1.0, 1e6, 241), SPOTS]))


def one_pole(pole_hz, corner_hz, gain=100.0, rho=1e-5):
    """A_dm with one pole; rho grows from a corner: CMRR then has that corner exactly."""
    differential = gain / (1 + 1j * F / pole_hz)
    return differential, rho * (1 + 1j * F / corner_hz) * differential


def test_single_pole_and_corner():
    differential, common = one_pole(23e3, 310.0)
    row = figures(ModePair(F, common, differential), SPOTS).iloc[0]
    # abs(A_dm) at 1 Hz is 100 / sqrt(1 + (1/23e3)^2): 1e-9 below 100.
    assert row["differential_gain"] == pytest.approx(100.0, rel=1e-8)
    # Linear interpolation in dB over x = ln f, 40 points a decade: the error is at most h^2/8 times the
    # curvature; h = ln(10)/40 and d2(dB)/dx2 = 10/ln(10) at a pole make 1.8e-3 dB. On the slope there, of
    # 4.34 dB per e-fold, that is 5e-4 in f.
    assert row["bandwidth_hz"] == pytest.approx(23e3, rel=5e-4)
    # The start at 1 Hz has itself fallen by (1/310)^2: 1e-5.
    assert row["cmrr_corner_hz"] == pytest.approx(310.0, rel=5e-4)
    for spot in SPOTS:
        exact = 100.0 - 10 * np.log10(1 + (spot / 310.0) ** 2)
        assert row[spot_column(spot)] == pytest.approx(exact, abs=1e-9)
    assert row["cmrr_db_lowest"] == pytest.approx(100.0 - 10 * np.log10(1 + (1e6 / 310.0) ** 2), abs=1e-9)
    assert row["cmrr_lowest_at_hz"] == 1e6
    assert row["above_floor"] == ""


def test_columns_in_order():
    frame = figures(ModePair(F, *reversed(one_pole(1e4, 1e2))), SPOTS)
    assert frame.columns.tolist() == [
        "differential_gain", "bandwidth_hz", "cmrr_db_at_50hz", "cmrr_db_at_60hz", "cmrr_db_at_1000hz",
        "cmrr_corner_hz", "cmrr_db_lowest", "cmrr_lowest_at_hz", "above_floor",
    ]  # fmt: skip


def test_nothing_falls_in_the_band():
    frame = figures(ModePair(F, np.full(F.shape, 1e-3), np.full(F.shape, 10.0)), SPOTS)
    assert np.isnan(frame.loc[0, "bandwidth_hz"])
    assert np.isnan(frame.loc[0, "cmrr_corner_hz"])
    assert frame.loc[0, "cmrr_lowest_at_hz"] == 1.0


def test_lowest_inside_the_band():
    # A resonance of rho: at f0 it is Q = 8 times its low-frequency value.
    f0 = 1e3
    rho = 1e-5 / (1 - (F / f0) ** 2 + 1j * F / f0 / 8)
    row = figures(ModePair(F, rho, np.ones(F.shape)), SPOTS).iloc[0]
    assert row["cmrr_lowest_at_hz"] == f0
    assert row["cmrr_db_lowest"] == pytest.approx(100 - 20 * np.log10(8), abs=1e-9)


def test_first_crossing_counts():
    gain = np.array([1.0, 1.0, 0.5, 1.0, 0.1])
    f = np.array([1.0, 10.0, 100.0, 1e3, 1e4])
    bandwidth = figures(ModePair(f, gain * 1e-4, gain), ()).loc[0, "bandwidth_hz"]
    # Half power on the straight line from 0 dB at 10 Hz to -6.02 dB at 100 Hz: half way in log f.
    assert bandwidth == pytest.approx(10.0**1.5)


@settings(max_examples=30)
@given(st.permutations(range(6)))
def test_order_of_cases_does_not_matter(order):
    pairs = [
        one_pole(10.0 ** (3 + k / 3), 10.0 ** (1 + k / 2), gain=1 + k, rho=10.0 ** (-4 - 2 * k))
        for k in range(6)
    ]
    differential, common = (np.array([pair[side] for pair in pairs]) for side in (0, 1))
    straight = figures(ModePair(F, common, differential), SPOTS)
    mixed = figures(ModePair(F, common[list(order)], differential[list(order)]), SPOTS)
    assert straight.iloc[list(order)].reset_index(drop=True).equals(mixed)
    assert straight["above_floor"].ne("").any()


def test_single_case_equals_its_row():
    differential, common = one_pole(1e4, 1e2)
    single = figures(ModePair(F, common, differential), SPOTS)
    stacked = figures(ModePair(F, np.stack([common, common]), np.stack([differential, differential])), SPOTS)
    assert stacked.iloc[:1].equals(single)


def test_all_at_the_floor():
    row = figures(ModePair(F, np.zeros(F.shape), one_pole(1e4, 1)[0]), SPOTS).iloc[0]
    assert row["above_floor"] == "50 Hz, 60 Hz, 1 kHz, corner, lowest"
    assert np.isnan(row["cmrr_corner_hz"])
    assert row["bandwidth_hz"] == pytest.approx(1e4, rel=5e-4)


def test_corner_from_the_floor_is_an_upper_bound():
    # rho = 1e-14 (1 + jf/10): the true corner is 10 Hz, hidden until |A_cm| passes 1e-10, at 1 kHz.
    differential, common = one_pole(1e9, 10.0, rho=1e-14)
    row = figures(ModePair(F, common, differential), SPOTS).iloc[0]
    assert row["above_floor"] == "50 Hz, 60 Hz, corner"
    assert 10.0 < row["cmrr_corner_hz"] < 1e6
    # The bound is a sample at which CMRR is known to lie 3 dB under the floor of the start, 240 dB.
    at = np.flatnonzero(row["cmrr_corner_hz"] == F)
    assert at.size == 1
    assert -20 * np.log10(np.abs(common / differential))[at[0]] <= 240.0 - HALF_POWER_DB


def test_lowest_is_not_flagged_when_a_known_sample_has_it():
    differential, common = one_pole(1e9, 10.0, rho=1e-14)
    row = figures(ModePair(F, common, differential), SPOTS).iloc[0]
    assert "lowest" not in row["above_floor"]
    assert row["cmrr_db_lowest"] == pytest.approx(280.0 - 20 * np.log10(1e5), abs=1e-6)


@pytest.mark.parametrize(
    ("spot_hz", "name"),
    [
        (50.0, "cmrr_db_at_50hz"),
        (1e3, "cmrr_db_at_1000hz"),
        (1e6, "cmrr_db_at_1000000hz"),
        (1e12, "cmrr_db_at_1000000000000hz"),
        (16.7, "cmrr_db_at_16.7hz"),
        (1e-5, "cmrr_db_at_0.00001hz"),
    ],
)
def test_spot_columns_have_no_exponent(spot_hz, name):
    assert spot_column(spot_hz) == name


def test_spot_text():
    assert [spot_text(f) for f in (50.0, 16.6667, 1e3, 1234567.0)] == [
        "50 Hz",
        "16.6667 Hz",
        "1 kHz",
        "1.234567 MHz",
    ]


@given(st.lists(st.integers(0, F.size - 1), max_size=8))
def test_spots_are_found(places):
    assert spot_indices(F, [F[place] * (1 + 4e-10) for place in places]).tolist() == places


@pytest.mark.parametrize("spot", [55.0, 0.5, 2e6, 50.0001])
def test_spots_are_never_interpolated(spot):
    with pytest.raises(
        ValueError, match=rf"spots_hz: {spot:.12g} Hz is not among the \d+ solved .* not interpolated"
    ):
        spot_indices(F, [50.0, spot])


def test_single_frequency():
    row = figures(ModePair(np.array([50.0]), np.array([1e-3]), np.array([1.0])), [50.0]).iloc[0]
    assert row["cmrr_db_at_50hz"] == pytest.approx(60.0)
    assert np.isnan(row["bandwidth_hz"])
    with pytest.raises(ValueError, match="51 Hz is not among the 1 solved"):
        spot_indices(np.array([50.0]), [51.0])


def test_refuses_three_dimensions():
    with pytest.raises(ValueError, match=r"of the shape \(n, F\) or \(F,\), not \(1, 1, \d+\)"):
        figures(ModePair(F, np.ones((1, 1, F.size)), np.ones((1, 1, F.size))), [])


def band_pass(lower_hz, upper_hz, gain=10.0):
    """A_dm with a zero at DC, a pole, and a pole above: its corners are the poles, far apart as they are."""
    return gain * (1j * F / lower_hz) / (1 + 1j * F / lower_hz) / (1 + 1j * F / upper_hz)


def test_an_own_circuit_that_blocks_dc_has_its_gain_in_the_passband():
    differential = band_pass(20.0, 50e3)
    # CMRR rises to 80 dB and falls again from 10 kHz: closed form of both corners.
    rho = 1e-4 * (1 + 20.0 / (1j * F)) * (1 + 1j * F / 10e3)
    pair = ModePair(F, rho * differential, differential)
    row = figures(pair, SPOTS, True).iloc[0]
    # The two poles take 20/50e3 from each other: 4e-4, and the reading 5e-4, as for one pole.
    assert row["differential_gain"] == pytest.approx(10.0, rel=1e-3)
    assert row["lower_corner_hz"] == pytest.approx(20.0, rel=2e-3)
    assert row["bandwidth_hz"] == pytest.approx(50e3, rel=2e-3)
    # The highest CMRR, at sqrt(20 x 10e3) Hz, is (1 + 20/10e3) below 80 dB: the corner is 0.4 % above 10 kHz.
    assert row["cmrr_corner_hz"] == pytest.approx(10e3, rel=0.01)
    # A built-in stage is read as it always was.
    built_in = figures(pair, SPOTS).iloc[0]
    assert built_in["differential_gain"] == abs(differential[0])
    assert "lower_corner_hz" not in built_in


def test_an_own_circuit_that_passes_dc_is_read_as_a_built_in_stage():
    pair = ModePair(F, *reversed(one_pole(23e3, 310.0)))
    pd.testing.assert_frame_equal(figures(pair, SPOTS, True), figures(pair, SPOTS))
    # 3 dB below its largest is where it counts as blocked.
    for peak, index in ((1.41, 0), (1.42, 2)):
        gain = np.array([1.0, 1.0, peak, 0.5])
        assert passband(ModePair(np.array([1.0, 10, 100, 1e3]), gain, gain), True).index.tolist() == [index]


def test_own_circuits_and_built_in_stages_go_together():
    differential = np.stack([band_pass(20.0, 50e3), np.full(F.shape, 3.0)])
    frame = figures(ModePair(F, 1e-4 * differential, differential), SPOTS, np.array([True, False]))
    assert frame["lower_corner_hz"].notna().tolist() == [True, False]
    only = figures(ModePair(F, 1e-4 * differential[1], differential[1]), SPOTS, True)
    both = in_order_of_figures(pd.concat([only, frame], ignore_index=True))
    assert both.columns.tolist() == frame.columns.tolist()


def test_a_passband_beyond_the_band_has_no_corner_there():
    low = band_pass(0.01, 50e3)
    assert np.isnan(passband(ModePair(F, low, low), True).lower_hz).all()
    high = band_pass(20.0, 1e9)
    found = passband(ModePair(F, high, high), True)
    assert np.isnan(found.upper_hz).all()
    assert found.lower_hz[0] == pytest.approx(20.0, rel=2e-3)


@pytest.mark.parametrize("points", [60, 241, 2001])
def test_a_corner_counted_from_the_edge_of_the_passband_does_not_hang_on_the_grid(points):
    """Poles of A_dm at 20 Hz and 20 kHz; rho = r (1 + j f/f1): where CMRR falls throughout, the edge is its best.

    Closed form: |1 + j f/f1|^2 is twice that at the lower edge f0 where f^2 = f1^2 + 2 f0^2.
    """
    hertz = np.geomspace(1.0, 1e6, points)
    differential = 10.0 / ((1 + 20 / (1j * hertz)) * (1 + 1j * hertz / 20e3))
    common = 1e-3 * (1 + 1j * hertz / 15.0) * differential
    row = figures(ModePair(hertz, common, differential), (), True).iloc[0]
    assert row["lower_corner_hz"] == pytest.approx(20.0, rel=6e-3)
    assert row["cmrr_corner_hz"] == pytest.approx(np.sqrt(15.0**2 + 2 * 20.0**2), rel=1e-2)
