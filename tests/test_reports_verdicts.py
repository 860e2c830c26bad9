"""Verdicts as they are read: margins, lines, tables, curves as text."""

from __future__ import annotations

import io
from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest

from modepair.reports import console_for
from modepair.reports.judged_sections import interference_section, verdict_section
from modepair.reports.judgement import Margins
from modepair.reports.verdicts import (
    codes_text,
    curve_text,
    failing,
    margin_text,
    overall,
    print_verdicts,
    value_text,
    verdict_line,
)
from modepair.sweeps.interference import Interference


@dataclass(frozen=True)
class FakeAxis:
    path: str
    values: tuple[float, ...] | tuple[str, ...]
    labels: tuple[str, ...]


AXES = [FakeAxis("source.imbalance", (0.0, 10.0), ("0", "10"))]
CASES = pd.DataFrame({"case": [1, 2], "source.imbalance": [0.0, 10.0], "state": ["done", "done"]})


def cmrr(*margins: float, bound: bool = False) -> pd.DataFrame:
    count = len(margins)
    margin = np.array(margins)
    level = np.full(count, 70.0)
    return Margins(
        "cmrr", margin, True, np.full(count, 3000.0), level + margin, level, "dB", np.full(count, bound)
    ).frame(np.arange(1, count + 1))


def row(verdicts: pd.DataFrame, place: int = 0) -> dict[str, object]:
    return {str(key): value for key, value in verdicts.iloc[place].items()}


def test_margins_are_signed_and_never_rounded_up_to_a_pass() -> None:
    assert margin_text(row(cmrr(-1.366))) == "-1.37 dB"
    assert margin_text(row(cmrr(0.0))) == "+0.00 dB"
    assert margin_text(row(cmrr(-0.0004))) == "-0.0004 dB"
    assert margin_text(row(cmrr(12, bound=True))) == "> +12.00 dB"
    assert margin_text(row(cmrr(float("nan")))) == "none"


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (69.493, "dB", "69.49 dB"),
        (0.97, "share", "97.00 %"),
        (101.04, "V/V", "101.0"),
        (1.2e-3, "V", "1.2 mV"),
        (10e3, "Hz", "10 kHz"),
        (45612.0, "codes", "45600 codes"),
        (float("nan"), "dB", ""),
    ],
)
def test_values_carry_their_unit(value: float, unit: str, text: str) -> None:
    assert value_text(value, unit) == text


def test_codes_have_no_exponent() -> None:
    assert [codes_text(x) for x in (0.8661, 44.09, 2303.6, 1e6)] == ["0.866", "44.1", "2300", "1000000"]


def test_a_verdict_in_a_line() -> None:
    line = verdict_line(row(cmrr(-0.41)), "imbalance 10")
    assert line == "case 1 (imbalance 10): cmrr: fail, margin -0.41 dB at 3 kHz (69.59 dB against 70.00 dB)"


def test_the_whole_in_a_line() -> None:
    names = {1: "imbalance 0", 2: "imbalance 10"}
    assert overall(cmrr(1, 2), names) == (
        "PASS: 2 of 2 cases pass. Nearest to its limit: case 1 (imbalance 0): cmrr: pass, margin +1.00 dB at 3 kHz "
        "(71.00 dB against 70.00 dB)"
    )
    assert overall(cmrr(1, -2), names).startswith(
        "FAIL: 1 of 2 cases fails. Worst: case 2 (imbalance 10): cmrr: fail"
    )


def test_undecided_is_no_pass() -> None:
    verdicts = cmrr(-5, bound=True)
    assert overall(verdicts, {}).startswith("FAIL: 1 of 1 cases fails. Worst: case 1: cmrr: undecided")
    assert len(failing(verdicts)) == 1


def test_the_table_on_the_console() -> None:
    file = io.StringIO()
    print_verdicts(console_for(file), cmrr(1, -2), CASES, AXES, ["stage.parts.R1: 10k before, 10.005k now"])
    assert file.getvalue().splitlines() == [
        "case  imbalance  quantity  verdict    margin     at     value     limit",
        "   1  0          cmrr      pass     +1.00 dB  3 kHz  71.00 dB  70.00 dB",
        "   2  10         cmrr      fail     -2.00 dB  3 kHz  68.00 dB  70.00 dB",
        "",
        "FAIL: 1 of 2 cases fails. Worst: case 2 (imbalance 10): cmrr: fail, margin -2.00 dB at 3 kHz "
        "(68.00 dB against 70.00 dB)",
        "Changed since the baseline was accepted:",
        "  stage.parts.R1: 10k before, 10.005k now",
    ]


def test_of_many_verdicts_the_worst_are_shown() -> None:
    count = 100
    cases = pd.DataFrame(
        {"case": range(1, count + 1), "source.imbalance": np.arange(count, dtype=float), "state": "done"}
    )
    axes = [FakeAxis("source.imbalance", tuple(range(count)), tuple(map(str, range(count))))]
    file = io.StringIO()
    print_verdicts(console_for(file), cmrr(*np.linspace(50, -3, count)), cases, axes)
    text = file.getvalue()
    assert text.splitlines()[1].startswith(" 100  99 ")
    assert "Shown: the 20 verdicts with the smallest margin; the other 80 are in verdicts.csv." in text


def test_a_curve_as_text_shows_corners_and_the_worst_place() -> None:
    frequency_hz = np.geomspace(1, 1e6, 601)
    value = np.full(601, 80.0)
    value[217] = 60.0
    text = curve_text(
        frequency_hz, value, np.full(601, 70.0), names=("CMRR, dB", "mask, dB"), always_hz=(50.0,)
    )
    lines = text.splitlines()
    assert lines[0].split() == ["frequency", "CMRR,", "dB", "mask,", "dB", "margin"]
    worst = next(line for line in lines if "-10.00" in line)
    assert worst.split()[:2] == [f"{frequency_hz[217]:.4g}", "Hz"]
    assert worst.index("X") < worst.index("|")
    good = next(line for line in lines if "+10.00" in line)
    assert good.index("|") < good.index("o")
    assert any(line.split()[:2] == ["50.12", "Hz"] for line in lines)
    assert len(lines) <= 20


def test_the_section_escapes_what_comes_from_a_spec() -> None:
    axes = [FakeAxis("stage.opamp", ("a|b", "<i>"), ("a|b", "<i>"))]
    cases = pd.DataFrame({"case": [1, 2], "stage.opamp": ["a|b", "<i>"], "state": ["done", "done"]})
    text = verdict_section(cmrr(1, -2), cases, axes, ["*odd*: 1 before, 2 now"])
    assert r"| 1 | a\|b | cmrr | pass |" in text
    assert r"\<i\>" in text
    assert r"- \*odd\*: 1 before, 2 now" in text


def test_the_profile_is_marked_as_from_memory() -> None:
    found = Interference.model_validate(
        {"iec-61000-4-16": {"level": "3"}, "converter": {"bits": "16", "range": "4.096"}}
    )
    columns = {
        "swept_input_error_v": 1e-3, "swept_input_error_at_hz": 15.0, "swept_output_error_v": 0.1,
        "swept_output_error_at_hz": 150e3, "swept_output_error_codes": 1600.0,
    }  # fmt: skip
    text = interference_section(CASES.assign(**columns), AXES, found)
    assert "quoted from memory; check it in the standard" in text
    assert "shows no compliance" in text
    assert "One code of the 16-bit converter is 62.5 µV." in text
    assert "| 1 | 0 | 100 mV | 1 mV | 1600 | 150 kHz |" in text
    assert interference_section(CASES.assign(state="failed: x"), AXES, found) == ""
