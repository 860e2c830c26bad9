"""Buffered-difference, three-op-amp and two-op-amp stages against closed forms.

Sources are derivations, one line each, from ideal op-amps whose only fault is the one under test.
"""

import numpy as np
import pytest

from tests.published.parts import IDEAL, TYPICAL, buffered_difference, opamps, three_opamp, two_opamp
from tests.solving import solve

FREQUENCY_HZ = np.array([1.0, 60.0, 1000.0])

ROUND_OFF = 1e-9
"""ngspice's error of about 1e-10 V at the output, with a margin of ten."""

FINITE_GAIN = 2e-6
"""Relative error of gains by the near-ideal op-amp: gain/A is below 1e-6 at 1 kHz for gains below 1000."""


@pytest.mark.parametrize(("first_gain", "gain"), [(1.0, 1.0), (11.0, 2.0), (101.0, 1.0), (501.0, 0.5)])
def test_three_opamp_differential_gain(first_gain, gain):
    """(1 + (RF1 + RF2)/RG) R2/R1: RG sees the differential input voltage, RF1 and RF2 carry its current."""
    pair = solve("three-opamp", three_opamp(first_gain, gain), FREQUENCY_HZ)
    np.testing.assert_allclose(pair.differential_gain, first_gain * gain, rtol=FINITE_GAIN)


@pytest.mark.parametrize("gain", [1.0, 10.0])
def test_buffered_difference_gain(gain):
    pair = solve("buffered-difference", buffered_difference(gain), FREQUENCY_HZ)
    np.testing.assert_allclose(pair.differential_gain, gain, rtol=FINITE_GAIN)


@pytest.mark.parametrize("rg", [None, 2e4, 2e3])
def test_two_opamp_differential_gain(rg):
    """1 + R4/R3 + 2 R4/RG for R1 = R4, R2 = R3: the sum of currents into A2's summing node."""
    pair = solve("two-opamp", two_opamp(10.0, rg), FREQUENCY_HZ)
    np.testing.assert_allclose(pair.differential_gain, 11 + (0 if rg is None else 2e5 / rg), rtol=FINITE_GAIN)


@pytest.mark.parametrize("first_gain", [1.0, 11.0, 101.0])
@pytest.mark.parametrize(("name", "sign"), [("R1", 1), ("R4", 1), ("R2", -1), ("R3", -1)])
def test_first_stage_divides_the_difference_stages_error(first_gain, name, sign):
    """The first stage passes common mode with a gain of one, the differential with G1: rho = rho_diff/G1.

    Neglected: second order of d = 1e-3.
    """
    error, parts = 1e-3, three_opamp(first_gain, 2.0)
    parts[name] *= 1 + error
    pair = solve("three-opamp", parts, FREQUENCY_HZ)
    np.testing.assert_allclose(
        pair.error_ratio, sign * error / 3 / first_gain, rtol=1.5e-3, atol=ROUND_OFF / first_gain
    )


def test_buffers_do_not_divide_the_difference_stages_error():
    """As above with G1 = 1."""
    parts = buffered_difference(10.0)
    parts["R4"] *= 1 + 1e-3
    pair = solve("buffered-difference", parts, FREQUENCY_HZ)
    np.testing.assert_allclose(pair.error_ratio, 1e-3 / 11, rtol=1.5e-3, atol=ROUND_OFF)


@pytest.mark.parametrize(("k1", "k2"), [(1e-4, 0.25e-4), (1e-4, -1e-4), (-0.5e-4, 1e-4)])
@pytest.mark.parametrize(
    ("topology", "parts"),
    [("three-opamp", three_opamp(101.0)), ("buffered-difference", buffered_difference())],
)
def test_input_opamps_errors_subtract(topology, parts, k1, k2):
    """Each op-amp's k Vcm is in series with its input: rho = k1 - k2. Neglected: k = 1e-4 relative."""
    parts = parts | {
        "A1.cmrr": 1 / abs(k1),
        "A1.cmrr_sign": float(np.sign(k1)),
        "A2.cmrr": 1 / abs(k2),
        "A2.cmrr_sign": float(np.sign(k2)),
    }
    pair = solve(topology, parts, FREQUENCY_HZ)
    np.testing.assert_allclose(pair.error_ratio, k1 - k2, rtol=2e-4, atol=ROUND_OFF)


