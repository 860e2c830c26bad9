"""Measurements in a spec: what is read from the lab's files, and every fault at its place."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from modepair.sweeps import SpecError, load_spec
from modepair.sweeps.measured import Measurement

SPEC = """\
stage:
  topology: difference
  parts: {R1: 10k, R2: 100k, R3: 10k, R4: 100k}
  opamp: a
frequency: {start: 1, stop: 1M}
vary:
  stage.opamp: [a, b]
  source.imbalance: [0, 10]
opamps:
  a: {open_loop_gain: 130 dB, gain_bandwidth: 8 MHz}
  b: {open_loop_gain: 100 dB, gain_bandwidth: 1 MHz}
measured:
"""
CMRR = "  - {file: board.csv, frequency: {column: f}, cmrr: {column: CMRR}}\n"


def read(folder: Path, measured: str, csv: str) -> tuple[Measurement, ...]:
    (folder / "spec.yaml").write_text(SPEC + measured, encoding="utf-8")
    (folder / "board.csv").write_text(csv, encoding="utf-8")
    return load_spec(folder / "spec.yaml").measurements


def faults(folder: Path, measured: str, csv: str = "f,CMRR\n50,90\n") -> list[str]:
    with pytest.raises(SpecError, match="measured|board") as caught:
        read(folder, measured, csv)
    return [str(fault).replace(f"{folder}/", "") for fault in caught.value.faults]


def test_cmrr_in_db_with_units_residual_and_case(tmp_path: Path) -> None:
    (one,) = read(
        tmp_path,
        "  - name: board 3\n"
        "    file: board.csv\n"
        "    frequency: {column: Freq, unit: kHz}\n"
        "    cmrr: {column: 'CMRR, dB'}\n"
        "    residual: 118 dB\n"
        "    case: {stage.opamp: b, source.imbalance: 10.0}\n",
        '# analyser\nSerial,77\nn,Freq,"CMRR, dB"\n1,10,80\n\n2,0.05,"100.5"\n',
    )
    assert one.name == "board 3"
    np.testing.assert_array_equal(one.frequency_hz, [50.0, 10e3])  # ascending
    np.testing.assert_array_equal(one.cmrr_db, [100.5, 80.0])
    np.testing.assert_allclose(one.residual_db, 118.0, rtol=1e-12)  # through a ratio and back
    assert one.settings == {"stage.opamp": "b", "source.imbalance": 10.0}


@pytest.mark.parametrize(
    ("gains", "csv"),
    [
        (
            "differential_gain: {column: d, unit: dB}, common_gain: {column: c, unit: dB}",
            "f,d,c\n50,40,-46\n",
        ),
        (
            "differential_gain: {column: d, unit: V/V}, common_gain: {column: c, unit: dB}",
            "f;d;c\n50;100;-46\n",
        ),
        (
            "differential_gain: {real: r, imaginary: i}, common_gain: {column: c, unit: dB}",
            "f\tr\ti\tc\n50\t60\t-80\t-46\n",
        ),
    ],
)
def test_cmrr_from_both_gains(tmp_path: Path, gains: str, csv: str) -> None:
    """40 dB, 100 V/V and 60 - 80 j V/V are one gain, so CMRR is 86 dB in every form and with every separator."""
    (one,) = read(tmp_path, f"  - {{file: board.csv, frequency: {{column: f}}, {gains}}}\n", csv)
    np.testing.assert_allclose(one.cmrr_db, 86.0, rtol=1e-12)
    assert one.name == "board.csv"
    assert np.all(np.isinf(one.residual_db))


def test_residual_per_frequency(tmp_path: Path) -> None:
    entry = "  - {file: board.csv, frequency: {column: f}, cmrr: {column: CMRR}, residual_column: r}\n"
    (one,) = read(tmp_path, entry, "f,CMRR,r\n50,90,120\n1000,80,100\n")
    np.testing.assert_array_equal(one.residual_db, [120.0, 100.0])


def test_every_bad_row_is_told_at_its_line_and_column(tmp_path: Path) -> None:
    csv = 'f,CMRR\n50,abc\n60,"10,5"\n 70, 500\n-80,90\n90\n70,91\n50,\n100,90 dB\n'
    assert faults(tmp_path, CMRR, csv) == [
        "board.csv:2:4: CMRR: abc is not a number; write plain numbers, the unit goes into the spec",
        "board.csv:3:5: CMRR: 10,5 has a comma; write a decimal point, and nothing between thousands",
        "board.csv:6:3: CMRR: the row has 1 fields; this column is field 2",
        "board.csv:8:4: CMRR: no value is given; a number is needed",
        "board.csv:9:5: CMRR: 90 dB is not a number; write plain numbers, the unit goes into the spec",
    ]
    assert faults(tmp_path, CMRR, "f,CMRR\n 70, 500\n-80,90\n90,90\n70,91\n") == [
        "board.csv:2:6: CMRR: 500: a CMRR must lie between -200 and 400 dB",
        "board.csv:3:1: f: -80: a frequency must be above 0",
        "board.csv:5:1: f: 70: this frequency is in line 2 already; keep one of the rows",
    ]


@pytest.mark.parametrize(
    ("csv", "told"),
    [
        ("", "board.csv:1:1: no line is a header with the column f"),
        (
            "freq,CMRR\n",
            "board.csv:1:1: no line is a header with the column f; its columns are freq and CMRR",
        ),
        ("f,cmmr\n", "board.csv:1:1: no line is a header with the column CMRR; did you mean cmmr?"),
        ("f,CMRR,f\n", "board.csv:1:1: the column f is there twice; rename one of them"),
        ("f,CMRR\n# none\n", "board.csv:1:1: no rows of numbers follow this header"),
        ("f,CMRR\n50,1e999\n", "board.csv:2:4: CMRR: 1e999 is not a finite number"),
    ],
)
def test_a_file_without_its_columns(tmp_path: Path, csv: str, told: str) -> None:
    assert faults(tmp_path, CMRR, csv) == [told]


def test_a_file_that_is_not_there_is_told_at_the_spec_key(tmp_path: Path) -> None:
    (told,) = faults(tmp_path, CMRR.replace("board.csv", "boardd.csv"))
    assert told.startswith(
        "spec.yaml:13:12: measured[0].file: boardd.csv cannot be used: no such file (looked for "
    )
    assert told.endswith("paths start at the spec's folder)")


def test_bytes_that_are_not_utf8_are_told_at_their_place(tmp_path: Path) -> None:
    (tmp_path / "spec.yaml").write_text(SPEC + CMRR, encoding="utf-8")
    (tmp_path / "board.csv").write_bytes(b"f,CMRR\n50,9\xb50\n")
    with pytest.raises(SpecError, match=r"board\.csv:2:5: byte 0xb5 is not UTF-8; save the file as UTF-8"):
        load_spec(tmp_path / "spec.yaml")


FREQUENCY, COLUMN, BOTH = (
    "frequency: {column: f}",
    "cmrr: {column: CMRR}",
    "both differential_gain and common_gain",
)
COMMON = "common_gain: {column: c, unit: dB}"
DISAGREEMENTS = {
    COLUMN: "frequency is missing; it takes a column, such as {column: f, unit: kHz}",
    f"frequency: {{unit: Hz}}, {COLUMN}": "column is missing; give the column's name",
    FREQUENCY: f"cmrr is missing; give cmrr, such as {{column: CMRR}}, or {BOTH}",
    f"{FREQUENCY}, {COMMON}": f"differential_gain is missing; give cmrr, such as {{column: CMRR}}, or {BOTH}",
    f"{FREQUENCY}, {COLUMN}, {COMMON}": "cmrr and gains are both given; leave one of them out",
    f"{FREQUENCY}, differential_gain: {{column: d}}, {COMMON}": "unit is missing; it takes dB or V/V",
    f"{FREQUENCY}, differential_gain: {{real: d}}, {COMMON}": "real and imaginary go together; give both columns",
    f"{FREQUENCY}, {COLUMN}, residual: 110 dB, residual_column: r": "residual and residual_column are both given",
    f"{FREQUENCY}, {COLUMN}, case: {{source.imbalence: 10}}": "is not an axis of this sweep; did you mean source.imb",
    f"{FREQUENCY}, {COLUMN}, case: {{source.imbalance: 11}}": "11 is not on this axis; its values are 0 and 10",
    f"frequency: {{column: f, unit: khz}}, {COLUMN}": "khz is not a unit of frequency; did you mean kHz?",
    f"{FREQUENCY}, {COLUMN}, residual: 110": "110 has no unit; write 110 dB if dB is meant",
}


@pytest.mark.parametrize(("entry", "told"), DISAGREEMENTS.items())
def test_keys_that_do_not_agree(tmp_path: Path, entry: str, told: str) -> None:
    found = faults(tmp_path, f"  - {{file: board.csv, {entry}}}\n")
    assert len(found) == 1
    assert found[0].startswith("spec.yaml:13:")
    assert told in found[0]


def test_a_measurement_without_a_file(tmp_path: Path) -> None:
    (told,) = faults(tmp_path, f"  - {{{FREQUENCY}, {COLUMN}}}\n")
    assert told == "spec.yaml:13:5: measured[0]: file is missing; it takes the name of a CSV file"


def test_two_measurements_cannot_share_a_name(tmp_path: Path) -> None:
    (told,) = faults(tmp_path, CMRR + CMRR)
    assert told == "spec.yaml:14:5: measured[1]: board.csv is the name of measured[0] too; give another name"
