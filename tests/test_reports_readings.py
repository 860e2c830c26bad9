"""How figures read."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.reports.readings import decibel_text, frequency_text, gain_text


@pytest.mark.parametrize(
    ("value", "text"),
    [(1.0, "1 Hz"), (50.0, "50 Hz"), (1e3, "1 kHz"), (12345.0, "12.3 kHz"), (1e6, "1 MHz"), (0.1, "100 mHz"),
     (999.96, "1 kHz"), (2.5e9, "2.5 GHz")],
)  # fmt: skip
def test_frequency(value, text):
    assert frequency_text(value) == text


def test_measured_frequency_keeps_its_zeros():
    assert [frequency_text(f, pad=True) for f in (9.9e3, 1e6, 16.0)] == ["9.90 kHz", "1.00 MHz", "16.0 Hz"]


@pytest.mark.parametrize(
    ("ratio", "text"),
    [(101.0, "101.0"), (1.0, "1.000"), (9.9996, "10.00"), (0.5, "0.5000"), (1234.5, "1234"),
     (99999.0, "100000"), (0.0, "0.000e+00"), (1e8, "1.000e+08")],
)  # fmt: skip
def test_gain(ratio, text):
    assert gain_text(ratio) == text


@given(st.floats(1e-3, 1e6))
def test_gain_keeps_four_digits(ratio):
    assert float(gain_text(ratio)) == pytest.approx(ratio, rel=5.001e-4)


def test_decibels():
    assert decibel_text(100.04) == "100.0"
    assert decibel_text(-3.06) == "-3.1"


@given(st.floats(0, 400))
def test_a_bound_is_never_rounded_up(level_db):
    text = decibel_text(level_db, at_floor=True)
    assert text.startswith("> ")
    assert level_db - 1 < int(text.removeprefix("> ")) <= level_db + 0.05 + 1e-9