@pytest.mark.parametrize("topology", ["three-opamp", "two-opamp"])
def test_equal_input_opamps_cancel(topology):
    """k1 = k2 leaves nothing of 1e-3 but its second order, 1e-6: a nominal run is too good to be true.

    In the two-op-amp stage A1 sees the minus leg and A2 the plus leg, rho = k2 - k1.
    """
    parts = three_opamp(101.0) if topology == "three-opamp" else two_opamp(10.0, 2e3)
    parts |= {"A1.cmrr": 1e3, "A2.cmrr": 1e3}
    pair = solve(topology, parts, np.array([1.0, 10.0]))
    assert np.abs(pair.error_ratio).max() < 2e-6
    parts["A2.cmrr_sign"] = -1.0
    expected = 2e-3 if topology == "three-opamp" else -2e-3
    np.testing.assert_allclose(
        solve(topology, parts, np.array([1.0])).error_ratio, expected, rtol=2e-3, atol=ROUND_OFF
    )


@pytest.mark.parametrize("first_gain", [1.0, 11.0, 101.0])
def test_unequal_gain_bandwidths_show_at_any_gain(first_gain):
    """In common mode each input op-amp needs Vcm j f/GBW at its input: rho = j f (1/GBW2 - 1/GBW1).

    A1 and A2 have equal A0, so that 1/A = 1/A0 + j f/GBW differs in the second term only.
    Neglected: f/GBW, relative, 1e-3 at 1 kHz, twice where two terms meet.
    """
    parts = three_opamp(first_gain, 2.0, TYPICAL) | opamps("A3", IDEAL) | {"A2.gain_bandwidth": 3e6}
    frequency = np.array([100.0, 300.0, 1000.0])
    pair = solve("three-opamp", parts, frequency)
    np.testing.assert_allclose(
        pair.error_ratio, 1j * frequency * (1 / 3e6 - 1 / 1e6), rtol=2e-3, atol=ROUND_OFF
    )


@pytest.mark.parametrize("mismatch", [1e-3, 0.1])
def test_feedback_resistors_of_the_first_stage_need_no_match(mismatch):
    """In common mode RG carries no current, so RF1 and RF2 drop none: no error to first order, nor to any."""
    parts = three_opamp(101.0)
    parts["RF2"] *= 1 + mismatch
    pair = solve("three-opamp", parts, np.array([1.0, 60.0]))
    assert np.abs(pair.common_gain).max() < ROUND_OFF


@pytest.mark.parametrize("rg", [None, 2e3])
@pytest.mark.parametrize(("name", "sign"), [("R1", 1), ("R3", 1), ("R2", -1), ("R4", -1)])
def test_two_opamp_resistors(name, sign, rg):
    """In common mode RG carries no current: A_cm = 1 - R2 R4/(R1 R3).

    Exact but for A1's finite gain, which adds A_dm (1 + R2/R1)/A0, 1.2e-7 (checked with the lag below).
    The first order, rho = (d1 + d3 - d2 - d4)/A_dm, neglects d = 1e-3 relative.
    """
    error, parts = 1e-3, two_opamp(10.0, rg)
    parts[name] *= 1 + error
    pair = solve("two-opamp", parts, np.array([1.0, 60.0]))
    exact = 1 - parts["R2"] * parts["R4"] / (parts["R1"] * parts["R3"])
    np.testing.assert_allclose(pair.common_gain.real, exact, rtol=0, atol=1.3e-7)
    gain = 11 + (0 if rg is None else 2e5 / rg)
    np.testing.assert_allclose(pair.error_ratio.real, sign * error / gain, rtol=2e-3)


@pytest.mark.parametrize("rg", [None, 2e3])
@pytest.mark.parametrize("ratio", [4.0, 10.0])
def test_two_opamp_first_amplifiers_lag(ratio, rg):
    """A1's output, Vcm (1 + R2/R1), needs that much of 1/A at its input, A2's needs nothing, its output
    being 0: rho = (1 + R2/R1)/A, of which j (f/GBW)(1 + R2/R1) is the lag, at any gain.

    Neglected: f/GBW (1 + R2/R1) relative, 1.3e-3 at 1 kHz, and the real part 1/A0, 1e-4 of it at 100 Hz.
    """
    parts = two_opamp(ratio, rg) | {"A1.open_loop_gain": 1e8, "A1.gain_bandwidth": 1e6}
    frequency = np.array([100.0, 300.0, 1000.0])
    pair = solve("two-opamp", parts, frequency)
    expected = 1j * frequency / 1e6 * (1 + 1 / ratio)
    np.testing.assert_allclose(pair.error_ratio, expected, rtol=2e-3, atol=ROUND_OFF)


def test_two_opamp_reference_resistance_counts_as_an_error_of_r1():
    """Only R1 returns to the reference: d1 = RREF/R1 and A_cm = d1 = 1e-3 to first order (1e-3 relative)."""
    pair = solve("two-opamp", two_opamp(10.0, 2e3) | {"RREF": 100.0}, np.array([1.0, 60.0]))
    np.testing.assert_allclose(pair.common_gain.real, 1e-3, rtol=1.5e-3)
