"""The difference stage (one op-amp) against closed forms.

Source of the exact gains: derivation, with the ideal op-amp's v+ = v-:
v+ = vp R4/(R3 + R4) and v- = (R2 vm + R1 vout)/(R1 + R2), so that
A_cm = (R1 R4 - R2 R3)/(R1 (R3 + R4)) and A_dm = [R4 (R1 + R2)/(R1 (R3 + R4)) + R2/R1]/2.
The first-order rows follow from it: rho = (d1 + d4 - d2 - d3)/(1 + G) with the relative errors d of R1..R4.
"""

import numpy as np
import pytest

from tests.published.parts import IDEAL, TYPICAL, difference, opamps
from tests.solving import solve

FREQUENCY_HZ = np.array([1.0, 60.0, 1000.0])

ROUND_OFF = 1e-9
"""ngspice's error of about 1e-10 V at the output, with a margin of ten; rho adds at most this."""

FINITE_GAIN = 2e-7
"""Relative error of gains by the near-ideal op-amp: (1 + G)/A at 1 kHz is 1e-7 for G = 100."""


@pytest.mark.parametrize("gain", [0.5, 1.0, 10.0, 100.0])
def test_ideal_differential_gain_is_the_resistor_ratio(gain):
    pair = solve("difference", difference(gain), FREQUENCY_HZ)
    np.testing.assert_allclose(pair.differential_gain, gain, rtol=FINITE_GAIN)


@pytest.mark.parametrize(
    "resistors",
    [(1e4, 5e4, 1e4, 5.1e4), (9.7e3, 1.1e5, 1.2e4, 9e4), (1e3, 1e3, 2e3, 1e3), (1e5, 1e4, 1e5, 2e4)],
)
def test_exact_gains_of_any_four_resistors(resistors):
    """Derivation above; errors may be large."""
    r1, r2, r3, r4 = resistors
    parts = dict(zip(("R1", "R2", "R3", "R4"), resistors, strict=True)) | opamps("A1", IDEAL)
    pair = solve("difference", parts, FREQUENCY_HZ)
    common = (r1 * r4 - r2 * r3) / (r1 * (r3 + r4))
    differential = (r4 * (r1 + r2) / (r1 * (r3 + r4)) + r2 / r1) / 2
    np.testing.assert_allclose(pair.common_gain, common, rtol=FINITE_GAIN, atol=ROUND_OFF)
    np.testing.assert_allclose(pair.differential_gain, differential, rtol=FINITE_GAIN)


@pytest.mark.parametrize(("name", "sign"), [("R1", 1), ("R4", 1), ("R2", -1), ("R3", -1)])
@pytest.mark.parametrize("gain", [1.0, 10.0, 100.0])
def test_each_resistor_error_counts_with_its_sign(name, sign, gain):
    """First order of the exact gains: rho = sign d/(1 + G).

    With d = 1e-3 the neglected terms are below d relative to the first.
    """
    error, parts = 1e-3, difference(gain)
    parts[name] *= 1 + error
    pair = solve("difference", parts, FREQUENCY_HZ)
    np.testing.assert_allclose(pair.error_ratio, sign * error / (1 + gain), rtol=error, atol=ROUND_OFF)


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("gain", [1.0, 100.0])
def test_the_opamps_own_cmrr_is_the_stages(sign, gain):
    """Derivation: with matched legs the op-amp sees Vcm G/(1 + G); k times that is amplified by 1 + G, so
    that A_cm = G k and rho = k.

    Exact but for k's own second order, 1e-4 relative.
    """
    parts = difference(gain) | {"A1.cmrr": 1e4, "A1.cmrr_sign": float(sign)}
    pair = solve("difference", parts, FREQUENCY_HZ)
    np.testing.assert_allclose(pair.error_ratio, sign * 1e-4, rtol=1e-4, atol=ROUND_OFF)


