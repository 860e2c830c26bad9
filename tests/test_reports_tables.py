"""The console table: content, widths, bounds, failed cases."""

import io
import re

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from modepair.reports.tables import (
    MOST_ROWS,
    PIPED_WIDTH,
    ROWS_OF_MANY,
    console_for,
    figure_columns,
    print_cases,
)
from tests.synthetic_cases import BAND_HZ, SPOTS_HZ, Made, fail, one_pole_cases


def printed(
    made: Made, cases: pd.DataFrame | None = None, width: int | None = None, where: str = "cases.csv"
) -> str:
    out = io.StringIO()
    console = console_for(out) if width is None else Console(file=out, width=width, highlight=False)
    print_cases(console, made.cases if cases is None else cases, made.axes, SPOTS_HZ, BAND_HZ, where)
    return out.getvalue()


def cells(text: str, number: int) -> list[str]:
    """Cells of the rows of a case, over all parts of a split table."""
    rows = [line for line in text.splitlines() if re.match(rf"\s*{number}\s", line)]
    return [cell for row in rows for cell in re.split(r"\s{2,}", row.strip())[1:]]


def test_row_of_a_case():
    made = one_pole_cases(2, 2)
    text = printed(made)
    row = made.cases.iloc[2]
    assert cells(text, 3) == [
        "low-bias-jfet", "10", "100.0", "30.0 kHz",
        *(f"{row[f'cmrr_db_at_{spot}hz']:.1f}" for spot in (50, 60, 1000, 10000)),
        f"{row['cmrr_corner_hz']:.0f} Hz", f"{row['cmrr_db_lowest']:.1f}",
    ]  # fmt: skip
    head = text.split("─")[0]
    for word in (
        "case",
        "opamp",
        "imbalance",
        "V/V",
        "50 Hz",
        "60 Hz",
        "1 kHz",
        "10 kHz",
        "dB",
        "corner",
        "at 1 MHz",
    ):
        assert word in head


@pytest.mark.parametrize("width", [60, 80, 100, 160])
def test_no_number_is_cut_at_any_width(width):
    made = one_pole_cases(3, 4, perfect=(5,))
    text = printed(made, width=width)
    assert "…" not in text
    assert max(map(len, text.splitlines())) <= width
    rest = figure_columns(made.cases, SPOTS_HZ, BAND_HZ)
    found = [cell for cell in cells(text, 5) if cell not in ("low-bias-jfet", "10")]
    assert found == [column.cells[4] for column in rest]


def test_fits_a_hundred_columns_in_one_part():
    text = printed(one_pole_cases(3, 4), width=100)
    assert len(re.findall(r"^─+$", text, re.MULTILINE)) == 1


def test_piped_text_has_no_escape_codes_and_one_part():
    text = printed(one_pole_cases(4, 4))
    assert "\x1b" not in text
    assert len(re.findall(r"^─+$", text, re.MULTILINE)) == 1
    assert max(map(len, text.splitlines())) <= PIPED_WIDTH


def test_colours_only_on_a_terminal(monkeypatch):
    class Terminal(io.StringIO):
        def isatty(self) -> bool:
            return True

    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    made, out = one_pole_cases(1, 2), Terminal()
    print_cases(console_for(out), made.cases, made.axes, SPOTS_HZ, BAND_HZ)
    assert "\x1b[1m" in out.getvalue()


def test_numbers_are_right_aligned():
    lines = printed(one_pole_cases(2, 3)).splitlines()
    rows = [line for line in lines if re.match(r"\s*\d+\s", line)]
    assert len({len(row.rstrip()) for row in rows}) == 1
    assert len({row.index(".0  ") for row in rows}) == 1


def test_floor_reads_as_a_bound():
    made = one_pole_cases(2, 2, perfect=(4,))
    text = printed(made)
    assert cells(text, 4)[4:] == ["> 240", "> 240", "> 240", "> 239", "unknown", "> 209"]
    assert "CMRR marked > lies above the numerical floor" in text
    assert "numerical floor" not in printed(one_pole_cases(2, 2))


def test_bandwidth_and_corner_beyond_the_band():
    made = one_pole_cases(1, 2)
    cases = made.cases.assign(bandwidth_hz=np.nan, cmrr_corner_hz=np.nan)
    assert cells(printed(made, cases), 1)[2] == "> 1 MHz"
    assert cells(printed(made, cases), 1)[-2] == "> 1 MHz"
    bound = cases.assign(above_floor="corner", cmrr_corner_hz=2e3)
    assert cells(printed(made, bound), 1)[-2] == "< 2.00 kHz"


def test_lowest_places_get_their_column_where_they_differ():
    made = one_pole_cases(1, 2)
    cases = made.cases.copy()
    cases.loc[0, "cmrr_lowest_at_hz"] = 50.0
    text = printed(made, cases)
    assert cells(text, 1)[-1] == "50 Hz"
    assert cells(text, 2)[-1] == "1 MHz"


def test_axes_that_do_not_vary_are_named_once():
    made = one_pole_cases(1, 3)
    text = printed(made)
    assert "In every case: stage.opamp quiet-bipolar." in text
    assert text.count("quiet-bipolar") == 1


def test_failed_cases_keep_their_row_and_reason():
    made = one_pole_cases(2, 2)
    text = printed(made, fail(made, {2: "matrix is singular [check RB]"}))
    assert cells(text, 2) == ["quiet-bipolar", "20", "failed", *["–"] * 7]
    assert "Failed: 1 of 4 cases." in text
    assert "case 2 (stage.opamp quiet-bipolar, source.imbalance 20): matrix is singular [check RB]" in text


@pytest.mark.parametrize("count", [2, 20])
def test_nothing_but_failures(count):
    made = one_pole_cases(4, count)
    cases = made.cases[["case", "stage.opamp", "source.imbalance"]].assign(state="failed: no solution")
    text = printed(made, cases)
    assert f"Failed: {4 * count} of {4 * count} cases." in text
    assert ("and 60 more, in cases.csv" in text) == (count == 20)


def test_many_cases_show_the_lowest():
    made = one_pole_cases(4, 16, perfect=(1,))
    assert len(made.cases) > MOST_ROWS
    text = printed(made, where="runs/silo/cases.csv")
    numbers = [int(n) for n in re.findall(r"^ *(\d+)  ", text, re.MULTILINE)]
    lowest = made.cases.sort_values("cmrr_db_lowest", kind="stable")["case"].tolist()[:ROWS_OF_MANY]
    assert numbers == lowest
    assert "Shown: the 20 cases with the lowest CMRR, of 64; the other 44 are in runs/silo/cases.csv." in text


def test_cases_read_back_from_csv_print_alike(tmp_path):
    made = one_pole_cases(2, 2, perfect=(3,))
    cases = fail(made, {2: "no solution"})
    cases.to_csv(tmp_path / "cases.csv", index=False)
    assert printed(made, pd.read_csv(tmp_path / "cases.csv")) == printed(made, cases)
