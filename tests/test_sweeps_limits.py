"""The limits of a spec: what is read, what is refused and in which words, and what must be solved for them."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.sweeps import Spec, SpecError, json_schema, load_spec
from modepair.sweeps.limits import Limits, Mask

BASE = """\
stage: {topology: difference, parts: {R1: 10k, R3: 10k, R2: 10k, R4: 10k}, opamp: fast}
frequency: {start: 1, stop: 1M, spots: [50]}
opamps: {fast: {open_loop_gain: 120 dB, gain_bandwidth: 10M}}
"""


def load(tmp_path: Path, more: str, base: str = BASE) -> Spec:
    path = tmp_path / "spec.yaml"
    path.write_text(base + more, encoding="utf-8")
    return load_spec(path)


def faults(tmp_path: Path, more: str, base: str = BASE) -> list[str]:
    """The faults of a spec, without the file's name; lines count from the end of the base."""
    lines = base.count("\n")
    with pytest.raises(SpecError, match="limits") as raised:
        load(tmp_path, more, base)
    return [
        f"{fault.line - lines}:{fault.column}: {fault.key}: {fault.message}" for fault in raised.value.faults
    ]


def limits(tmp_path: Path, more: str) -> Limits:
    found = load(tmp_path, f"limits:\n{more}").limits
    assert found is not None
    return found


def test_a_mask_is_straight_in_decibels_over_log_frequency(tmp_path: Path) -> None:
    mask = limits(tmp_path, "  cmrr: [[50, 90 dB], [5k, 70 dB]]\n").cmrr
    assert mask is not None
    assert mask.corners == ((50.0, 90.0), (5000.0, 70.0))
    # 500 Hz is half-way between 50 Hz and 5 kHz on a logarithmic scale; 1e-12: round-off.
    np.testing.assert_allclose(mask.at([50, 500, 5000]), [90, 80, 70], rtol=1e-12)
    assert np.isnan(mask.at([49, 5001])).all()


def test_the_ends_of_a_mask_belong_to_it_in_spite_of_round_off() -> None:
    mask = Mask(((50.0, 90.0), (5000.0, 70.0)))
    assert mask.at([50 * (1 - 1e-12), 5000 * (1 + 1e-12)]).tolist() == [90.0, 70.0]


def test_a_mask_of_one_corner_asks_at_that_frequency_alone() -> None:
    mask = Mask(((50.0, 90.0),))
    assert mask.at([50.0]).tolist() == [90.0]
    assert np.isnan(mask.at([49.0, 51.0])).all()


@given(
    st.lists(
        st.tuples(st.floats(0.1, 1e6), st.floats(0, 200)), min_size=1, max_size=8, unique_by=lambda c: c[0]
    )
)
def test_a_mask_passes_through_its_corners_and_stays_between_them(corners: list[tuple[float, float]]) -> None:
    corners.sort()
    if any(b / a < 1 + 1e-6 for (a, _), (b, _) in itertools.pairwise(corners)):
        return
    mask = Mask(tuple(corners))
    np.testing.assert_allclose(mask.at(mask.frequency_hz), mask.level_db, atol=1e-6)
    inner = mask.at(np.geomspace(corners[0][0], corners[-1][0], 50))
    assert np.nanmin(inner) >= mask.level_db.min() - 1e-6
    assert np.nanmax(inner) <= mask.level_db.max() + 1e-6


def test_every_limit_is_read(tmp_path: Path) -> None:
    more = (
        "  differential_gain: {within: 0.5 %, of: 101, from: 2, to: 100}\n"
        "  bandwidth: {least: 10 kHz}\n"
        "  output_error: {most: 1 mV}\n"
        "  input_error: {most: 10 uV}\n"
        "interference: {lines: [{at: 50, volts: 5}]}\n"
    )
    found = limits(tmp_path, more)
    gain = found.differential_gain
    assert gain is not None
    assert (gain.within, gain.of, gain.from_hz, gain.to_hz) == (0.005, 101.0, 2.0, 100.0)
    assert found.bandwidth is not None
    assert found.bandwidth.least == 10e3
    assert found.output_error is not None
    assert found.output_error.most == 1e-3
    assert found.input_error is not None
    assert found.input_error.most == 1e-5
    assert found.yield_least is None


def test_a_yield_is_read_as_a_fraction(tmp_path: Path) -> None:
    tolerance = "tolerance: {draws: 100, parts: [{of: [R1], absolute: 1 %}]}\n"
    more = f"  cmrr: [[50, 60 dB]]\n  yield: {{least: 99 %}}\n{tolerance}"
    assert limits(tmp_path, more).yield_least == 0.99


def test_corners_and_ends_of_a_band_are_solved_exactly_but_are_no_spots(tmp_path: Path) -> None:
    spec = load(
        tmp_path,
        "limits:\n  cmrr: [[50, 60 dB], [3.3k, 50 dB]]\n  differential_gain: {within: 1 %, of: 1, from: 7, to: 1k}\n",
    )
    assert spec.frequency.spots == (50.0,)
    assert {50.0, 7.0, 3300.0, 1000.0} <= set(spec.frequency.frequency_hz.tolist())
    assert spec.frequency.off_grid_spots_hz == (7.0, 50.0, 3300.0)


