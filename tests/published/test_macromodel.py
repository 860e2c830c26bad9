"""The op-amp macromodel's parameters, measured through a stage's response.

Derivation: a matched difference stage of gain G has A_dm = G/(1 + (1 + G)/A(s)), so that
A(s) = (1 + G)/(G/A_dm - 1) is read off its response; and its rho is k(s), whatever A(s) is.
"""

import numpy as np
import pytest

from tests.published.parts import difference
from tests.solving import solve


def open_loop_gain(parameters, frequency_hz):
    """A(j 2 pi f) of A1, found through a difference stage of gain one."""
    parts = difference(1.0, parameters)
    return 2 / (1 / solve("difference", parts, frequency_hz).differential_gain - 1)


@pytest.mark.parametrize("margin", [None, 30.0, 45.0, 60.0, 75.0])
def test_phase_margin_of_the_unity_gain_loop(margin):
    """Phase of A(s) where |A| = 1, plus 180 degrees; one pole has 90 degrees.

    Tolerance 0.02 degrees: linear interpolation over a grid of 1.5 % in log f; the first pole's own lag falls
    short of 90 degrees by GBW/A0 over f, 6e-5 degrees.
    """
    parameters = {"open_loop_gain": 1e6, "gain_bandwidth": 1e6}
    if margin is not None:
        parameters["phase_margin"] = margin
    frequency = np.geomspace(0.3e6, 1.5e6, 110)
    gain = open_loop_gain(parameters, frequency)
    phase = np.interp(0, -np.log(np.abs(gain)), np.degrees(np.unwrap(np.angle(gain))))
    assert 180 + phase == pytest.approx(90 if margin is None else margin, abs=0.02)


@pytest.mark.parametrize("gain_db", [80, 120])
def test_open_loop_gain_and_bandwidth(gain_db):
    """|A| = A0 well below the first pole and GBW/f well above it.

    1e-4: at a hundredth and a hundred times the pole |A| is short by half of 1e-4.
    """
    dc, gbw = 10 ** (gain_db / 20), 1e7
    pole = gbw / dc
    measured = np.abs(
        open_loop_gain({"open_loop_gain": dc, "gain_bandwidth": gbw}, np.array([pole / 100, pole * 100]))
    )
    np.testing.assert_allclose(measured, [dc, gbw / (100 * pole)], rtol=1e-4)


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_cmrr_falls_three_decibels_at_its_corner(sign):
    """k = (sign/CMRR0)(1 + j f/fc): sqrt(2) and 45 degrees at fc, ten times at 10 fc.

    Neglected: k's second order, 1e-4 relative.
    """
    corner, frequency = 300.0, np.array([0.3, 300.0, 3000.0])
    parts = difference(10.0) | {"A1.cmrr": 1e5, "A1.cmrr_corner": corner, "A1.cmrr_sign": sign}
    pair = solve("difference", parts, frequency)
    np.testing.assert_allclose(
        pair.error_ratio, sign * 1e-5 * (1 + 1j * frequency / corner), rtol=1e-3, atol=1e-10
    )
    assert pair.cmrr_db[0] - pair.cmrr_db[1] == pytest.approx(20 * np.log10(np.sqrt(2)), abs=1e-3)


def test_cmrr_without_a_corner_is_flat():
    parts = difference(10.0) | {"A1.cmrr": 1e4}
    pair = solve("difference", parts, [1.0, 1e3, 1e5])
    np.testing.assert_allclose(pair.cmrr_db, 80.0, rtol=0, atol=1e-3)


def test_output_resistance_divides_open_loop_gain_against_the_load():
    """Derivation, four resistors R and 1 V differential: v+ = 1/4, v- = (vout - 1/2)/2, e = A (1 - vout)/2.

    Currents into the output: (e - vout)/Ro = vout/RL + (vout + 1/2)/(2 R), hence
    A_dm = (A/2 - Ro/(4R))/(A/2 + 1 + Ro/RL + Ro/(2R)). Exact: round-off only.
    """
    gain, output, load, resistance = 100.0, 500.0, 1000.0, 1e4
    parts = difference(1.0, {"open_loop_gain": gain, "gain_bandwidth": 1e9, "output_resistance": output})
    pair = solve("difference", parts | {"RL": load}, [1.0])
    expected = (gain / 2 - output / (4 * resistance)) / (
        gain / 2 + 1 + output / load + output / (2 * resistance)
    )
    np.testing.assert_allclose(pair.differential_gain, expected, rtol=1e-6)


def test_differential_input_resistance_shunts_the_summing_nodes():
    """Derivation: e/A across Rid drives e/(A Rid) through both nodes, which have R/2 each for gain one:
    A_dm = 1/(1 + (2/A)(1 + R/Rid)). Exact: round-off only.
    """
    gain, resistance, between = 100.0, 1e4, 2e3
    parts = difference(
        1.0, {"open_loop_gain": gain, "gain_bandwidth": 1e9, "input_resistance_differential": between}
    )
    pair = solve("difference", parts, [1.0])
    np.testing.assert_allclose(
        pair.differential_gain, 1 / (1 + 2 / gain * (1 + resistance / between)), rtol=1e-6
    )
