"""The built-in op-amp candidates: each within its class, and in the order that practice knows."""

import re
from pathlib import Path

import numpy as np
import pytest

from modepair.circuits import candidates
from modepair.sweeps import OPAMP_PARAMETERS, Opamp
from tests.dense import solve_dense

FILE = Path(__file__).parent.parent / "circuits" / "candidates.yaml"

RANGES: dict[str, dict[str, tuple[float, float]]] = {
    # What each class usually has; common practice, no source. Open-loop gain and CMRR in dB, the others in SI
    # units.
    "precision-bipolar": {
        "open_loop_gain": (120, 140),
        "gain_bandwidth": (0.5e6, 5e6),
        "phase_margin": (50, 75),
        "cmrr": (110, 140),
        "cmrr_corner": (20, 500),
        "input_resistance_differential": (5e6, 200e6),
        "input_capacitance_differential": (1e-12, 8e-12),
        "input_resistance_common": (10e9, 500e9),
        "input_capacitance_common": (1e-12, 6e-12),
        "output_resistance": (30, 150),
    },
    "quiet-bipolar": {
        "open_loop_gain": (110, 140),
        "gain_bandwidth": (5e6, 80e6),
        "phase_margin": (45, 70),
        "cmrr": (105, 130),
        "cmrr_corner": (100, 3e3),
        "input_resistance_differential": (10e3, 10e6),
        "input_capacitance_differential": (4e-12, 20e-12),
        "input_resistance_common": (100e6, 10e9),
        "input_capacitance_common": (2e-12, 8e-12),
        "output_resistance": (20, 100),
    },
    "low-bias-jfet": {
        "open_loop_gain": (95, 125),
        "gain_bandwidth": (1e6, 15e6),
        "phase_margin": (45, 70),
        "cmrr": (85, 110),
        "cmrr_corner": (300, 10e3),
        "input_resistance_differential": (100e9, 10e12),
        "input_capacitance_differential": (2e-12, 10e-12),
        "input_resistance_common": (100e9, 10e12),
        "input_capacitance_common": (3e-12, 15e-12),
        "output_resistance": (30, 200),
    },
    "fast-jfet": {
        "open_loop_gain": (80, 110),
        "gain_bandwidth": (20e6, 500e6),
        "phase_margin": (45, 70),
        "cmrr": (80, 105),
        "cmrr_corner": (3e3, 100e3),
        "input_resistance_differential": (10e9, 10e12),
        "input_capacitance_differential": (1e-12, 8e-12),
        "input_resistance_common": (10e9, 10e12),
        "input_capacitance_common": (2e-12, 10e-12),
        "output_resistance": (15, 100),
    },
    "rail-to-rail-cmos": {
        "open_loop_gain": (100, 130),
        "gain_bandwidth": (1e6, 20e6),
        "phase_margin": (45, 70),
        "cmrr": (70, 100),
        "cmrr_corner": (500, 20e3),
        "input_resistance_differential": (100e9, 10e12),
        "input_capacitance_differential": (1e-12, 8e-12),
        "input_resistance_common": (100e9, 10e12),
        "input_capacitance_common": (2e-12, 10e-12),
        "output_resistance": (50, 500),
    },
    "electrometer-cmos": {
        "open_loop_gain": (100, 130),
        "gain_bandwidth": (0.3e6, 5e6),
        "phase_margin": (45, 70),
        "cmrr": (75, 105),
        "cmrr_corner": (100, 5e3),
        "input_resistance_differential": (1e12, 100e12),
        "input_capacitance_differential": (0.3e-12, 3e-12),
        "input_resistance_common": (1e12, 100e12),
        "input_capacitance_common": (0.5e-12, 4e-12),
        "output_resistance": (50, 1e3),
    },
    "zero-drift": {
        "open_loop_gain": (125, 160),
        "gain_bandwidth": (0.3e6, 10e6),
        "phase_margin": (45, 70),
        "cmrr": (120, 150),
        "cmrr_corner": (5, 200),
        "input_resistance_differential": (50e6, 10e9),
        "input_capacitance_differential": (2e-12, 10e-12),
        "input_resistance_common": (10e9, 1e12),
        "input_capacitance_common": (2e-12, 12e-12),
        "output_resistance": (50, 2e3),
    },
    "fast-bipolar": {
        "open_loop_gain": (65, 105),
        "gain_bandwidth": (80e6, 2e9),
        "phase_margin": (45, 70),
        "cmrr": (80, 110),
        "cmrr_corner": (5e3, 300e3),
        "input_resistance_differential": (20e3, 5e6),
        "input_capacitance_differential": (0.5e-12, 4e-12),
        "input_resistance_common": (2e6, 500e6),
        "input_capacitance_common": (0.5e-12, 4e-12),
        "output_resistance": (5, 50),
    },
    "micropower-cmos": {
        "open_loop_gain": (90, 130),
        "gain_bandwidth": (5e3, 400e3),
        "phase_margin": (45, 70),
        "cmrr": (70, 105),
        "cmrr_corner": (20, 1e3),
        "input_resistance_differential": (100e9, 10e12),
        "input_capacitance_differential": (1e-12, 8e-12),
        "input_resistance_common": (100e9, 10e12),
        "input_capacitance_common": (2e-12, 8e-12),
        "output_resistance": (500, 50e3),
    },
    "general-purpose": {
        "open_loop_gain": (90, 115),
        "gain_bandwidth": (0.7e6, 5e6),
        "phase_margin": (45, 70),
        "cmrr": (70, 95),
        "cmrr_corner": (100, 5e3),
        "input_resistance_differential": (300e3, 10e6),
        "input_capacitance_differential": (1e-12, 5e-12),
        "input_resistance_common": (100e6, 5e9),
        "input_capacitance_common": (1e-12, 5e-12),
        "output_resistance": (50, 300),
    },
}