@pytest.mark.parametrize(
    ("more", "expected"),
    [
        (
            "limits: {}\n",
            [
                "1:1: limits: nothing is limited; give cmrr, such as [[50, 90 dB], [1k, 80 dB]], or remove limits"
            ],
        ),
        ("limits: 3\n", ["1:9: limits: 3 is a single value; limits takes a mapping of keys"]),
        (
            "limits:\n  cmrr: []\n",
            [
                "2:9: limits.cmrr: the list is empty; cmrr takes a list of corners, such as [[50, 90 dB], [1k, 80 dB]]"
            ],
        ),
        (
            "limits:\n  cmrr: 90 dB\n",
            [
                "2:9: limits.cmrr: 90 dB is a single value; cmrr takes a list of corners, "
                "such as [[50, 90 dB], [1k, 80 dB]]"
            ],
        ),
        (
            "limits:\n  cmrr: [[50, 90]]\n",
            [
                "2:15: limits.cmrr[0][1]: 90 has no unit; write 90 dB if dB is meant; "
                "the level takes a ratio in dB, such as 120 dB"
            ],
        ),
        (
            "limits:\n  cmrr: [[50, 90 dB], [50, 80 dB], 3, [1], [0, 80 dB], [2M, 20 dB]]\n",
            [
                "2:24: limits.cmrr[1][0]: 50 is not above the corner before it; corners ascend in frequency",
                "2:36: limits.cmrr[2]: 3 is a single value; a corner has a frequency and a ratio in dB, "
                "such as [50, 90 dB]",
                "2:39: limits.cmrr[3]: 1 value in a corner; a corner has a frequency and a ratio in dB, "
                "such as [50, 90 dB]",
                "2:45: limits.cmrr[4][0]: 0 is zero; the frequency takes a frequency from 1 µHz to 1 THz, "
                "such as 50 Hz",
                "2:57: limits.cmrr[5][0]: 2M lies outside the solved band, 1 to 1M; "
                "a curve that does not cover the mask is no pass",
            ],
        ),
        (
            "limits:\n  differential_gain: {from: 2k, to: 1k}\n",
            [
                "2:3: limits.differential_gain: within is missing; it takes a fraction, such as 0.5 %",
                "2:3: limits.differential_gain: of is missing, and stage.gain is not one gain for every case; "
                "of takes a gain, such as 101",
                "2:37: limits.differential_gain.to: to is below from; the band runs from the lower to the higher "
                "frequency",
            ],
        ),
        (
            "limits:\n  differential_gain: {within: 1 %, of: 1, from: 0.1}\n",
            [
                "2:49: limits.differential_gain.from: 0.1 lies outside the solved band, 1 to 1M; "
                "the band of a limit must lie within it"
            ],
        ),
        (
            "limits:\n  bandwidth: {}\n",
            ["2:3: limits.bandwidth: least is missing; it takes a frequency, such as 10 kHz"],
        ),
        (
            "limits:\n  bandwidth: {least: 2M}\n",
            [
                "2:22: limits.bandwidth.least: 2M lies above the solved band, 1 to 1M; "
                "raise frequency.stop to show it"
            ],
        ),
        (
            "limits:\n  yield: {least: 100 %}\n",
            [
                "2:3: limits.yield: a yield is counted against the cmrr mask; give cmrr too",
                "2:3: limits.yield: a yield is counted over draws; give tolerance with draws",
                "2:18: limits.yield.least: 100 % is out of range; least takes a fraction from 1e-12 to 0.999999, "
                "such as 99 %",
            ],
        ),
        (
            "limits:\n  output_error: {}\n  input_error: {}\n",
            [
                "2:3: limits.output_error: output_error judges what interference leaves; give interference too",
                "2:3: limits.output_error: most or most_codes is missing; most takes a voltage, such as 1 mV, "
                "most_codes a number of converter codes, such as 2",
                "3:3: limits.input_error: most is missing; it takes a voltage, such as 1 mV",
                "3:3: limits.input_error: input_error judges what interference leaves; give interference too",
            ],
        ),
        (
            "limits:\n  output_error: {most: 3 mV, most_codes: 3}\ninterference: {lines: [{at: 50, volts: 5}]}\n",
            [
                "2:3: limits.output_error: most and most_codes are both given; leave one of them out",
                "2:30: limits.output_error.most_codes: codes need a converter; give interference.converter, "
                "such as {bits: 16, range: 4.096}",
            ],
        ),
        (
            "limits:\n  yeld: {least: 9 %}\n",
            ["2:3: limits.yeld: yeld is not a known key; did you mean yield?"],
        ),
    ],
)
def test_faults_are_told_in_full(tmp_path: Path, more: str, expected: list[str]) -> None:
    assert sorted(faults(tmp_path, more)) == sorted(expected)


def test_a_mask_has_so_many_corners_at_most(tmp_path: Path) -> None:
    corners = ", ".join(f"[{1 + n / 100}, 60 dB]" for n in range(1001))
    assert faults(tmp_path, f"limits:\n  cmrr: [{corners}]\n") == [
        "2:9: limits.cmrr: there are 1001 corners; at most 1000 are taken"
    ]


def test_the_stage_gain_serves_as_the_gain_asked_for(tmp_path: Path) -> None:
    base = BASE.replace("R2: 10k, R4: 10k}", "}, gain: 10")
    assert load(tmp_path, "limits:\n  differential_gain: {within: 1 %}\n", base).limits is not None


def test_a_gain_that_varies_does_not(tmp_path: Path) -> None:
    base = BASE.replace("R2: 10k, R4: 10k}", "}, gain: 10") + "vary: {stage.gain: [10, 20]}\n"
    found = faults(tmp_path, "limits:\n  differential_gain: {within: 1 %}\n", base)
    assert "of is missing" in found[0]


def test_editors_know_the_keys() -> None:
    definitions = json_schema()["$defs"]
    assert {"cmrr", "differential_gain", "bandwidth", "yield", "output_error", "input_error"} == set(
        definitions["Limits"]["properties"]
    )
    assert {"within", "of", "from", "to"} == set(definitions["GainLimit"]["properties"])
