"""Measured against simulated: differences, what the residual explains, and the sums of both."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.reports import ModePair
from modepair.reports.differences import (
    AT_FLOOR,
    BEYOND,
    EXPLAINED,
    OUTSIDE,
    agreements,
    all_differences,
    differences,
    matching_cases,
)
from modepair.sweeps.measured import Measurement

HZ = np.array([10.0, 100.0, 1000.0])


def flat(cmrr_db: float) -> ModePair:
    """One V/V of differential gain, and a CMRR that does not depend on frequency."""
    return ModePair(HZ, np.full(3, 10 ** (-cmrr_db / 20), complex), np.ones(3, complex))


def measured(
    levels: dict[float, float], residual_db: float = math.inf, **settings: float | str
) -> Measurement:
    return Measurement(
        "bench",
        np.array(list(levels)),
        np.array(list(levels.values())),
        np.full(len(levels), residual_db),
        settings,
    )


def test_difference_is_measured_minus_simulated_between_solved_frequencies() -> None:
    falling = ModePair(HZ, np.array([1e-5, 1e-4, 1e-3], complex), np.ones(3, complex))  # 100, 80, 60 dB
    table = differences(measured({10.0: 101.0, math.sqrt(1e5): 69.0}), 4, falling)
    np.testing.assert_allclose(table["simulated_db"], [100.0, 70.0], rtol=1e-12)  # half-way over log f
    np.testing.assert_allclose(table["difference_db"], [1.0, -1.0], atol=1e-9)  # subtraction of 100 from 101
    assert table["case"].tolist() == [4, 4]
    assert table["remark"].tolist() == ["", ""]
    assert table["residual_db"].isna().all()


def test_remarks() -> None:
    table = differences(measured({1.0: 90.0, 10.0: 111.0, 100.0: 100.0, 1000.0: 80.0}, 110.0), 1, flat(98.0))
    assert table["remark"].tolist() == [OUTSIDE, BEYOND, EXPLAINED, ""]
    # 100 dB read with a residual of 110 dB: between -20 log10(1e-5 + 10^-5.5) and -20 log10(1e-5 - 10^-5.5).
    assert table["at_least_db"][2] == pytest.approx(97.61, abs=0.005)  # to the digits shown
    assert table["at_most_db"][2] == pytest.approx(103.30, abs=0.005)
    assert np.isnan(table["at_most_db"][1])


def test_a_simulated_bound_is_compared_with_nothing() -> None:
    perfect = ModePair(HZ, np.zeros(3, complex), np.ones(3, complex))
    table = differences(measured({100.0: 120.0}), 1, perfect)
    assert table["remark"].tolist() == [AT_FLOOR]
    assert table["difference_db"].isna().all()
    (one,) = agreements(table)
    assert one.text() == "bench against case 1: no frequency can be compared."


@given(true_db=st.floats(40, 140), residual_db=st.floats(60, 140), phase=st.floats(0, 2 * math.pi))
def test_the_bounds_hold_whatever_the_phase_of_the_instruments_error(
    true_db: float, residual_db: float, phase: float
) -> None:
    """Triangle inequality: what an instrument reads from a circuit allows that circuit, at any phase."""
    rho = 10 ** (-true_db / 20) + 10 ** (-residual_db / 20) * np.exp(1j * phase)
    reading_db = -20 * math.log10(max(abs(rho), 1e-12))
    row = differences(measured({100.0: reading_db}, residual_db), 1, flat(true_db)).iloc[0]
    tolerance = 1e-6  # relative 1e-16 of the larger phasor, where the two nearly cancel
    assert row["at_least_db"] <= true_db + tolerance
    if not math.isnan(row["at_most_db"]):
        assert true_db <= row["at_most_db"] + tolerance


def test_sums_leave_out_what_the_instrument_cannot_tell() -> None:
    (one,) = agreements(differences(measured({10.0: 120.0, 100.0: 93.0, 1000.0: 86.0}, 115.0), 2, flat(90.0)))
    assert (one.compared, one.beyond) == (2, 1)
    assert one.rms_db == pytest.approx(math.sqrt((9 + 16) / 2), rel=1e-9)  # 3 and -4 dB
    assert (one.largest_db, one.largest_at_hz) == (pytest.approx(-4.0, abs=1e-9), 1000.0)
    assert one.text("imbalance 10") == (
        "bench against case 2 (imbalance 10): 3.5 dB rms over 2 frequencies; furthest at 1 kHz, where the bench reads "
        "4.0 dB below the simulation. 1 point exceeds the instrument's residual CMRR, which no reading can resolve, "
        "and is left out of these figures."
    )


def test_a_measurement_belongs_to_the_cases_with_its_axis_values() -> None:
    cases = pd.DataFrame(
        {"case": [1, 2, 3, 4], "a": ["x", "x", "y", "y"], "b": [10.0, 20.0, 10.0, 20.0 + 1e-9]}
    )
    assert matching_cases(measured({10.0: 1.0}), cases) == [1, 2, 3, 4]
    assert matching_cases(measured({10.0: 1.0}, a="y"), cases) == [3, 4]
    assert matching_cases(measured({10.0: 1.0}, b=20.0), cases) == [2, 4]
    assert matching_cases(measured({10.0: 1.0}, a="x", b=20.0), cases) == [2]
    table = all_differences([measured({10.0: 91.0}, a="x")], cases, {1: flat(90.0)})
    assert table["case"].tolist() == [1]  # case 2 was not solved
    assert all_differences([], cases, {}).columns.tolist()[:2] == ["measurement", "case"]