@pytest.mark.parametrize("sign", [1, -1])
def test_resistors_and_opamp_add_as_signed_reciprocals(sign):
    """1/CMRR = 1/CMRR_R + 1/CMRR_OA with signs.

    Source: Pallas-Areny and Webster, IEEE Trans. Instrum. Meas. 40(4), 1991 (from memory). Neglected:
    second order of the resistor's 1e-3, which counts more than twice where the two nearly cancel.
    """
    error, k = 1e-3, 1 / 2e4
    parts = difference(10.0) | {"A1.cmrr": 1 / k, "A1.cmrr_sign": float(sign)}
    parts["R4"] *= 1 + error
    pair = solve("difference", parts, FREQUENCY_HZ)
    resistors = error / 11
    np.testing.assert_allclose(pair.error_ratio, resistors + sign * k, rtol=3e-3, atol=ROUND_OFF)
    np.testing.assert_allclose(10 ** (-pair.cmrr_db / 20), abs(resistors + sign * k), rtol=3e-3)


def test_reference_resistance_counts_as_an_error_of_r4():
    """Derivation: RREF is in series with R4, d4 = r/R4. Neglected: d4 = 1e-4 relative."""
    parts = difference(10.0) | {"RREF": 10.0}
    pair = solve("difference", parts, FREQUENCY_HZ)
    np.testing.assert_allclose(pair.error_ratio, 10 / 1e5 / 11, rtol=2e-4, atol=ROUND_OFF)


@pytest.mark.parametrize(("imbalance", "sign"), [(10.0, -1), (-10.0, 1)])
def test_source_imbalance_counts_as_an_error_of_r3_or_r1(imbalance, sign):
    """Derivation: in series with R3 (plus leg), d3 = r/R3 and rho = -r/(R1 + R2); with R1, the opposite.

    Neglected: r/(2 (R1 + R2)) relative, 5e-5.
    """
    pair = solve("difference", difference(10.0) | {"RI": imbalance}, FREQUENCY_HZ)
    np.testing.assert_allclose(pair.error_ratio, sign * 10 / 1.1e5, rtol=1e-4, atol=ROUND_OFF)


@pytest.mark.parametrize("margin", [{}, {"A1.phase_margin": 45.0}])
@pytest.mark.parametrize("gain", [1.0, 10.0, 100.0])
def test_finite_gain_alone_makes_no_error(margin, gain):
    """Derivation: with matched legs vout = 0 makes v+ - v- = 0, whatever A(s) is. Only round-off is left."""
    pair = solve("difference", difference(gain, TYPICAL) | margin, np.array([1.0, 1e3, 1e5, 1e6]))
    assert np.abs(pair.common_gain).max() < ROUND_OFF


@pytest.mark.parametrize("gain", [1.0, 10.0])
def test_output_resistance_lets_finite_gain_make_an_error(gain):
    """Derivation: in common mode R2 carries Vcm/(R1 + R2) into the output at about 0 V, which e = -Ro
    times that takes up; e/A at the input, times 1 + G at the output, gives rho = Ro/(A R2).

    Here A = GBW/(j f) above its pole; neglected: (1 + G)/A and Ro/R2 relative, 1e-2 together.
    """
    frequency, gbw = np.array([100.0, 1e3]), 1e6
    opamp = {"open_loop_gain": 1e8, "gain_bandwidth": gbw, "output_resistance": 50.0}
    pair = solve("difference", difference(gain, opamp), frequency)
    expected = 50 / (gain * 1e4) * 1j * frequency / gbw
    np.testing.assert_allclose(pair.error_ratio, expected, rtol=1e-2, atol=ROUND_OFF)


def test_mismatched_capacitors_count_as_errors_of_r2_and_r4():
    """Derivation: Z2 = R2/(1 + x) with x = s R2 C, so C2 = C (1 + e) makes d2 = -e x/(1 + x).

    The nominal gain is Z2/R1 = G/(1 + x), so rho = -d2/(1 + Z2/R1) = e x/(1 + G + x). Neglected: second
    order of e = 1e-3.
    """
    capacitance, error, frequency = 1e-10, 1e-3, np.array([1e3, 1e4, 1e5])
    parts = difference(10.0) | {"C2": capacitance * (1 + error), "C4": capacitance}
    pair = solve("difference", parts, frequency)
    x = 2j * np.pi * frequency * 1e5 * capacitance
    np.testing.assert_allclose(pair.error_ratio, error * x / (11 + x), rtol=2e-3, atol=ROUND_OFF)
