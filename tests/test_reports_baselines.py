"""Baselines: their text, and what counts as a change."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from modepair.reports import FLOOR_VOLTS, ModePair
from modepair.reports.baselines import (
    Baseline,
    BaselineCase,
    BaselineError,
    baseline_path,
    case_settings,
    read_baseline,
    spec_settings,
)
from modepair.reports.comparing_baselines import compare_case, match_cases, unmatched
from modepair.sweeps import Sweep, expand, load_spec

FREQUENCY_HZ = np.array([10.0, 100.0, 1000.0])

SPEC = """\
title: Anything
stage: {topology: difference, parts: {R1: 10k, R3: 10k, R2: 10k, R4: 10k}, opamp: fast}
source: {imbalance: 0}
frequency: {start: 1, stop: 1k}
vary:
  stage.opamp: [fast, slow]
  stage.parts.R4: [10k, 9.99k]
opamps:
  fast: {open_loop_gain: 120 dB, gain_bandwidth: 10M}
  slow: {open_loop_gain: 120 dB, gain_bandwidth: 1M}
  unused: {open_loop_gain: 120 dB, gain_bandwidth: 1M}
"""


def sweep(tmp_path: Path, text: str = SPEC) -> Sweep:
    path = tmp_path / "some.yaml"
    path.write_text(text, encoding="utf-8")
    return expand(load_spec(path))


def case(levels_db: list[float], bound: tuple[bool, ...] = (False,) * 3, **axes: str) -> BaselineCase:
    return BaselineCase(axes, np.array(levels_db, float), np.array(bound))


def baseline(*cases: BaselineCase, settings: dict[str, str] | None = None, allow_db: float = 0.1) -> Baseline:
    origin = {"spec": "some.yaml", "digest": "sha256 0", "ngspice": "39"}
    return Baseline(origin, allow_db, settings or {}, FREQUENCY_HZ, cases)


def curve(levels_db: list[float], gain: float = 1.0) -> ModePair:
    rho = 10 ** (-np.array(levels_db) / 20)
    return ModePair(FREQUENCY_HZ, rho * gain + 0j, np.full(3, gain + 0j))


def test_the_text_reads_back_as_it_was(tmp_path: Path) -> None:
    written = baseline(
        case([100.5, 99.25, 80.125], opamp="fast", R4="9.99k"),
        case([200, 180.01, -3.5], (True, False, False), opamp="slow", R4="10k"),
        settings={"stage.parts.R1": "10k", "vary.stage.opamp": "fast, slow"},
        allow_db=0.5,
    )
    path = tmp_path / "some.baseline.txt"
    path.write_text(written.text(), encoding="utf-8")
    read = read_baseline(path)
    assert (read.origin, read.settings, read.allow_db) == (written.origin, written.settings, 0.5)
    np.testing.assert_array_equal(read.frequency_hz, FREQUENCY_HZ)
    assert [one.axes for one in read.cases] == [
        {"opamp": "fast", "R4": "9.99k"},
        {"opamp": "slow", "R4": "10k"},
    ]
    np.testing.assert_allclose(read.cases[0].cmrr_db, [100.5, 99.25, 80.12], atol=1e-12)
    assert read.cases[1].bound.tolist() == [True, False, False]
    assert read.text() == path.read_text(encoding="utf-8")


def test_a_sweep_of_one_case_has_a_baseline_too(tmp_path: Path) -> None:
    path = tmp_path / "one.baseline.txt"
    path.write_text(baseline(case([1, 2, 3])).text(), encoding="utf-8")
    (only,) = read_baseline(path).cases
    assert (only.axes, only.name) == ({}, "the only case")


GOOD = "[baseline]\nallow = 0.1 dB\n[frequencies]\n1: 1.0 2.0\n[case a = b]\n1: 90.00 80.00\n"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            GOOD.replace("allow = 0.1 dB", "allow: 0.1"),
            r"x\.txt:2:1: allow: 0\.1 is not a name and a value, such as",
        ),
        (
            GOOD.replace("allow = 0.1 dB", "allow = 0.1"),
            r"the section \[baseline\] has no allow, such as 0\.1 dB",
        ),
        (GOOD.replace("1.0 2.0", "2.0 1.0"), r"x\.txt:3:1: the frequencies do not ascend"),
        (GOOD.replace("1.0 2.0", "1.0 nan"), r"x\.txt:3:1: nan is not a number"),
        (GOOD.replace("80.00", "eighty"), r"x\.txt:5:1: eighty is not a number"),
        (GOOD.replace(" 80.00", ""), r"x\.txt:5:1: the case has 1 values; there are 2 frequencies"),
        (GOOD.replace("[case a = b]", "[case a = b"), r"x\.txt:5:1: \[case a = b has no closing bracket"),
        (GOOD.replace("[case a = b]", "[cases]"), r"x\.txt:5:1: there is no section cases"),
        (GOOD.replace("[baseline]\n", ""), r"x\.txt:1:1: allow = 0\.1 dB stands before any section, such as"),
        ("[baseline]\nallow = 0.1 dB\n", r"there is no section \[frequencies\] before the cases"),
    ],
)
def test_a_spoilt_baseline_is_told_with_its_line(tmp_path: Path, text: str, message: str) -> None:
    (tmp_path / "x.txt").write_text(text, encoding="utf-8")
    with pytest.raises(BaselineError, match=f"{message}.*; accept the curves anew$"):
        read_baseline(tmp_path / "x.txt")


def test_a_baseline_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(
        BaselineError, match=r"no\.txt: the baseline cannot be read: no such file or directory$"
    ):
        read_baseline(tmp_path / "no.txt")
    (tmp_path / "bytes.txt").write_bytes(b"\xff\xfe")
    with pytest.raises(BaselineError, match=r"bytes\.txt: the baseline cannot be read: it is not utf-8$"):
        read_baseline(tmp_path / "bytes.txt")


def test_it_stands_beside_the_spec() -> None:
    assert baseline_path("sweeps/silo.yaml") == Path("sweeps/silo.baseline.txt")


def test_settings_are_values_not_text(tmp_path: Path) -> None:
    found = spec_settings(sweep(tmp_path))
    assert found["stage.parts.R1"] == "10k"
    assert found["opamps.slow.gain_bandwidth"] == "1M"
    assert found["vary.stage.parts.R4"] == "9.99k, 10k"
    assert "stage.opamp" not in found
    assert not any("unused" in path for path in found)
    other = SPEC.replace("R1: 10k", "R1: 10000").replace("title: Anything", "# a comment\ntitle: Else")
    assert spec_settings(sweep(tmp_path, other)) == found


def test_the_order_of_axes_does_not_change_a_case(tmp_path: Path) -> None:
    first = "  stage.opamp: [fast, slow]\n"
    swapped = SPEC.replace(first, "").replace("9.99k]\n", f"9.99k]\n{first}")
    one, other = case_settings(sweep(tmp_path)), case_settings(sweep(tmp_path, swapped))
    assert one[1] == {"stage.opamp": "fast", "stage.parts.R4": "9.99k"}
    assert one != other
    assert sorted(map(str, one)) == sorted(map(str, other))


def test_cases_match_by_their_axes_and_the_others_are_named() -> None:
    before = baseline(case([1, 1, 1], opamp="fast"), case([2, 2, 2], opamp="slow"))
    found = match_cases(before, baseline(), [{"opamp": "slow"}, {"opamp": "new"}])
    assert {number: one.axes for number, one in found.matched.items()} == {1: {"opamp": "slow"}}
    assert found.new == [2]
    assert [one.name for one in found.missing] == ["opamp fast"]
    rows = unmatched(found)
    assert rows["verdict"].tolist() == ["new", "fail"]
    assert rows["case"].tolist() == [2, 0]
    assert rows["note"].tolist() == [
        "not in the baseline; --accept takes it in",
        "in the baseline, but not in the sweep: opamp fast",
    ]


def test_a_new_axis_counts_with_the_value_that_the_spec_gave_before() -> None:
    before = baseline(case([1, 1, 1], opamp="fast"), settings={"source.imbalance": "0"})
    axes = [{"opamp": "fast", "source.imbalance": "10"}, {"opamp": "fast", "source.imbalance": "0"}]
    found = match_cases(before, baseline(), axes)
    assert (list(found.matched), found.new, found.missing) == ([2], [1], [])


def test_a_fall_counts_beyond_the_allowance() -> None:
    before = case([90, 80, 70])
    (margin,) = compare_case(curve([90, 79.8, 69.95]), baseline(before), before, 0.1).margin
    assert margin == pytest.approx(-0.1, abs=1e-5)
    found = compare_case(curve([90, 79.8, 69.95]), baseline(before), before, 0.1)
    assert (found.verdict, found.at_hz.tolist()) == (["fail"], [100.0])
    assert found.note == ("fell by 0.20 dB, from 80.00 dB",)
    assert compare_case(curve([90, 79.8, 69.95]), baseline(before), before, 0.3).verdict == ["pass"]


def test_what_rounds_alike_is_no_change_even_without_an_allowance() -> None:
    before = case([90, 80, 70])
    assert compare_case(curve([89.996, 80.004, 70]), baseline(before), before, 0.0).verdict == ["pass"]


def test_an_improvement_is_told() -> None:
    before = case([90, 80, 70])
    found = compare_case(curve([90, 80, 73]), baseline(before), before, 0.1)
    assert (found.verdict, found.note) == (["pass"], ("better by up to 3.00 dB, at 1 kHz",))


def test_above_the_floor_nothing_counts() -> None:
    before = case([250, 240, 70], (True, True, False))
    # With a gain of 1 the floor is at 200 dB: what was known as 250 dB at least is now known as 200 dB at least.
    found = compare_case(curve([300, 300, 70]), baseline(before), before, 0.1)
    assert (found.verdict, found.note) == (["pass"], ("",))


def test_a_fall_from_above_the_floor_to_below_it_counts() -> None:
    before = case([200, 80, 70], (True, False, False))
    found = compare_case(curve([150, 80, 70]), baseline(before), before, 0.1)
    assert found.verdict == ["fail"]
    assert found.note == ("fell by 50.00 dB, from 200.00 dB",)


def test_round_off_near_the_floor_is_no_fall() -> None:
    # |A_cm| of 1e-9 is known to 1e-10, that is to 20 log10(1.1) = 0.83 dB.
    before = case([180, 80, 70])
    assert compare_case(curve([179.5, 80, 70]), baseline(before), before, 0.1).verdict == ["pass"]
    assert compare_case(curve([179.0, 80, 70]), baseline(before), before, 0.1).verdict == ["fail"]
    assert FLOOR_VOLTS == 1e-10


def test_a_frequency_that_is_not_solved_any_more_fails() -> None:
    before = case([90, 80, 70])
    now = ModePair(np.array([10.0, 1000.0]), np.full(2, 1e-6 + 0j), np.ones(2, complex))
    found = compare_case(now, baseline(before), before, 0.1)
    assert found.verdict == ["fail"]
    assert found.note == ("1 of the baseline's 3 frequencies are not solved now, 100 Hz the first",)


def test_what_else_changed_is_told(tmp_path: Path) -> None:
    before = baseline(settings={"stage.parts.R1": "10k", "stage.load": "2k", "opamps.fast.cmrr": "100k"})
    now = Baseline(
        {"spec": "other.yaml", "digest": "sha256 1", "ngspice": "44"},
        0.1,
        {"stage.parts.R1": "10.005k", "opamps.fast.cmrr": "100k", "source.resistance": "1k"},
        FREQUENCY_HZ,
    )
    assert before.changes(now) == [
        "stage.parts.R1: 10k before, 10.005k now",
        "stage.load: 2k before, not given now",
        "source.resistance: new, 1k",
        "ngspice: 39 before, 44 now",
    ]
