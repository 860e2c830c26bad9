"""Axis texts: as the spec wrote them, short, and only where they vary."""

import pandas as pd
import pytest

from modepair.reports.axis_labels import axis_columns, case_texts, short_names, varying
from tests.synthetic_cases import Axis

CASES = pd.DataFrame(
    {
        "case": [1, 2, 3],
        "stage.opamp": ["a", "b", "a"],
        "source.imbalance": [4.7e3, 1e-9, 4.7e3 * (1 + 2e-16)],
    }
)
AXES = (Axis("stage.opamp", ("a", "b"), ("a", "b")), Axis("source.imbalance", (4.7e3, 1e-9), ("4k7", "1 n")))


def test_texts_are_as_written():
    assert axis_columns(CASES, AXES) == {
        "stage.opamp": ["a", "b", "a"],
        "source.imbalance": ["4k7", "1 n", "4k7"],
    }


def test_a_number_survives_the_csv_file(tmp_path):
    written = 1 / 3
    axis = Axis("stage.gain", (written,), ("a third",))
    pd.DataFrame({"case": [1], "stage.gain": [written]}).to_csv(tmp_path / "cases.csv", index=False)
    assert axis_columns(pd.read_csv(tmp_path / "cases.csv"), [axis]) == {"stage.gain": ["a third"]}


def test_unknown_values_read_as_numbers():
    assert axis_columns(CASES, [Axis("source.imbalance", (0.0,), ("0",))])["source.imbalance"] == [
        "4700", "1e-09", "4700",
    ]  # fmt: skip


def test_zero_is_only_zero():
    cases = pd.DataFrame({"case": [1, 2], "x": [0.0, 1e-12]})
    assert axis_columns(cases, [Axis("x", (0.0, 1e-12), ("0", "1p"))])["x"] == ["0", "1p"]


def test_missing_column():
    with pytest.raises(ValueError, match=r"must have a column for the axis stage\.gain; it has case, "):
        axis_columns(CASES, [Axis("stage.gain", (1.0,), ("1",))])


def test_varying():
    vary, fixed = varying({"a": ["1", "2"], "b": ["x", "x"]})
    assert vary == {"a": ["1", "2"]}
    assert fixed == {"b": "x"}


def test_short_names():
    assert short_names(["stage.opamp", "source.imbalance"]) == {
        "stage.opamp": "opamp",
        "source.imbalance": "imbalance",
    }
    assert short_names(["stage.opamps.A1", "opamps.A1", "A1"]) == {
        "stage.opamps.A1": "stage.opamps.A1",
        "opamps.A1": "opamps.A1",
        "A1": "A1",
    }
    assert short_names(["source.filter.resistance", "source.resistance"]) == {
        "source.filter.resistance": "filter.resistance",
        "source.resistance": "source.resistance",
    }


def test_case_texts():
    columns = {"stage.opamp": ["a", "b"], "source.cable_capacitance": ["3n", "1n"], "stage.gain": ["1", "1"]}
    assert case_texts(columns) == ["a, cable capacitance 3n", "b, cable capacitance 1n"]
    assert case_texts({"stage.gain": ["1", "1"]}) == ["", ""]
    assert case_texts({}) == []
