"""ModePair: definitions, the numerical floor, and what it refuses."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from modepair.reports.pairs import FLOOR_VOLTS, ModePair

F = np.array([1.0, 10.0, 100.0])
gains = hnp.arrays(
    np.complex128,
    (2, 3),
    elements=st.complex_numbers(min_magnitude=1e-6, max_magnitude=1e6, allow_nan=False, allow_infinity=False),
)


def test_cmrr_of_plain_ratios():
    # 20 log10(100 / 1e-3) = 100 dB by definition; the phase does not matter.
    pair = ModePair(F, np.array([1e-3, 1e-3j, -1e-4]), np.array([100.0, 100j, 1.0]))
    assert pair.cmrr_db == pytest.approx([100.0, 100.0, 80.0], abs=1e-12)
    assert pair.error_ratio == pytest.approx([1e-5, 1e-5, -1e-4])
    assert not pair.above_floor.any()


def test_imbalance_against_capacitance():
    # 1 kohm and 100 pF at 60 Hz: 88.47 dB, to the two digits given (checked with an independent solver).
    f = np.array([60.0])
    rho = 2j * np.pi * f * 1e3 * 100e-12
    assert ModePair(f, rho, np.ones(1)).cmrr_db[0] == pytest.approx(88.47, abs=0.005)


def test_floor_follows_the_differential_gain():
    pair = ModePair(F, np.array([0.0, 1e-11, 2e-10]), np.array([100.0, 10.0, 10.0]))
    assert pair.floor_db == pytest.approx([240.0, 220.0, 220.0])
    assert pair.cmrr_db == pytest.approx([240.0, 220.0, 220.0 - 20 * np.log10(2)])
    assert pair.above_floor.tolist() == [True, True, False]
    assert pair.error_ratio[1] == pytest.approx(1e-12)


@given(gains, gains, st.floats(1e-2, 1e2), st.floats(-3, 3))
def test_scaling_both_gains_leaves_cmrr(common, differential, size, angle):
    factor = size * np.exp(1j * angle)
    one = ModePair(F, common, differential)
    other = ModePair(F, common * factor, differential * factor)
    # Both lie far above the floor: magnitudes of 1e-8 and more. Only rounding remains.
    assert other.cmrr_db == pytest.approx(one.cmrr_db, abs=1e-9)


@given(gains, gains)
def test_cmrr_never_passes_the_floor(common, differential):
    pair = ModePair(F, common * 1e-8, differential)
    assert np.all(pair.cmrr_db <= pair.floor_db)
    assert np.array_equal(pair.above_floor, np.abs(common * 1e-8) <= FLOOR_VOLTS)


def test_arrays_are_read_only_and_the_callers_stay_writable():
    common = np.ones(3, complex)
    pair = ModePair(F, common, np.ones(3, complex))
    with pytest.raises(ValueError, match="read-only"):
        pair.common_gain[0] = 2
    common[0] = 2


def test_frame():
    frame = ModePair(F, np.array([1e-3, 1j, 0]), np.array([1 + 2j, 1, 1])).to_frame()
    assert frame.columns.tolist() == [
        "frequency_hz", "common_re", "common_im", "differential_re", "differential_im",
        "cmrr_db", "above_floor",
    ]  # fmt: skip
    assert frame["common_im"].tolist() == [0, 1, 0]
    assert frame["differential_im"].tolist() == [2, 0, 0]
    assert frame["above_floor"].tolist() == [False, False, True]
    with pytest.raises(ValueError, match=r"to_frame takes a single case, of the shape \(F,\), not \(1, 3\)"):
        ModePair(F, np.ones((1, 3)), np.ones((1, 3))).to_frame()


@pytest.mark.parametrize(
    ("frequency_hz", "common", "differential", "message"),
    [
        (np.ones((1, 3)), np.ones(3), np.ones(3), r"frequency_hz must have the shape \(F,\)"),
        (np.empty(0), np.empty(0), np.empty(0), "F at least 1"),
        (np.array([1.0, 1.0, 2.0]), np.ones(3), np.ones(3), "positive and strictly ascending"),
        (np.array([0.0, 1.0, 2.0]), np.ones(3), np.ones(3), "positive and strictly ascending"),
        (np.array([1.0, np.nan, 2.0]), np.ones(3), np.ones(3), "finite, positive"),
        (
            F,
            np.ones(2),
            np.ones(3),
            r"common_gain must have one value per frequency .* \(3\), not the shape \(2,\)",
        ),
        (F, np.ones((2, 3)), np.ones(3), "must have one shape"),
        (F, np.array([1, np.inf, 1]), np.ones(3), r"common_gain must be finite \(at 10 Hz\)"),
        (
            F,
            np.ones((2, 3)),
            np.array([[1, 1, 1], [1, 1, np.nan]]),
            r"differential_gain .* \(at 100 Hz, row 1\)",
        ),
        (
            F,
            np.ones(3),
            np.array([0, 1, 1]),
            r"differential_gain must not be 0 \(at 1 Hz\): CMRR is not defined",
        ),
    ],
)
def test_refuses(frequency_hz, common, differential, message):
    with pytest.raises(ValueError, match=message):
        ModePair(frequency_hz, common, differential)
