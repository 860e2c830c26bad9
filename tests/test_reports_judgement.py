"""Margins against limits, worked by hand on curves of a few points; dB within 1e-9 for round-off."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from modepair.reports import ModePair
from modepair.reports.judgement import Margins, judge, judge_yield, judged_quantities, mask_margins, nearest
from modepair.sweeps.interference import Interference
from modepair.sweeps.limits import Limits, Mask

FREQUENCY_HZ = np.array([10.0, 100.0, 1000.0, 10e3])


def pair(*levels_db: list[float], gain: float = 10.0) -> ModePair:
    """Cases of the CMRR given."""
    rho = 10 ** (-np.array(levels_db, dtype=float) / 20)
    return ModePair(FREQUENCY_HZ, rho * gain + 0j, np.full(rho.shape, gain + 0j))


def limits(**sections: object) -> Limits:
    return Limits.model_validate(sections)


def test_the_margin_is_smallest_where_the_curve_comes_nearest_to_the_mask() -> None:
    mask = Mask(((10.0, 80.0), (1000.0, 60.0)))  # 70 dB at 100 Hz
    found = mask_margins(pair([90, 71, 65, 20], [79, 90, 90, 90]), mask)
    np.testing.assert_allclose(found.margin, [1, -1], atol=1e-9)
    assert found.at_hz.tolist() == [100.0, 10.0]
    np.testing.assert_allclose(found.value, [71, 79], atol=1e-9)
    np.testing.assert_allclose(found.limit, [70, 80], atol=1e-9)
    assert found.verdict == ["pass", "fail"]


def test_outside_its_corners_a_mask_asks_nothing() -> None:
    found = mask_margins(pair([0, 71, 61, 0]), Mask(((100.0, 70.0), (1000.0, 60.0))))
    assert found.verdict == ["pass"]
    np.testing.assert_allclose(found.margin, [1], atol=1e-9)


def test_a_corner_that_was_not_solved_is_an_error_not_a_pass() -> None:
    with pytest.raises(ValueError, match=r"spots_hz: 50 Hz is not among the 4 solved frequencies"):
        mask_margins(pair([90, 90, 90, 90]), Mask(((50.0, 60.0), (1000.0, 60.0))))
    with pytest.raises(ValueError, match=r"spots_hz: 20000 Hz is not among the 4 solved frequencies"):
        mask_margins(pair([90, 90, 90, 90]), Mask(((10.0, 60.0), (20e3, 60.0))))


def test_exactly_on_the_mask_is_a_pass() -> None:
    level_db = float(pair([70, 70, 70, 70]).cmrr_db[0, 0])
    assert mask_margins(pair([70, 70, 70, 70]), Mask(((10.0, level_db), (10e3, level_db)))).verdict == [
        "pass"
    ]


def test_above_the_floor_a_bound_passes_a_mask_below_it_and_is_undecided_against_one_above_it() -> None:
    # A gain of 10 puts the floor at 220 dB; a CMRR of 300 dB is known as 220 dB at least.
    high = pair([300, 300, 300, 300])
    low = mask_margins(high, Mask(((10.0, 100.0), (10e3, 100.0))))
    assert (low.verdict, low.bound.tolist()) == (["pass"], [True])
    np.testing.assert_allclose(low.margin, [120], atol=1e-9)
    above = mask_margins(high, Mask(((10.0, 230.0), (10e3, 230.0))))
    assert above.verdict == ["undecided"]
    assert above.note == ("above the numerical floor, at least so much",)


def test_a_certain_failure_goes_before_a_bound_that_reads_lower() -> None:
    found = mask_margins(pair([300, 300, 99, 300]), Mask(((10.0, 240.0), (1000.0, 100.0), (10e3, 100.0))))
    assert (found.verdict, found.at_hz.tolist()) == (["fail"], [1000.0])
    assert nearest(np.array([[-5.0, -1.0]]), np.array([[True, False]])).tolist() == [1]
    assert nearest(np.array([[-5.0, 1.0]]), np.array([[True, False]])).tolist() == [0]


def test_the_gain_is_judged_over_its_band() -> None:
    gains = np.array([[100.0, 100.4, 99.2, 50.0]])
    curve = ModePair(FREQUENCY_HZ, gains * 1e-5 + 0j, gains + 0j)
    asked = limits(differential_gain={"within": "1 %", "of": "100", "to": "1k"})
    (found,) = judge(curve, asked)
    # 99.2 is off by 0.8 %: 0.2 % are left.
    np.testing.assert_allclose(found.margin, [0.2], atol=1e-9)
    assert (found.at_hz.tolist(), found.in_db) == ([1000.0], False)
    (whole,) = judge(curve, limits(differential_gain={"within": "1 %"}), gain=100)
    assert (whole.verdict, whole.at_hz.tolist()) == (["fail"], [10e3])
    with pytest.raises(ValueError, match=r"gain must be given, since limits\.differential_gain has no of"):
        judge(curve, limits(differential_gain={"within": "1 %"}))
    with pytest.raises(
        ValueError, match=r"the band of differential_gain must lie within the solved frequencies"
    ):
        judge(curve, limits(differential_gain={"within": "1 %", "of": "1", "from": "1"}))


def test_bandwidth_and_one_beyond_the_band() -> None:
    gains = np.array([[10.0, 10.0, 10.0, 10.0], [10.0, 10.0, 10.0, 1.0]])
    curve = ModePair(FREQUENCY_HZ, gains * 1e-5 + 0j, gains + 0j)
    (found,) = judge(curve, limits(bandwidth={"least": "2k"}))
    # Beyond 10 kHz: at least 400 % over 2 kHz. Else 3.0103 dB of the 20 dB of a decade: 1 kHz * 10^0.150515.
    np.testing.assert_allclose(
        found.margin, [400, 100 * (0.5 * 10 ** (np.log10(2) * 10 / 20) - 1)], rtol=1e-9
    )
    assert found.bound.tolist() == [True, False]
    assert found.verdict == ["pass", "fail"]
    assert found.note == ("beyond the solved band, at least so much", "")


def test_errors_of_interference_in_volts_and_codes() -> None:
    disturbance = Interference.model_validate(
        {"lines": [{"at": "100", "volts": "5"}], "converter": {"bits": "10", "range": "1.024"}}
    )
    curve = pair([80, 80, 80, 80])  # A_cm = 1e-3: 5 mV at the output, 0.5 mV at the input; a code is 1 mV
    asked = limits(output_error={"most_codes": "10"}, input_error={"most": "50 uV"})
    output, source = judge(curve, asked, interference=disturbance)
    np.testing.assert_allclose(output.margin, [20 * np.log10(2)], atol=1e-9)
    np.testing.assert_allclose(source.margin, [-20], atol=1e-9)
    assert (output.unit, source.unit, output.at_hz.tolist()) == ("codes", "V", [100.0])
    (volts,) = judge(curve, limits(output_error={"most": "5.1 mV"}), interference=disturbance)
    assert volts.verdict == ["pass"]
    with pytest.raises(ValueError, match=r"interference must be given, since limits judge what it leaves"):
        judge(curve, asked)


def test_a_yield_passes_only_where_the_draws_show_it() -> None:
    cases = pd.DataFrame(
        {"yield": [1.0, 0.99, 0.5], "yield_low": [0.995, 0.97, 0.4], "yield_high": [1.0, 0.998, 0.6]}
    )
    found = judge_yield(cases, 0.99)
    assert found.verdict == ["pass", "undecided", "fail"]
    np.testing.assert_allclose(found.margin, [0.5, -2, -59], atol=1e-9)
    assert (
        found.note[1]
        == "99.00 % of draws pass, 97.00 to 99.80 % of all boards; more draws are needed to tell"
    )


def test_a_table_has_one_unit_of_margin_per_row() -> None:
    one = np.array([1.0])
    frame = Margins("cmrr", one, True, one, one, one, "dB", np.array([False])).frame([7])
    assert frame["margin_db"].tolist() == [1.0]
    assert frame["margin_percent"].isna().all()
    assert frame["case"].tolist() == [7]


def test_what_limits_judge() -> None:
    assert judged_quantities(None) == ()
    asked = limits(bandwidth={"least": "1k"}, cmrr=[["10", "60 dB"]])
    assert judged_quantities(asked) == ("cmrr", "bandwidth")
