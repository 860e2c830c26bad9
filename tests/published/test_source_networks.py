"""Unbalanced sources against input impedance, and the fixtures of standards.

The stage is a three-op-amp one with matched parts, so that only the source makes an error. Its closed form
(derivation): the legs reach the inputs as dividers Hp and Hn; a stage that responds to the difference alone
gives A_cm = G (Hp - Hn) and A_dm = G (Hp + Hn)/2, so rho = 2 (Hp - Hn)/(Hp + Hn). With H = 1/(1 + Z Y) and
only the plus leg unbalanced rho = -Z Y/(1 + Z Y/2): an imbalance in the plus leg counts negative.
"""

import numpy as np
import pytest

from tests.published.parts import difference, opamps, three_opamp
from tests.solving import solve

ROUND_OFF = 1e-9

FINITE_GAIN = 1e-5
"""Relative: what the near-ideal op-amps of gain 101 leave at 1 kHz is 1e-7, at 100 kHz 1e-5."""


def of_one_leg(impedance, admittance):
    zy = impedance * admittance
    return -zy / (1 + zy / 2)


@pytest.mark.parametrize("sign", [1, -1])
def test_imbalance_against_capacitance(sign):
    """1 kohm (common practice in instrument specifications, no source) and 100 pF, exact closed form."""
    frequency = np.array([60.0, 1e3, 1e5])
    parts = three_opamp() | {"RI": sign * 1e3, "CCP": 1e-10, "CCN": 1e-10}
    pair = solve("three-opamp", parts, frequency)
    expected = sign * of_one_leg(1e3, 2j * np.pi * frequency * 1e-10)
    np.testing.assert_allclose(pair.error_ratio, expected, rtol=FINITE_GAIN, atol=ROUND_OFF)


def test_one_kilohm_and_100_pf_at_60_hz():
    """-20 log10(2 pi 60 Hz 1 kohm 100 pF) = 88.47 dB; the figure has two decimals."""
    pair = solve("three-opamp", three_opamp() | {"RI": 1e3, "CCP": 1e-10, "CCN": 1e-10}, [60.0])
    assert pair.cmrr_db[0] == pytest.approx(88.47, abs=0.005)


def test_capacitance_between_the_legs_makes_no_common_mode_error_of_its_own():
    """Derivation: without a path to ground common mode drives no current; 1 kohm imbalance, 1 nF across."""
    pair = solve("three-opamp", three_opamp() | {"RI": 1e3, "CCB": 1e-9}, [60.0, 1e3])
    assert np.abs(pair.common_gain).max() < ROUND_OFF


@pytest.mark.parametrize(
    ("resistance", "capacitance"), [(1e9, 0.0), (0.0, 100e-12), (1e9, 100e-12), (1e7, 1e-9)]
)
def test_electrocardiograph_electrode_network(resistance, capacitance):
    """IEC 60601-2-25 (from memory): 51 kohm in parallel with 47 nF in one lead.

    Against each input's resistance and capacitance to ground, here the op-amps' own; closed form as above
    with Z = R/(1 + s R C) and Y = 1/Rin + s Cin.
    """
    frequency = np.array([1.0, 50.0, 60.0, 1e3])
    inputs = {"input_resistance_common": resistance, "input_capacitance_common": capacitance}
    parts = three_opamp() | {"RI": 51e3, "CI": 47e-9}
    parts |= {name: value for name, value in opamps("A1 A2", inputs).items() if value}
    pair = solve("three-opamp", parts, frequency)
    s = 2j * np.pi * frequency
    admittance = (1 / resistance if resistance else 0) + s * capacitance
    expected = of_one_leg(51e3 / (1 + s * 51e3 * 47e-9), admittance)
    np.testing.assert_allclose(pair.error_ratio, expected, rtol=FINITE_GAIN, atol=ROUND_OFF)


def test_electrocardiograph_limit_is_89_db():
    """IEC 60601-2-25 (from memory): 10 V rms of common mode may deflect by 1 mV peak to valley.

    20 log10(10 * 2 sqrt(2) V/1 mV) = 89.03 dB. A stage with that CMRR, its op-amp's, deflects by 1 mV
    referred to the input. The figure's two decimals are 0.06 %.
    """
    figure_db = 89.03
    parts = difference(10.0) | {"A1.cmrr": 10 ** (figure_db / 20)}
    pair = solve("difference", parts, [50.0])
    assert pair.cmrr_db[0] == pytest.approx(20 * np.log10(10 * 2 * np.sqrt(2) / 1e-3), abs=0.005)
    deflection = np.abs(pair.common_gain[0] / pair.differential_gain[0]) * 10 * 2 * np.sqrt(2)
    assert deflection == pytest.approx(1e-3, rel=6e-4)


