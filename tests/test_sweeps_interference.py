"""Interference in a spec: lines and their harmonics, profiles, the converter, and what is refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from modepair.sweeps import SpecError, load_spec
from modepair.sweeps.interference import IEC_61000_4_16, Interference, Profile

BASE = """\
stage: {topology: difference, parts: {R1: 10k, R3: 10k, R2: 10k, R4: 10k}, opamp: fast}
frequency: {start: 1, stop: 1M, spots: [50]}
opamps: {fast: {open_loop_gain: 120 dB, gain_bandwidth: 10M}}
"""


def load(tmp_path: Path, more: str, base: str = BASE) -> Interference:
    path = tmp_path / "spec.yaml"
    path.write_text(base + more, encoding="utf-8")
    found = load_spec(path).interference
    assert found is not None
    return found


def test_harmonics_fall_per_decade(tmp_path: Path) -> None:
    found = load(tmp_path, "interference: {lines: [{at: 50, volts: 6, harmonics: 3, falling: 20 dB}]}\n")
    # 20 dB per decade: the nth harmonic has one nth.
    np.testing.assert_allclose(found.spectrum, [(50, 6), (100, 3), (150, 2)], rtol=1e-12)
    steep = load(tmp_path, "interference: {lines: [{at: 10, volts: 1, harmonics: 10, falling: 40 dB}]}\n")
    np.testing.assert_allclose(steep.spectrum[-1], (100, 0.01), rtol=1e-12)
    flat = load(tmp_path, "interference: {lines: [{at: 10, volts: 1, harmonics: 4, falling: 0 dB}]}\n")
    assert [volts for _, volts in flat.spectrum] == [1, 1, 1, 1]


def test_odd_orders_alone(tmp_path: Path) -> None:
    found = load(tmp_path, "interference: {lines: [{at: 50, volts: 5, harmonics: 8, orders: odd}]}\n")
    assert [hz for hz, _ in found.spectrum] == [50, 150, 250, 350]


def test_a_line_given_by_itself_goes_before_a_harmonic_and_harmonics_add_as_powers(tmp_path: Path) -> None:
    found = load(tmp_path, "interference: {lines: [{at: 50, volts: 6, harmonics: 3}, {at: 150, volts: 7}]}\n")
    assert dict(found.spectrum)[150.0] == 7.0
    both = load(
        tmp_path,
        "interference: {lines: [{at: 50, volts: 4, harmonics: 4, falling: 0 dB},"
        " {at: 100, volts: 3, harmonics: 2, falling: 0 dB}]}\n",
    )
    assert dict(both.spectrum)[200.0] == pytest.approx(5.0, rel=1e-12)


def test_level_3_of_the_standard_from_memory() -> None:
    """IEC 61000-4-16 (from memory): 10 V falling 20 dB a decade, 1 V, rising 20 dB a decade, 10 V."""
    profile = IEC_61000_4_16[3]
    asked = [15, 150, 1000, 1500, 15e3, 150e3]
    np.testing.assert_allclose(profile.at(asked), [10, 1, 1, 1, 10, 10], rtol=1e-12)
    # half-way up a slope of 20 dB per decade on logarithmic scales
    np.testing.assert_allclose(profile.at([15 * 10**0.5, 1500 * 10**0.5]), [10**0.5, 10**0.5], rtol=1e-12)
    assert np.isnan(profile.at([14, 151e3])).all()


def test_a_profile_of_ones_own(tmp_path: Path) -> None:
    found = load(tmp_path, "interference: {profile: [[10, 1 V], [1k, 100 mV]]}\n")
    assert found.swept == Profile(((10.0, 1.0), (1000.0, 0.1)))
    assert load(tmp_path, "interference: {iec-61000-4-16: {level: 3}}\n").swept == IEC_61000_4_16[3]


def test_a_code_of_the_converter(tmp_path: Path) -> None:
    more = "interference: {lines: [{at: 50, volts: 5}], converter: {bits: 16, range: 4.096}}\n"
    converter = load(tmp_path, more).converter
    assert converter is not None
    assert converter.code_volts == 4.096 / 65536


def test_lines_harmonics_and_corners_are_solved_exactly(tmp_path: Path) -> None:
    path = tmp_path / "spec.yaml"
    more = "interference: {lines: [{at: 60, volts: 5, harmonics: 3}], iec-61000-4-16: {level: 3}}\n"
    path.write_text(BASE + more, encoding="utf-8")
    spec = load_spec(path)
    assert spec.frequency.spots == (50.0,)
    solved = set(spec.frequency.frequency_hz.tolist())
    assert {50.0, 60.0, 120.0, 180.0, 15.0, 150.0, 1500.0, 15e3, 150e3} <= solved


@pytest.mark.parametrize(
    ("more", "expected"),
    [
        (
            "interference: {}\n",
            [
                "1:1: interference: there is no voltage here; give lines, such as [{at: 50, volts: 5}], or a profile",
            ],
        ),
        (
            "interference:\n  lines: []\n  iec-61000-4-16: {level: 4}\n  profile: [[5, 0]]\n  iec: 3\n",
            [
                "2:10: interference.lines: the list is empty; lines takes a list of lines, "
                "such as [{at: 50, volts: 5}]",
                "3:27: interference.iec-61000-4-16.level: 4 is not a level; level takes 3, the only one known here "
                "(from memory); for another, write its corners under profile",
                "4:3: interference.profile: profile and iec-61000-4-16 are both given; leave one of them out",
                "4:17: interference.profile[0][1]: 0 is zero; the level takes a voltage from 1 fV to 1 GV, "
                "such as 5 V",
                "5:3: interference.iec: iec is not a known key; known keys: lines, profile, iec-61000-4-16 "
                "and converter",
            ],
        ),
        (
            "interference:\n  lines:\n  - {at: 50, volts: 5, falling: 3 dB}\n  - {at: 50, volts: 5}\n"
            "  - {volts: 10 Hz}\n  - {at: 400k, volts: 1, harmonics: 3, orders: even}\n  - {at: 2M}\n",
            [
                "3:24: interference.lines[0].falling: falling has no effect without harmonics; give harmonics too, "
                "or remove it",
                "4:10: interference.lines[1].at: 50 is among the lines twice, first as lines[0]; remove one of them",
                "5:5: interference.lines[2]: at is missing; it takes a frequency, such as 50 Hz",
                "5:13: interference.lines[2].volts: 10 Hz is a frequency; volts takes a voltage, such as 5 V",
                "6:37: interference.lines[3].harmonics: harmonic 3 of 400k lies above the solved band, 1 to 1M; "
                "up to 2 is within it",
                "6:48: interference.lines[3].orders: even is not a choice of harmonics; orders takes all or odd",
                "7:5: interference.lines[4]: volts is missing; it takes a voltage, such as 5 V",
                "7:10: interference.lines[4].at: 2M lies outside the solved band, 1 to 1M; every line must be solved",
            ],
        ),
        (
            "interference:\n  iec-61000-4-16: {}\n  converter: {}\n",
            [
                "2:3: interference.iec-61000-4-16: level is missing; it takes 3, the only one known here "
                "(from memory); for another, write its corners under profile",
                "3:3: interference.converter: bits is missing; it takes a number of bits, such as 16",
                "3:3: interference.converter: range is missing; it takes a voltage, such as 4.096 V",
            ],
        ),
        (
            "interference:\n  profile: [[0.1, 1 V], [10, 2 V]]\n",
            [
                "2:14: interference.profile[0][0]: 0.1 lies outside the solved band, 1 to 1M; "
                "the whole profile must be solved",
            ],
        ),
    ],
)
def test_faults_are_told_in_full(tmp_path: Path, more: str, expected: list[str]) -> None:
    with pytest.raises(SpecError, match="interference") as raised:
        load(tmp_path, more)
    lines = BASE.count("\n")
    found = [f"{f.line - lines}:{f.column}: {f.key}: {f.message}" for f in raised.value.faults]
    assert sorted(found) == sorted(expected)


def test_a_standard_profile_must_lie_within_the_solved_band(tmp_path: Path) -> None:
    base = BASE.replace("stop: 1M", "stop: 20k")
    with pytest.raises(
        SpecError,
        match=r"interference\.iec-61000-4-16: the profile runs from 15 Hz to 150 kHz, beyond the solved band, "
        r"1 to 20k; widen frequency$",
    ):
        load(tmp_path, "interference: {iec-61000-4-16: {level: 3}}\n", base)
