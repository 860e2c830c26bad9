"""What interference leaves, against sums worked by hand."""

from __future__ import annotations

import numpy as np
import pytest

from modepair.reports import FLOOR_VOLTS, ModePair
from modepair.reports.interference import interference_figures, line_column, worst_errors
from modepair.sweeps.interference import Interference

FREQUENCY_HZ = np.array([10.0, 50.0, 100.0, 150.0, 1000.0])
COMMON = np.array([[1e-3, 2e-3j, 3e-3, -4e-3, 5e-3], [1e-5, 1e-5, 1e-5, 1e-5, 1e-5]])
DIFFERENTIAL = np.array([[10, 10, 10, 5j, 1], [100, 100, 100, 100, 100]], dtype=complex)
PAIR = ModePair(FREQUENCY_HZ, COMMON, DIFFERENTIAL)


def interference(**sections: object) -> Interference:
    return Interference.model_validate(sections)


LINES = interference(
    lines=[{"at": "50", "volts": "3"}, {"at": "150", "volts": "2"}],
    converter={"bits": "10", "range": "1.024"},
)


def test_errors_of_single_lines() -> None:
    """|A_cm| Vcm at the output, |rho| Vcm at the input; 1e-12 for round-off."""
    found = interference_figures(PAIR, LINES)
    np.testing.assert_allclose(found["output_error_v_at_50hz"], [6e-3, 3e-5], rtol=1e-12)
    np.testing.assert_allclose(found["input_error_v_at_50hz"], [6e-4, 3e-7], rtol=1e-12)
    np.testing.assert_allclose(found["output_error_v_at_150hz"], [8e-3, 2e-5], rtol=1e-12)
    np.testing.assert_allclose(found["input_error_v_at_150hz"], [1.6e-3, 2e-7], rtol=1e-12)


def test_lines_add_as_powers_and_read_in_codes() -> None:
    found = interference_figures(PAIR, LINES)
    np.testing.assert_allclose(found["output_error_v"], [10e-3, np.hypot(3e-5, 2e-5)], rtol=1e-12)
    np.testing.assert_allclose(
        found["input_error_v"], [np.hypot(6e-4, 1.6e-3), np.hypot(3e-7, 2e-7)], rtol=1e-12
    )
    # 1.024 V over 2^10 codes: 1 mV each
    np.testing.assert_allclose(found["output_error_codes"], found["output_error_v"] / 1e-3, rtol=1e-12)


def test_a_profile_counts_with_its_worst_frequency() -> None:
    found = interference_figures(PAIR, interference(profile=[["10", "10 V"], ["1k", "100 mV"]]))
    # Volts at 10, 50, 100, 150, 1000 Hz: 100/f. Output |A_cm| V: 10, 4, 3, 2.67, 0.5 mV.
    assert found["swept_output_error_at_hz"].tolist() == [10.0, 10.0]
    np.testing.assert_allclose(found["swept_output_error_v"], [10e-3, 1e-4], rtol=1e-12)
    # Input |rho| V: 1, 0.4, 0.3, 0.533, 0.5 mV.
    np.testing.assert_allclose(found["swept_input_error_v"], [1e-3, 1e-6], rtol=1e-12)
    assert "output_error_v" not in found


def test_the_worse_of_lines_and_profile_counts() -> None:
    both = interference(
        lines=[{"at": "50", "volts": "3"}, {"at": "150", "volts": "1"}],
        profile=[["10", "2 V"], ["1k", "2 V"]],
    )
    found = interference_figures(PAIR, both)
    volts, at_hz = worst_errors(found, "output")
    # First case: lines 7.2 mV, profile 10 mV at 1 kHz. Second: lines 31.6 uV, most at 50 Hz, profile 20 uV.
    np.testing.assert_allclose(volts, [10e-3, np.hypot(3e-5, 1e-5)], rtol=1e-12)
    assert at_hz.tolist() == [1000.0, 50.0]


def test_below_the_floor_an_error_is_at_most_the_floors() -> None:
    pair = ModePair(FREQUENCY_HZ, np.zeros(5, complex), np.full(5, 10.0 + 0j))
    found = interference_figures(pair, LINES)
    np.testing.assert_allclose(found["output_error_v_at_50hz"], 3 * FLOOR_VOLTS, rtol=1e-12)


def test_a_line_must_have_been_solved() -> None:
    with pytest.raises(ValueError, match=r"spots_hz: 60 Hz is not among the 5 solved frequencies"):
        interference_figures(PAIR, interference(lines=[{"at": "60", "volts": "1"}]))


def test_a_profile_must_have_been_solved_to_its_ends() -> None:
    with pytest.raises(ValueError, match=r"spots_hz: 5000 Hz is not among the 5 solved frequencies"):
        interference_figures(PAIR, interference(profile=[["10", "1 V"], ["5k", "1 V"]]))


def test_columns_have_no_exponents() -> None:
    assert line_column("output", 1e6) == "output_error_v_at_1000000hz"
    assert line_column("input", 16.7) == "input_error_v_at_16.7hz"
