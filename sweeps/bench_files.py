"""CSV files from the bench: named columns of numbers, with the place of each field for messages."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from modepair.sweeps.faults import Fault, SpecError, shown
from modepair.sweeps.words import listed, suggestion

LARGEST_BENCH_FILE = 10_000_000
"""Bytes that a CSV file may have."""

MOST_ROWS = 20_000
"""Rows of numbers that a CSV file may have."""

PREAMBLE = 200
"""Lines among which the header is looked for; instruments write their settings before it."""

SEPARATORS = (",", ";", "\t")
"""What may stand between fields."""

_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")


@dataclass(frozen=True, eq=False)
class BenchFile:
    """The columns of a CSV file that were asked for.

    Parameters
    ----------
    file
        The file's name.
    values
        Numbers by column, each of shape (m,).
    line
        Line of each row, shape (m,).
    start
        Character at which each row's field starts, by column, each of shape (m,).
    """

    file: str
    values: Mapping[str, NDArray[np.float64]]
    line: NDArray[np.int64]
    start: Mapping[str, NDArray[np.int64]]

    def fault(self, row: int, column: str, message: str) -> Fault:
        """Return a fault at a field of a row, counted from 0."""
        value = f"{self.values[column][row]:g}"
        place = int(self.start[column][row])
        return Fault(self.file, int(self.line[row]), place, column, f"{value}: {message}")


def read_bench_file(path: Path, columns: Sequence[str]) -> BenchFile:
    """Read columns of a CSV file.

    The header is the first line that holds every column's name. Commas, semicolons or tabs part the fields,
    whichever make it so. Empty lines, and lines that start with #, are passed over. Numbers have decimal
    points.

    Parameters
    ----------
    path
        The file, UTF-8.
    columns
        Names of the columns, as the header writes them, without blanks around.

    Returns
    -------
    BenchFile
        With at least one row.

    Raises
    ------
    SpecError
        With every fault of the file; its line is 0 where the file itself cannot be read.
    """
    file = str(path)
    lines = _lines(path, file)
    found = _find_header(lines, columns)
    if isinstance(found, str):
        first = next((number for number, line in lines), 1)
        raise SpecError([Fault(file, first, 1, "", found)])
    place, separator, index = found
    faults: list[Fault] = []
    values: dict[str, list[float]] = {column: [] for column in columns}
    starts: dict[str, list[int]] = {column: [] for column in columns}
    numbers: list[int] = []
    for number, line in lines[place + 1 :]:
        if len(numbers) >= MOST_ROWS:
            faults.append(Fault(file, number, 1, "", f"more than {MOST_ROWS:,} rows; thin them out"))
            break
        fields = _fields(line, separator)
        row: list[tuple[str, float, int]] = []
        for column in columns:
            if index[column] >= len(fields):
                message = f"the row has {len(fields)} fields; this column is field {index[column] + 1}"
                faults.append(Fault(file, number, len(line) + 1, column, message))
                continue
            start, text = fields[index[column]]
            problem = _complaint(text)
            if problem:
                faults.append(Fault(file, number, start, column, problem))
            else:
                row.append((column, float(text), start))
        if len(row) < len(columns):
            continue
        numbers.append(number)
        for column, value, start in row:
            values[column].append(value)
            starts[column].append(start)
    if not numbers and not faults:
        faults.append(Fault(file, lines[place][0], 1, "", "no rows of numbers follow this header"))
    if faults:
        raise SpecError(faults)
    return BenchFile(
        file,
        {column: np.array(items) for column, items in values.items()},
        np.array(numbers, dtype=np.int64),
        {column: np.array(items, dtype=np.int64) for column, items in starts.items()},
    )


def _lines(path: Path, file: str) -> list[tuple[int, str]]:
    """Return the lines that hold something, with their numbers."""
    problem = ""
    data = b""
    try:
        if not path.exists():
            problem = "no such file"
        elif not path.is_file():
            problem = "this is not a regular file; a CSV file is needed"
        else:
            with path.open("rb") as stream:
                data = stream.read(LARGEST_BENCH_FILE + 1)
    except OSError as error:
        problem = f"the file cannot be read: {(error.strerror or 'unknown reason').lower()}"
    except ValueError:
        problem = "this is not a file name"
    if len(data) > LARGEST_BENCH_FILE:
        problem = f"the file is larger than {LARGEST_BENCH_FILE:,} bytes, the most allowed"
    if problem:
        raise SpecError([Fault(file, 0, 0, "", problem)])
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        number = data[: error.start].count(b"\n") + 1
        column = error.start - (data.rfind(b"\n", 0, error.start) + 1) + 1
        message = f"byte 0x{data[error.start]:02x} is not UTF-8; save the file as UTF-8"
        raise SpecError([Fault(file, number, column, "", message)]) from error
    numbered = enumerate(re.split("\r\n|\n|\r", text), start=1)
    return [(number, line) for number, line in numbered if line.strip() and not line.startswith("#")]


def _find_header(
    lines: Sequence[tuple[int, str]], columns: Sequence[str]
) -> tuple[int, str, dict[str, int]] | str:
    """Return the header's place among the lines, its separator and each column's index; or what is wrong."""
    best: list[str] = []
    for place, (_, line) in enumerate(lines[:PREAMBLE]):
        for separator in SEPARATORS:
            names = [text for _, text in _fields(line, separator)]
            doubled = [column for column in columns if names.count(column) > 1]
            if all(column in names for column in columns):
                if doubled:
                    return f"the column {shown(doubled[0])} is there twice; rename one of them"
                return place, separator, {column: names.index(column) for column in columns}
            hits = sum(column in names for column in columns)
            if hits > sum(column in best for column in columns) or (not best and len(names) > 1):
                best = names
    lacking = next((column for column in columns if column not in best), columns[0])
    near = suggestion(lacking, best) or (f"; its columns are {shown(listed(best), 300)}" if best else "")
    return f"no line is a header with the column {shown(lacking)}{near}"


def _fields(line: str, separator: str) -> list[tuple[int, str]]:
    """Part a line into its fields, each with the character at which its text starts, from 1."""
    fields: list[tuple[int, str]] = []
    at = 0
    while True:
        quoted = re.compile(r'[ ]*"((?:[^"]|"")*)"[ ]*').match(line, at)
        if quoted and (quoted.end() == len(line) or line[quoted.end()] == separator):
            text, start, at = quoted[1].replace('""', '"').strip(), quoted.start(1), quoted.end()
        else:
            end = line.find(separator, at)
            end = len(line) if end < 0 else end
            raw = line[at:end]
            text, start, at = raw.strip(), at + len(raw) - len(raw.lstrip()), end
        fields.append((start + 1, text))
        if at >= len(line):
            return fields
        at += 1


def _complaint(text: str) -> str:
    """Say why a field is no number, or nothing where it is one."""
    if not text:
        return "no value is given; a number is needed"
    if _NUMBER.fullmatch(text):
        return "" if math.isfinite(float(text)) else f"{shown(text)} is not a finite number"
    if "," in text:
        return f"{shown(text)} has a comma; write a decimal point, and nothing between thousands"
    return f"{shown(text)} is not a number; write plain numbers, the unit goes into the spec"
