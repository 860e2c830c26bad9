"""Nominal imperfections: all of them taken away leave a stage that rejects, and each of them is needed for that.

Solved by the dense solver, which has no floor of 1e-10 V, so that nothing can hide below one.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray

from modepair.circuits import imperfections, parts_gone
from tests.dense import solve_dense
from tests.published.parts import buffered_difference, difference, three_opamp, two_opamp
from tests.random_stages import TOPOLOGIES, random_parts

FREQUENCY_HZ = np.array([10.0, 1e3, 1e5])
SEEDS = range(25)


def error_ratio(topology: str, parts: Mapping[str, float]) -> NDArray[np.float64]:
    """|rho| at the frequencies; zero and infinite values are parts that are not there."""
    there = {name: value for name, value in parts.items() if value and np.isfinite(value)}
    common, differential = solve_dense(topology, there, FREQUENCY_HZ)
    size: NDArray[np.float64] = np.abs(common / differential)
    return size


def without(topology: str, parts: Mapping[str, float], kept: str = "") -> dict[str, float]:
    """Take imperfections away one after the other, until at most `kept` is left."""
    values = dict(parts)
    for _ in range(40):
        left = {name: ideal for name, ideal in imperfections(topology, values).items() if name != kept}
        if not left:
            return values
        values |= next(iter(left.values()))
    raise AssertionError(f"{list(left)} do not go away")


@pytest.mark.parametrize("topology", TOPOLOGIES)
def test_without_all_of_them_nothing_is_left_of_rho(topology: str) -> None:
    """Random stages with everything unlike, |rho| of 1e-6 to above 1 before.

    Three stages: the solver's round-off is left, 4e-16 at most where long double is wide; nothing else makes an
    error. Two-op-amp stage: what A1's near-ideal gain of 1e10 leaves, (1 + R2/R1)/A, 2e-10 for R2 = R1, and more
    where A_dm has fallen: found 3e-9 at 100 kHz.
    """
    bound = 1e-8 if topology == "two-opamp" else 1e-12
    for seed in SEEDS:
        parts = random_parts(topology, np.random.default_rng(seed))
        assert error_ratio(topology, parts).max() > 1e-5
        assert error_ratio(topology, without(topology, parts)).max() < bound, seed


@pytest.mark.parametrize("topology", TOPOLOGIES)
def test_each_of_them_is_needed(topology: str) -> None:
    """Kept alone, each leaves an error in some random stage at some frequency.

    The least is that of CF1 against CF2, 9e-6; an unneeded one would leave 1e-15, or 1e-8 in the two-op-amp stage.
    """
    largest: dict[str, float] = {}
    for seed in SEEDS:
        parts = random_parts(topology, np.random.default_rng(seed))
        for name in imperfections(topology, parts):
            alone = error_ratio(topology, without(topology, parts, name)).max()
            largest[name] = max(largest.get(name, 0.0), float(alone))
    assert len(largest) >= 12
    assert {name: size for name, size in largest.items() if size < 1e-6} == {}


@pytest.mark.parametrize("topology", TOPOLOGIES)
def test_taking_them_away_keeps_the_differential_gain(topology: str) -> None:
    """Within 3 % at 10 Hz, the stages' own mismatch and sources; else the budget would count a change of gain."""
    for seed in SEEDS:
        parts = random_parts(topology, np.random.default_rng(seed))
        parts = {name: value for name, value in parts.items() if name != "RI"}
        there = {
            name: value for name, value in without(topology, parts).items() if value and np.isfinite(value)
        }
        before = solve_dense(topology, parts, FREQUENCY_HZ[:1])[1][0]
        after = solve_dense(topology, there, FREQUENCY_HZ[:1])[1][0]
        assert abs(after / before - 1) < 0.03, seed


@pytest.mark.parametrize(
    ("topology", "parts", "names"),
    [
        ("difference", difference(), []),
        ("buffered-difference", buffered_difference(), []),
        ("three-opamp", three_opamp(), []),
        ("two-opamp", two_opamp(), ["A1's finite gain"]),
    ],
)
def test_textbook_stages_have_only_what_their_topology_gives_them(
    topology: str, parts: dict[str, float], names: list[str]
) -> None:
    assert list(imperfections(topology, parts)) == names
    zero = dict.fromkeys(["RREF", "RI", "CI", "RSP", "CCP", "C2", "C4", "A1.output_resistance"], 0.0)
    assert list(imperfections(topology, parts | zero)) == names


def test_values_that_gain_worked_out_are_balanced_despite_round_off() -> None:
    for gain in (3.3, 7.7, 101 / 3, 1234.567):
        r1, r3 = 9.1e3, 4.7e3
        parts = difference() | {"R1": r1, "R3": r3, "R2": gain * r1, "R4": gain * r3}
        assert list(imperfections("difference", parts)) == ["R1 against R3"]


def test_parts_that_are_taken_out_or_made_ideal_are_gone_and_those_made_equal_are_not() -> None:
    parts = two_opamp() | {"RREF": 0.1, "C2": 1e-12, "RSP": 10.0, "RSN": 11.0, "A2.cmrr": 1e5}
    found = {name: parts_gone(ideal) for name, ideal in imperfections("two-opamp", parts).items()}
    assert found == {
        "RREF": {"RREF"},
        "RSP against RSN": set(),
        "A1's finite gain": {"A1.open_loop_gain", "A1.gain_bandwidth", "A1.phase_margin"},
        "C2": {"C2"},
        "A2.cmrr": {"A2.cmrr"},
    }


def test_an_ideal_cmrr_is_no_imperfection() -> None:
    assert imperfections("difference", difference() | {"A1.cmrr": np.inf}) == {}
    assert list(imperfections("difference", difference() | {"A1.cmrr": -1e5})) == ["A1.cmrr"]


def test_two_imbalances_of_the_legs_are_told_apart() -> None:
    parts = difference() | {"RSP": 100.0, "RSN": 110.0, "RI": 10.0, "CCP": 1e-10}
    assert imperfections("difference", parts) == {
        "RI": {"RI": 0.0},
        "RSP against RSN": {"RSN": 100.0},
        "CCP against CCN": {"CCN": 1e-10},
    }
