"""The vocabulary of parts, and how settings give their values."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.sweeps import OPAMP_PARAMETERS, PARTS, TOPOLOGIES, RefusedError, resolve_parts
from modepair.sweeps.parts import INSTANCES, SHORTHANDS, Value, least_gain, parts_for_gain
from modepair.sweeps.vocabulary import BUILT_IN

BRIDGE = {f"stage.parts.{name}": 10e3 for name in ("R1", "R2", "R3", "R4")}
THREE = {**BRIDGE, "stage.parts.RF1": 10e3, "stage.parts.RF2": 10e3}
OPAMP = {"opamps.x.open_loop_gain": 1e6, "opamps.x.gain_bandwidth": 1e7}
EVERY = dict.fromkeys(INSTANCES, "x")
ohms = st.floats(min_value=1.0, max_value=1e6)


def test_every_part_is_in_a_stage_or_in_the_source() -> None:
    for part in PARTS.values():
        assert part.topologies
        assert part.section in ("stage", "source")
    for topology in TOPOLOGIES.values():
        assert set(topology.parts) <= set(PARTS)
        assert set(topology.set_by_gain) <= set(topology.parts)


def test_instances_have_every_op_amp_parameter() -> None:
    assert {name for name in BUILT_IN.stage_part_kinds if "." in name} == {
        f"{instance}.{parameter}" for instance in INSTANCES for parameter in OPAMP_PARAMETERS
    }


def test_absent_parts_have_no_key() -> None:
    parts = resolve_parts(TOPOLOGIES["difference"], EVERY, {**BRIDGE, **OPAMP})
    assert parts == {
        "R1": 10e3,
        "R2": 10e3,
        "R3": 10e3,
        "R4": 10e3,
        "A1.open_loop_gain": 1e6,
        "A1.gain_bandwidth": 1e7,
    }


@pytest.mark.parametrize(("path", "names"), SHORTHANDS.items())
def test_shorthands_give_parts_and_parts_override_them(path: str, names: tuple[str, ...]) -> None:
    parts = resolve_parts(TOPOLOGIES["three-opamp"], EVERY, {**THREE, **OPAMP, path: 5.0})
    assert {name: parts[name] for name in names} == dict.fromkeys(names, 5.0)
    last = names[-1]
    override = {f"{PARTS[last].section}.parts.{last}": 7.0}
    assert (
        resolve_parts(TOPOLOGIES["three-opamp"], EVERY, {**THREE, **OPAMP, path: 5.0, **override})[last]
        == 7.0
    )


def test_a_parameter_of_an_instance_overrides_its_candidate() -> None:
    settings = {**THREE, **OPAMP, "stage.parts.A2.gain_bandwidth": 9e6}
    parts = resolve_parts(TOPOLOGIES["three-opamp"], EVERY, settings)
    assert [parts[f"{a}.gain_bandwidth"] for a in INSTANCES] == [1e7, 9e6, 1e7]


def test_arrays_stay_arrays_and_floats_stay_floats() -> None:
    settings: dict[str, Value] = {**THREE, **OPAMP, "source.imbalance": np.array([0.0, 10.0])}
    parts = resolve_parts(TOPOLOGIES["three-opamp"], EVERY, settings)
    np.testing.assert_array_equal(parts["RI"], [0.0, 10.0])
    assert parts["R1"] == 10e3


# closed form: ideal differential gain of each stage
@given(ohms, ohms, st.floats(min_value=0.1, max_value=1e3))
def test_the_gain_of_a_difference_stage_sets_both_legs(r1: float, r3: float, gain: float) -> None:
    parts = parts_for_gain("difference", gain, {"R1": r1, "R3": r3})
    assert parts["R2"] / r1 == pytest.approx(gain, rel=1e-12)  # two roundings
    assert parts["R4"] / r3 == pytest.approx(gain, rel=1e-12)


@given(ohms, ohms, ohms, ohms, st.floats(min_value=1.01, max_value=1e4))
def test_the_gain_of_a_three_opamp_stage_sets_rg(
    rf1: float, rf2: float, r1: float, r2: float, times: float
) -> None:
    gain = times * r2 / r1
    rg = parts_for_gain("three-opamp", gain, {"RF1": rf1, "RF2": rf2, "R1": r1, "R2": r2})["RG"]
    # the subtraction of 1 from a ratio near 1.01 loses two digits
    assert (1 + (rf1 + rf2) / rg) * r2 / r1 == pytest.approx(gain, rel=1e-12)


@given(ohms, ohms, st.floats(min_value=1.01, max_value=1e4))
def test_the_gain_of_a_two_opamp_stage_sets_rg(r3: float, r4: float, times: float) -> None:
    gain = times * (1 + r4 / r3)
    rg = parts_for_gain("two-opamp", gain, {"R3": r3, "R4": r4})["RG"]
    assert 1 + r4 / r3 + 2 * r4 / rg == pytest.approx(gain, rel=1e-12)


@pytest.mark.parametrize(("topology", "gain"), [("three-opamp", 1.0), ("two-opamp", 2.0)])
def test_the_gain_without_rg_leaves_rg_out(topology: str, gain: float) -> None:
    assert "RG" not in resolve_parts(TOPOLOGIES[topology], EVERY, {**THREE, **OPAMP, "stage.gain": gain})


def test_rows_without_rg_are_marked_infinite() -> None:
    settings: dict[str, Value] = {**THREE, **OPAMP, "stage.gain": np.array([1.0, 101.0])}
    rg = resolve_parts(TOPOLOGIES["three-opamp"], EVERY, settings)["RG"]
    np.testing.assert_allclose(rg, [math.inf, 200.0], rtol=1e-12)


@pytest.mark.parametrize(
    ("topology", "gain", "message"),
    [
        (
            "three-opamp",
            0.5,
            r"^a gain of 0\.5 is below 1, the least that the three-opamp stage has with these",
        ),
        ("two-opamp", 1.5, r"^a gain of 1\.5 is below 2, the least that the two-opamp stage has"),
        (
            "difference",
            1e-12,
            r"^a gain of 1e-12 needs R2 = 10 nΩ, out of range; R2 takes a resistance from 1 µΩ",
        ),
    ],
)
def test_a_gain_out_of_reach_is_refused(topology: str, gain: float, message: str) -> None:
    settings = {**THREE, **OPAMP, "stage.gain": gain}
    for part in TOPOLOGIES[topology].set_by_gain:
        settings.pop(f"stage.parts.{part}", None)
    with pytest.raises(RefusedError, match=message):
        resolve_parts(TOPOLOGIES[topology], EVERY, settings)


def test_the_least_gain_of_the_difference_stages_is_zero() -> None:
    assert least_gain("difference", {}) == 0.0
