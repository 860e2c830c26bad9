"""The sections' models and the frequency grid."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from pydantic import ValidationError

from modepair.sweeps import OPAMP_PARAMETERS, Frequency, Opamp, Source, Stage
from modepair.sweeps.imported import MODEL_KEYS


def frequency(start: str, stop: str, points: str = "20", spots: tuple[str, ...] = ()) -> Frequency:
    return Frequency.model_validate(
        {"start": start, "stop": stop, "points_per_decade": points, "spots": list(spots)}
    )


def test_the_grid_has_both_ends_and_whole_decades() -> None:
    grid = frequency("1", "1M").grid_hz
    assert grid.shape == (121,)
    # geomspace sets its ends exactly; the decade in between is a rounded power
    assert (grid[0], grid[-1]) == (1.0, 1e6)
    assert grid[20] == pytest.approx(10.0, rel=1e-12)


def test_a_part_of_a_step_is_dropped_and_the_rest_spread() -> None:
    # 10 * log10(3) = 4.77: 4 steps from 1 to 3
    np.testing.assert_allclose(frequency("1", "3", "10").grid_hz, 3.0 ** np.array([0, 0.25, 0.5, 0.75, 1]))


def test_a_narrow_span_has_its_ends() -> None:
    np.testing.assert_array_equal(frequency("50", "51", "1").grid_hz, [50.0, 51.0])


def test_equal_ends_are_one_point() -> None:
    one = frequency("50", "50", spots=("50",))
    np.testing.assert_array_equal(one.frequency_hz, [50.0])
    assert one.off_grid_spots_hz == ()


def test_spots_join_the_grid_and_keep_their_exact_value() -> None:
    asked = frequency("1", "1M", spots=("1k", "50", "60"))
    assert asked.off_grid_spots_hz == (50.0, 60.0)
    assert asked.spots == (1000.0, 50.0, 60.0)
    points = asked.frequency_hz
    assert points.shape == (123,)
    assert {50.0, 60.0, 1000.0} <= set(points.tolist())


@given(
    st.floats(min_value=1e-3, max_value=1e6),
    st.floats(min_value=1.0, max_value=1e6),
    st.integers(1, 100),
    st.lists(st.floats(min_value=0.0, max_value=1.0), max_size=5, unique=True),
)
def test_frequencies_ascend_and_hold_every_spot(
    start: float, ratio: float, points: int, places: list[float]
) -> None:
    stop = start * ratio
    spots = sorted({min(stop, start * ratio**place) for place in places})
    assume(all(b > a * (1 + 1e-6) for a, b in itertools.pairwise(spots)))
    asked = Frequency.model_validate(
        {"start": start, "stop": stop, "points_per_decade": points, "spots": spots}
    )
    hertz = asked.frequency_hz
    assert np.all(np.diff(hertz) > 0)
    assert set(spots) <= set(hertz.tolist())
    assert len(hertz) == len(asked.grid_hz) + len(asked.off_grid_spots_hz)


def test_models_are_frozen() -> None:
    opamp = Opamp.model_validate({"open_loop_gain": "120 dB", "gain_bandwidth": "8 MHz"})
    with pytest.raises(ValidationError, match="frozen"):
        opamp.gain_bandwidth = 1.0  # type: ignore[misc]


def test_an_op_amp_gives_the_parameters_it_has() -> None:
    opamp = Opamp.model_validate(
        {
            "open_loop_gain": "120 dB",
            "gain_bandwidth": "8 MHz",
            "cmrr": "100 dB",
            "cmrr_sign": "-1",
            "note": "quiet",
            "unit_price": "1.20",
        }
    )
    assert opamp.parameters == {
        "open_loop_gain": pytest.approx(1e6, rel=1e-15),
        "gain_bandwidth": 8e6,
        "cmrr": pytest.approx(1e5, rel=1e-15),
        "cmrr_sign": -1.0,
    }
    assert (opamp.note, opamp.unit_price) == ("quiet", 1.2)
    assert set(opamp.parameters) <= set(OPAMP_PARAMETERS)


def test_an_op_amp_has_a_field_for_every_parameter() -> None:
    assert set(Opamp.model_fields) - {"note", "unit_price", *MODEL_KEYS} == set(OPAMP_PARAMETERS)


def test_a_source_is_empty_by_default() -> None:
    assert Source().model_dump(exclude_none=True) == {"filter": {}, "parts": {}}


def test_values_of_a_stage_are_si_floats() -> None:
    stage = Stage.model_validate(
        {"topology": "difference", "parts": {"R1": "4k7", "A1.cmrr": "80 dB"}, "gain": "40 dB", "load": "2k"}
    )
    assert stage.parts == {"R1": 4700.0, "A1.cmrr": 1e4}
    assert (stage.gain, stage.load) == (100.0, 2000.0)


def test_ends_that_round_off_tells_apart_are_one_point() -> None:
    asked = Frequency.model_validate({"start": 1.0, "stop": 1.0000000000000002, "spots": [1.0]})
    assert asked.grid_hz.tolist() == [1.0]
    assert asked.frequency_hz.tolist() == [1.0]
