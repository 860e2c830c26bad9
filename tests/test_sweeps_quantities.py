"""Quantities: what is read, what is refused, and in which words."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.sweeps import quantities as q
from modepair.sweeps.faults import RefusedError
from modepair.sweeps.quantities import Kind, render

KINDS = [
    q.RESISTANCE,
    q.RESISTANCE.with_zero(),
    q.RESISTANCE.with_sign(),
    q.CAPACITANCE,
    q.FREQUENCY,
    q.VOLTAGE,
    q.GAIN,
    q.RATIO_DB,
    q.DECIBELS,
    q.FRACTION,
    q.ANGLE,
    q.COUNT,
    q.SIGN,
    q.NUMBER,
]


# Value codes: IEC 60062 (from memory). Prefixes: SI.
@pytest.mark.parametrize(
    ("text", "ohm"),
    [
        ("4k7", 4700.0),
        ("2R2", 2.2),
        ("4R7", 4.7),
        ("0R1", 0.1),
        ("R47", 0.47),
        ("100R", 100.0),
        ("1M5", 1.5e6),
        ("4K7", 4700.0),
        ("10k", 1e4),
        ("10K", 1e4),
        ("10 kΩ", 1e4),
        ("10 k\u2126", 1e4),
        ("10\u00a0kΩ", 1e4),
        ("10kohm", 1e4),
        ("10 Mohm", 1e7),
        ("350 Ω", 350.0),
        ("350 ohms", 350.0),
        ("1M", 1e6),
        ("1m", 1e-3),
        ("1G", 1e9),
        ("1e3", 1000.0),
        ("1E3", 1000.0),
        ("1.5e+3 Ω", 1500.0),
        ("0.10", 0.1),
        (".5k", 500.0),
        ("+3", 3.0),
        ("5.", 5.0),
        ("10µ", 1e-5),
        ("10\u03bc", 1e-5),
        ("10u", 1e-5),
        ("  10k ", 1e4),
    ],
)
def test_resistances_are_read(text: str, ohm: float) -> None:
    assert q.RESISTANCE.parse(text) == ohm


@pytest.mark.parametrize(
    ("kind", "text", "value"),
    [
        (q.CAPACITANCE, "100n", 100e-9),
        (q.CAPACITANCE, "4n7", 4.7e-9),
        (q.CAPACITANCE, "200 pF", 200e-12),
        (q.CAPACITANCE, "1 µF", 1e-6),
        (q.CAPACITANCE, "1 \u03bcF", 1e-6),
        (q.CAPACITANCE, "10 fF", 10e-15),
        (q.FREQUENCY, "1 MHz", 1e6),
        (q.FREQUENCY, "1 mHz", 1e-3),
        (q.FREQUENCY, "1k5", 1500.0),
        (q.FREQUENCY, "50", 50.0),
        (q.VOLTAGE, "10 V", 10.0),
        (q.VOLTAGE, "0", 0.0),
        (q.GAIN, "40 dB", 100.0),
        (q.GAIN, "101", 101.0),
        (q.GAIN, "-20 dB", 0.1),
        (q.RATIO_DB, "120 dB", 1e6),
        (q.RATIO_DB, "120dB", 1e6),
        (q.RATIO_DB, "1e6", 1e6),
        (q.RATIO_DB, "2M", 2e6),
        (q.DECIBELS, "80 dB", 1e4),
        (q.FRACTION, "0.1 %", 1e-3),
        (q.FRACTION, "50 ppm", 50e-6),
        (q.FRACTION, "0.01", 0.01),
        (q.FRACTION, "0", 0.0),
        (q.ANGLE, "60", 60.0),
        (q.ANGLE, "60 deg", 60.0),
        (q.ANGLE, "60°", 60.0),
        (q.COUNT, "20", 20.0),
        (q.SIGN, "-1", -1.0),
        (q.SIGN, "+1", 1.0),
        (q.NUMBER, "1.25", 1.25),
        (q.RESISTANCE.with_sign(), "-10", -10.0),
        (q.RESISTANCE.with_sign(), "0", 0.0),
        (q.RESISTANCE.with_zero(), "0", 0.0),
        (q.RESISTANCE, 350, 350.0),
        (q.RESISTANCE, 4.7e3, 4700.0),
    ],
)
def test_other_kinds_are_read(kind: Kind, text: object, value: float) -> None:
    # one rounding of the last digit: dB and % take one power or one division
    assert kind.parse(text) == pytest.approx(value, rel=4e-16, abs=0)


@pytest.mark.parametrize(
    ("kind", "text", "message"),
    [
        (q.RESISTANCE, "1meg", "1meg has SPICE's meg for mega; write 1M; X takes a resistance, such as 10k"),
        (q.RESISTANCE, "1 Megohm", "1 Megohm has SPICE's meg for mega; write 1Mohm"),
        (q.RESISTANCE, "10,5k", "has a comma; write a decimal point, and nothing between thousands"),
        (q.RESISTANCE, "1e400", "1e400 is not a finite number"),
        (q.RESISTANCE, "1e-400", "1e-400 is too small for a number"),
        (q.FRACTION, "1e-400 %", "1e-400 % is too small for a number"),
        (q.RESISTANCE, "nan", "nan is not a finite number"),
        (q.RESISTANCE, "-.inf", "-.inf is not a finite number"),
        (q.RESISTANCE, float("nan"), "nan is not a finite number"),
        (q.RESISTANCE, "1:30", "1:30 has a colon and is not a number"),
        (q.RESISTANCE, "010", "010 begins with a zero; write 10"),
        (q.RESISTANCE, "00R1", "00R1 begins with a zero; write 0R1"),
        (q.DECIBELS, "080 dB", "080 dB begins with a zero; write 80 dB"),
        (q.FRACTION, "01 %", "01 % begins with a zero; write 1 %"),
        (q.RESISTANCE, "10 pF", "10 pF is a capacitance; X takes a resistance, such as 10k"),
        (q.RESISTANCE, "50 ppm", "50 ppm is a fraction; X takes a resistance"),
        (q.RESISTANCE, "80 dB", "80 dB is a ratio in dB; X takes a resistance"),
        (q.RESISTANCE, "10 mH", "10 mH is an inductance"),
        (q.CAPACITANCE, "10 kΩ", "10 kΩ is a resistance; X takes a capacitance, such as 100p"),
        (q.CAPACITANCE, "4R7", "'R7' is neither a prefix nor a unit"),
        (q.CAPACITANCE, "10M", "10M is out of range; X takes a capacitance from 1 aF to 1 F"),
        (q.FREQUENCY, "10 khz", "10 khz has its unit in the wrong case; write Hz"),
        (q.RESISTANCE, "１０k", "the character １ U+FF11 is not taken; write plain digits and signs"),
        (q.RESISTANCE, "−10", "the character − U+2212 is not taken"),
        (q.RESISTANCE, "10\u200bk", "the character U+200B is not taken"),
        (q.RESISTANCE, "1e3k", "1e3k has both an exponent and a prefix; write one of them"),
        (q.RESISTANCE, "10 kk", "'kk' is neither a prefix nor a unit"),
        (q.RESISTANCE, "1_000", "'_000' is neither a prefix nor a unit"),
        (q.RESISTANCE, "0x10", "'x10' is neither a prefix nor a unit"),
        (q.RESISTANCE, "1 000", "'000' is neither a prefix nor a unit"),
        (q.RESISTANCE, "10k\n", r"10k\n is not a quantity"),
        (q.RESISTANCE, "", "no value is given"),
        (q.RESISTANCE, "9" * 100, "100 characters long, too long for a number"),
        (q.RESISTANCE, ["10k"], "this is a list; X takes a resistance"),
        (q.RESISTANCE, True, "True is a single value; X takes a resistance"),
        (q.RESISTANCE, "0", "0 is zero; X takes a resistance from 1 µΩ to 1 PΩ, such as 10k"),
        (q.RESISTANCE, "-5", "-5 is negative; X takes a resistance from 1 µΩ to 1 PΩ"),
        (q.RESISTANCE.with_sign(), "-1e20", "-1e20 is out of range; X takes a resistance from -1 PΩ to 1 PΩ"),
        (q.RESISTANCE.with_zero(), "1n", "1n is out of range; X takes 0 or a resistance from 1 µΩ to 1 PΩ"),
        (q.GAIN, "10 G", "10 G has a prefix that is not taken here"),
        (q.RATIO_DB, "130", "130 could be dB or a ratio; write 130 dB, or 42.28 dB if the ratio is meant"),
        (q.RATIO_DB, "-3 dB", "-3 dB is out of range; X takes a ratio from 1 (0 dB) to 1e+15 (300 dB)"),
        (q.RATIO_DB, "9999 dB", "9999 dB is out of range"),
        (
            q.DECIBELS,
            "120",
            "120 has no unit; write 120 dB if dB is meant; X takes a ratio in dB, such as 120 dB",
        ),
        (q.FRACTION, "200 %", "200 % is out of range; X takes 0 or a fraction from 1e-12 to 1"),
        (q.FRACTION, "5m", "5m has a prefix that is not taken here"),
        (q.COUNT, "2.5", "2.5 is not a whole number; X takes a whole number from 1 to 1000000, such as 20"),
        (q.SIGN, "2", "2 is not among the values; X takes 1 or -1"),
    ],
)
def test_traps_are_refused_with_a_remedy(kind: Kind, text: object, message: str) -> None:
    with pytest.raises(RefusedError, match=r"takes|write") as caught:
        kind.parse(text)
    assert message in caught.value.message("X")


def test_a_spice_reading_is_never_taken() -> None:
    assert q.RESISTANCE.parse("1M") == 1e6  # SPICE reads 1e-3
    assert q.FREQUENCY.parse("1 MHz") == 1e6  # SPICE reads 1e-3


@given(st.floats(min_value=1e-6, max_value=1e15))
def test_a_rendered_resistance_reads_back_the_same(ohm: float) -> None:
    assert q.RESISTANCE.parse(render(ohm, "Ω", digits=17)) == ohm


@given(st.floats(min_value=1e-18, max_value=1.0))
def test_a_rendered_capacitance_reads_back_the_same(farad: float) -> None:
    assert q.CAPACITANCE.parse(render(farad, "F", digits=17)) == farad


@given(st.integers(1, 999), st.integers(0, 9), st.sampled_from("munpkMG"))
def test_a_value_code_equals_its_decimal_form(whole: int, part: int, prefix: str) -> None:
    kind = q.RESISTANCE if prefix in "mukMG" else q.CAPACITANCE
    assert kind.parse(f"{whole}{prefix}{part}") == kind.parse(f"{whole}.{part} {prefix}")


@given(
    st.integers(1, 999), st.integers(0, 99), st.sampled_from([("p", -12), ("n", -9), ("µ", -6), ("m", -3)])
)
def test_a_prefix_is_exactly_its_power_of_ten(whole: int, part: int, prefix: tuple[str, int]) -> None:
    # the float nearest the decimal number, not one scaled by an inexact power
    letter, exponent = prefix
    kind = q.CAPACITANCE
    assert kind.parse(f"{whole}.{part:02}{letter}") == min(1.0, float(f"{whole}.{part:02}e{exponent}"))


@given(st.text(max_size=20), st.sampled_from(KINDS))
def test_any_text_is_read_within_limits_or_refused(text: str, kind: Kind) -> None:
    refused = ""
    try:
        value = kind.parse(text)
    except RefusedError as refusal:
        refused = refusal.message("X")
    assert refused.isprintable()
    if not refused:
        assert math.isfinite(value)
        assert value == 0 or kind.choices or kind.least <= abs(value) <= kind.most


@given(st.from_regex(r"[+-]?[0-9]{1,3}[.]?[0-9]{0,2} ?[a-zA-Zµ%]{0,3}[0-9]{0,2}", fullmatch=True))
def test_the_schema_pattern_takes_what_the_reader_takes(text: str) -> None:
    for kind in KINDS:
        try:
            kind.parse(text)
        except RefusedError:
            continue
        assert kind.choices or re.match(kind.pattern, text.strip())


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (4700.0, "Ω", "4.7 kΩ"),
        (1e-6, "F", "1 µF"),
        (1e15, "Ω", "1 PΩ"),
        (0.0, "Ω", "0 Ω"),
        (-10.0, "Ω", "-10 Ω"),
    ],
)
def test_values_are_shown_with_prefixes(value: float, unit: str, text: str) -> None:
    assert render(value, unit) == text


def test_the_schema_of_a_kind_says_what_it_takes() -> None:
    schema = q.RESISTANCE.json_schema()
    assert schema["type"] == ["string", "number"]
    assert schema["description"] == "a resistance from 1 µΩ to 1 PΩ, such as 10k"
    assert schema["examples"] == ["10k"]
    assert q.DECIBELS.json_schema()["type"] == "string"
    assert q.SIGN.json_schema() == {"enum": [1, -1, "1", "-1"]}