BIPOLAR = ("precision-bipolar", "quiet-bipolar", "fast-bipolar", "general-purpose")
FIELD_EFFECT = ("low-bias-jfet", "fast-jfet", "rail-to-rail-cmos", "electrometer-cmos", "micropower-cmos")


def in_db(ratio: float) -> float:
    return float(20 * np.log10(ratio))


def of(name: str, parameter: str) -> float:
    return candidates()[name].parameters[parameter]


def every(parameter: str) -> dict[str, float]:
    return {name: opamp.parameters[parameter] for name, opamp in candidates().items()}


def test_there_is_a_class_range_for_every_candidate() -> None:
    assert set(candidates()) == set(RANGES)
    assert len(RANGES) >= 8


@pytest.mark.parametrize("name", RANGES)
def test_every_parameter_lies_in_the_range_of_its_class(name: str) -> None:
    parameters = candidates()[name].parameters
    # A sign is left to the spec: a class has none.
    assert set(parameters) == set(OPAMP_PARAMETERS) - {"cmrr_sign"}
    for parameter, value in parameters.items():
        low, high = RANGES[name][parameter]
        shown = in_db(value) if parameter in ("open_loop_gain", "cmrr") else value
        assert low <= shown <= high, parameter


@pytest.mark.parametrize("name", RANGES)
def test_cmrr_of_a_matched_difference_stage_is_the_candidates_own(name: str) -> None:
    """Closed form: matched resistors leave rho = k(f), so CMRR0 / sqrt(1 + (f/fc)^2), whatever A(s)."""
    parts = {"R1": 1e4, "R2": 1e4, "R3": 1e4, "R4": 1e4}
    # Without its impedances: the output resistance, which carries the common mode through R1 and R2, and the
    # input impedance each add an error of their own.
    for parameter in ("open_loop_gain", "gain_bandwidth", "phase_margin", "cmrr", "cmrr_corner"):
        parts[f"A1.{parameter}"] = of(name, parameter)
    corner = of(name, "cmrr_corner")
    frequency = np.array([corner / 100, corner / 3, corner, 3 * corner])
    common, differential = solve_dense("difference", parts, frequency)
    expected_db = in_db(of(name, "cmrr")) - 10 * np.log10(1 + (frequency / corner) ** 2)
    # First order in k, which at 3 times the corner is below 1e-3: 0.01 dB is more than what is left out.
    np.testing.assert_allclose(-20 * np.log10(np.abs(common / differential)), expected_db, atol=0.01)