@pytest.mark.parametrize("error", [5e-4, -5e-4])
def test_balanced_audio_input_with_ten_ohms_in_each_leg(error):
    """IEC 60268-3 (from memory): the imbalance of 10 ohm goes into each leg in turn, the lower result counts.

    rho = d4/(1 + G) -/+ 10/(R1 + R2), so the lower CMRR is 1/(|d4|/(1 + G) + 10/(R1 + R2)), in one leg or the
    other by the sign of d4. Neglected: second order, 1e-3 relative, 0.01 dB.
    """
    parts = difference(1.0)
    parts["R4"] *= 1 + error
    frequency = [20.0, 1000.0]
    plus = solve("difference", parts | {"RI": 10.0}, frequency).cmrr_db
    minus = solve("difference", parts | {"RI": -10.0}, frequency).cmrr_db
    lower = np.minimum(plus, minus)
    np.testing.assert_allclose(lower, -20 * np.log10(abs(error) / 2 + 10 / 2e4), rtol=0, atol=0.01)
    np.testing.assert_array_equal(lower, minus if error > 0 else plus)
    assert np.abs(plus - minus).min() > 6


def test_bias_resistors_load_the_legs():
    """Derivation: source resistance R per leg against bias resistors that differ, H = 1/(1 + R/RB)."""
    parts = three_opamp() | {"RSP": 1e4, "RSN": 1e4, "RBP": 1e6, "RBN": 1.1e6}
    pair = solve("three-opamp", parts, [1.0, 60.0])
    plus, minus = 1 / (1 + 1e4 / 1e6), 1 / (1 + 1e4 / 1.1e6)
    expected = 2 * (plus - minus) / (plus + minus)
    np.testing.assert_allclose(pair.error_ratio, expected, rtol=FINITE_GAIN, atol=ROUND_OFF)


def test_filter_of_unequal_capacitors_at_low_frequency():
    """Derivation: filter R and C (1 + e), C to ground: rho = -j 2 pi f R C e, at low f whatever lies
    between the legs.

    Neglected: the phase of the corner that 2 CFB + C make with R, 1.3e-3 at 10 Hz.
    """
    resistance, capacitance, error, frequency = 1e3, 1e-9, 0.02, 10.0
    parts = three_opamp() | {
        "RFP": resistance,
        "RFN": resistance,
        "CFP": capacitance * (1 + error),
        "CFN": capacitance,
        "CFB": 10 * capacitance,
    }
    pair = solve("three-opamp", parts, [frequency])
    expected = -2j * np.pi * frequency * resistance * capacitance * error
    np.testing.assert_allclose(pair.error_ratio, expected, rtol=3e-3, atol=ROUND_OFF)


def test_capacitor_between_the_legs_hides_the_mismatch_of_those_to_ground():
    """Derivation: with x = s R C the legs differ by -e x Vcm/(1 + x)/(1 + x + 2 s R CFB), but A_dm falls
    with the same corner, so that rho = -e x/(1 + x) either way: what is hidden is A_cm.

    Neglected: e/2 = 1e-2 relative, where C and C (1 + e) are not told apart.
    """
    resistance, capacitance, error, frequency = 1e3, 1e-9, 0.02, np.array([1e4, 3e4, 1e5])
    filtered = {"RFP": resistance, "RFN": resistance, "CFP": capacitance * (1 + error), "CFN": capacitance}
    bare = solve("three-opamp", three_opamp() | filtered, frequency)
    hidden = solve("three-opamp", three_opamp() | filtered | {"CFB": 10 * capacitance}, frequency)
    x = 2j * np.pi * frequency * resistance * capacitance
    for pair in (bare, hidden):
        np.testing.assert_allclose(pair.error_ratio, -error * x / (1 + x), rtol=1.5e-2, atol=ROUND_OFF)
    np.testing.assert_allclose(hidden.common_gain / bare.common_gain, (1 + x) / (1 + 21 * x), rtol=1.5e-2)
