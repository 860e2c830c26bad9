"""Laws that hold for all values, through ngspice, on random stages with everything in them."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.random_stages import TOPOLOGIES, random_parts
from tests.solving import solve, solve_drives

FREQUENCY_HZ = np.array([1.0, 50.0, 2e3, 1e5])

ROUND_OFF = 1e-9
"""ngspice's error of about 1e-10 V at the output, with a margin of ten."""

RELATIVE = 2e-4
"""0.002 dB, what the tool promises. Most stages keep the laws to 1e-9, but pivots that suit a circuit
badly have been seen to leave 2e-7 V at the output."""

seeds = st.integers(0, 2**32 - 1)
examples = settings(max_examples=15, deadline=None, derandomize=True)

FRONT_END = [
    ("RSP", "RSN"),
    ("CCP", "CCN"),
    ("RFP", "RFN"),
    ("CFP", "CFN"),
    ("RBP", "RBN"),
    ("RF1", "RF2"),
    ("CF1", "CF2"),
]
BRIDGE = [("R1", "R3"), ("R2", "R4"), ("C2", "C4")]


def exchanged(parts, pairs, opamps=()):
    """The parts of each pair, and all parameters of two op-amps, exchanged; the imbalance goes to the
    other leg."""
    new_names = {first: second for pair in pairs for first, second in (pair, pair[::-1])}
    swapped = {}
    for name, value in parts.items():
        owner, dot, parameter = name.partition(".")
        if opamps and dot and owner in opamps:
            owner = opamps[1 - opamps.index(owner)]
        swapped[f"{owner}{dot}{parameter}" if dot else new_names.get(name, name)] = value
    if "RI" in swapped:
        swapped["RI"] = -swapped["RI"]
    return swapped


def without(parts, *endings):
    return {name: value for name, value in parts.items() if not name.endswith(endings)}


def assert_opposite(pair, mirrored):
    """Error ratios equal but for the sign, so CMRR equal."""
    allowed = ROUND_OFF / np.abs(pair.differential_gain) + RELATIVE * np.abs(pair.error_ratio)
    assert np.all(np.abs(pair.error_ratio + mirrored.error_ratio) <= 2 * allowed), (
        f"{pair.error_ratio} against {mirrored.error_ratio}"
    )


@pytest.mark.parametrize("topology", ["three-opamp", "buffered-difference"])
@given(seed=seeds)
@examples
def test_mirroring_source_and_first_stage_leaves_cmrr(topology, seed):
    """rho changes its sign and nothing else.

    Derivation: behind a bridge that is balanced (equal legs, no k of A3's own, no reference resistance, no
    output resistance to make A3 work against its own feedback current) and that is driven from no output
    resistance, vout = D (vo1 - vo2). Mirroring all before it exchanges vo1 and vo2 and the generators:
    vout keeps its value in differential mode and changes sign in common mode. The source may be any, with
    capacitors between the legs; A1 and A2 may be any two op-amps.
    """
    parts = random_parts(topology, np.random.default_rng(seed))
    parts = without(parts, "RREF", "output_resistance", "A3.cmrr")
    for minus, plus in BRIDGE:
        if plus in parts:
            parts[plus] = parts[minus]
    mirrored = exchanged(parts, FRONT_END, ("A1", "A2"))
    assert_opposite(solve(topology, parts, FREQUENCY_HZ), solve(topology, mirrored, FREQUENCY_HZ))


@given(seed=seeds)
@examples
def test_mirroring_source_and_bridge_leaves_cmrr_of_a_difference_stage(seed):
    """rho changes its sign and nothing else, though the plus leg has its far end at the reference and not
    at vout.

    Derivation: with each leg's source as its Thevenin equivalent, the op-amp's nodes give
    vout c = Y3 vp/Yp - Y1 vm/Yn, Yp and Yn being the sums of admittances at the nodes. c depends on A(s)
    and the rest, but is common to both drives, so rho = 2 (Hp - Hn)/(Hp + Hn) with Hp = Y3/Yp and Hn =
    Y1/Yn: exchanging the legs changes its sign. It needs k = 0, no reference or output resistance, and no
    capacitor between the legs (which would let the minus leg's current, and with it vout, act on the plus
    leg).
    """
    parts = random_parts("difference", np.random.default_rng(seed))
    parts = without(parts, "RREF", "CCB", "CFB", "output_resistance", "A1.cmrr")
    mirrored = exchanged(parts, FRONT_END + BRIDGE)
    assert_opposite(solve("difference", parts, FREQUENCY_HZ), solve("difference", mirrored, FREQUENCY_HZ))


@pytest.mark.parametrize("topology", TOPOLOGIES)
@given(seed=seeds, logarithm=st.floats(-2, 2))
@examples
def test_scaling_impedances_leaves_the_gains(topology, seed, logarithm):
    """All resistances times a, all capacitances over a, the op-amps' own included: gains are ratios of
    impedances."""
    parts = random_parts(topology, np.random.default_rng(seed))
    factor = 10.0**logarithm
    scaled = dict(parts)
    for name in parts:
        quantity = name.rpartition(".")[2]
        if "resistance" in quantity or name.startswith("R"):
            scaled[name] *= factor
        elif "capacitance" in quantity or name.startswith("C"):
            scaled[name] /= factor
    before, after = solve(topology, parts, FREQUENCY_HZ), solve(topology, scaled, FREQUENCY_HZ)
    np.testing.assert_allclose(after.common_gain, before.common_gain, rtol=RELATIVE, atol=ROUND_OFF)
    np.testing.assert_allclose(after.differential_gain, before.differential_gain, rtol=RELATIVE)


@pytest.mark.parametrize("topology", TOPOLOGIES)
@given(seed=seeds, plus=st.floats(-10, 10), minus=st.floats(-10, 10))
@examples
def test_any_two_drives_are_common_plus_differential(topology, seed, plus, minus):
    """vout = A_cm (vp + vm)/2 + A_dm (vp - vm), for any two generators; the plus one alone gives A_cm/2 +
    A_dm."""
    parts = random_parts(topology, np.random.default_rng(seed))
    pair = solve(topology, parts, FREQUENCY_HZ)
    for one, other in ((1.0, 0.0), (plus, minus)):
        expected = pair.common_gain * (one + other) / 2 + pair.differential_gain * (one - other)
        volts = max(abs(one), abs(other))
        np.testing.assert_allclose(
            solve_drives(topology, parts, FREQUENCY_HZ, one, other),
            expected,
            rtol=RELATIVE,
            atol=ROUND_OFF * max(volts, 1),
        )