def test_zero_drift_has_the_highest_cmrr_and_gain_at_dc() -> None:
    for parameter in ("cmrr", "open_loop_gain"):
        values = every(parameter)
        assert max(values, key=values.__getitem__) == "zero-drift", parameter


def test_cmrr_falls_from_zero_drift_over_precision_and_quiet_to_general_purpose() -> None:
    order = [
        of(name, "cmrr") for name in ("zero-drift", "precision-bipolar", "quiet-bipolar", "general-purpose")
    ]
    assert order == sorted(order, reverse=True)


def test_field_effect_inputs_are_a_thousand_times_above_bipolar_ones() -> None:
    lowest = min(of(name, "input_resistance_differential") for name in FIELD_EFFECT)
    assert lowest > 1e3 * max(of(name, "input_resistance_differential") for name in BIPOLAR)


def test_field_effect_inputs_are_above_bipolar_ones_in_common_mode() -> None:
    lowest = min(of(name, "input_resistance_common") for name in FIELD_EFFECT)
    assert lowest > max(of(name, "input_resistance_common") for name in BIPOLAR)


def test_fast_and_micropower_are_the_ends_of_gain_bandwidth() -> None:
    order = sorted(every("gain_bandwidth").items(), key=lambda item: item[1])
    assert order[0][0] == "micropower-cmos"
    assert [name for name, _ in order[-2:]] == ["fast-jfet", "fast-bipolar"]


def test_the_fast_ones_hold_their_cmrr_longest() -> None:
    order = sorted(every("cmrr_corner").items(), key=lambda item: item[1])
    assert [name for name, _ in order[-2:]] == ["fast-jfet", "fast-bipolar"]


def test_low_noise_input_devices_are_large() -> None:
    values = every("input_capacitance_differential")
    assert max(values, key=values.__getitem__) == "quiet-bipolar"


def test_electrometer_has_the_least_input_capacitance_of_the_field_effect_ones() -> None:
    for parameter in ("input_capacitance_differential", "input_capacitance_common"):
        values = {name: of(name, parameter) for name in FIELD_EFFECT}
        assert min(values, key=values.__getitem__) == "electrometer-cmos", parameter


def test_micropower_has_the_weakest_output_and_fast_bipolar_the_strongest() -> None:
    values = every("output_resistance")
    assert max(values, key=values.__getitem__) == "micropower-cmos"
    assert min(values, key=values.__getitem__) == "fast-bipolar"


def test_names_are_classes_not_part_numbers() -> None:
    for name in candidates():
        assert re.fullmatch(r"[a-z]+(-[a-z]+)+", name), name


def test_every_candidate_says_when_it_is_right_and_what_it_costs() -> None:
    for name, opamp in candidates().items():
        assert isinstance(opamp, Opamp)
        assert len(opamp.note.split()) >= 8, name
        assert opamp.unit_price is None, name


def test_every_value_says_where_its_range_comes_from() -> None:
    lines = [line for line in FILE.read_text(encoding="utf-8").splitlines() if re.match(r"    \w", line)]
    values = [line for line in lines if not line.startswith("    note:")]
    assert len(values) == len(RANGES) * (len(OPAMP_PARAMETERS) - 1)
    for line in values:
        assert re.search(r" # .+ to .+; common practice, no source$", line), line
