"""Bench data: what a spec says about measurements of its circuit, laid over the simulated curves."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from modepair.sweeps.axes import Axis
from modepair.sweeps.bench_files import BenchFile, read_bench_file
from modepair.sweeps.document import Document, Location
from modepair.sweeps.faults import LONGEST_PATH, Fault, RefusedError, SpecError, form_of, shown
from modepair.sweeps.leaves import Leaf, Reads
from modepair.sweeps.quantities import DECIBELS
from modepair.sweeps.schema import FILE_NAME, Section
from modepair.sweeps.words import Choice, Text, listed, suggestion

FREQUENCY_UNITS = {"Hz": 1.0, "kHz": 1e3, "MHz": 1e6}
"""Units of a frequency column, and what they make of a number."""

GAIN_UNITS = ("dB", "V/V")
"""Units of a gain's magnitude."""

_NAME = Text(80)
_COLUMN = Text(200)
_GAIN = "{column: Acm, unit: dB} or {real: Acm_re, imaginary: Acm_im}"


class FrequencyColumn(Section):
    """The column that holds frequencies: its name, and its unit (Hz where absent)."""

    column: Annotated[str, Reads(_COLUMN)]
    unit: Annotated[str, Reads(Choice("a unit of frequency", tuple(FREQUENCY_UNITS)))] = "Hz"


class CmrrColumn(Section):
    """The column that holds CMRR in dB."""

    column: Annotated[str, Reads(_COLUMN)]


class GainColumns(Section):
    """The column or the two columns that hold a gain.

    Parameters
    ----------
    column, unit
        A magnitude, and whether it is in dB or in V/V.
    real, imaginary
        The two parts of a complex gain, V/V; instead of `column`.
    """

    column: Annotated[str, Reads(_COLUMN)] | None = None
    unit: Annotated[str, Reads(Choice("a unit of gain", GAIN_UNITS))] | None = None
    real: Annotated[str, Reads(_COLUMN)] | None = None
    imaginary: Annotated[str, Reads(_COLUMN)] | None = None


class ReadsCase:
    """What reads the axis values of a measured case; the axes themselves are checked afterwards."""

    takes = "axis values, such as {stage.opamp: quiet-bipolar, source.imbalance: 10}"

    def parse(self, written: object) -> dict[str, str]:
        """Return the values as written, by axis; raise `RefusedError` where it is no mapping of texts."""
        if not isinstance(written, Mapping):
            raise RefusedError(form_of(written), self.takes)
        for path, value in written.items():
            if not isinstance(value, str):
                raise RefusedError(f"{shown(str(path))}: {form_of(value)}", self.takes)
        return {str(path): str(value) for path, value in written.items()}

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the mapping."""
        return {"type": "object", "additionalProperties": {"type": ["string", "number"]}}


class Measured(Section):
    """A measurement: a CSV file of the lab, and what its columns hold.

    Parameters
    ----------
    file
        The CSV file, relative to the spec's folder.
    name
        What the curve is called; the file's name where absent.
    frequency
        The column of frequencies.
    cmrr
        The column of CMRR; or else both gains.
    differential_gain, common_gain
        The columns of the gains.
    residual
        The instrument's own CMRR, a ratio (written in dB): what it reads from a perfect circuit.
    residual_column
        A column with that, in dB, where it depends on frequency; instead of `residual`.
    case
        The case that was measured, by its axes; axes left out may have any value.
    """

    file: Annotated[str, Reads(FILE_NAME)]
    name: Annotated[str, Reads(_NAME)] = ""
    frequency: FrequencyColumn
    cmrr: CmrrColumn | None = None
    differential_gain: GainColumns | None = None
    common_gain: GainColumns | None = None
    residual: Annotated[float, Reads(DECIBELS)] | None = None
    residual_column: Annotated[str, Reads(_COLUMN)] | None = None
    case: Annotated[dict[str, str], Reads(ReadsCase())] = Field(default_factory=dict)

    @property
    def title(self) -> str:
        """What the measurement is called."""
        return self.name or Path(self.file).name

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the columns that are read."""
        gains = [gain for gain in (self.differential_gain, self.common_gain) if gain]
        names = [self.frequency.column, self.cmrr.column if self.cmrr else None]
        names += [name for gain in gains for name in (gain.column, gain.real, gain.imaginary)]
        return tuple(dict.fromkeys(name for name in (*names, self.residual_column) if name))


@dataclass(frozen=True, eq=False)
class Measurement:
    """A measured CMRR over frequency.

    Parameters
    ----------
    name
        What it is called.
    frequency_hz
        Frequencies, Hz, ascending, shape (m,).
    cmrr_db
        CMRR, dB, shape (m,).
    residual_db
        The instrument's own CMRR at each, dB, shape (m,); infinite where it is not given.
    settings
        Which cases it belongs to: SI value or name, by axis.
    """

    name: str
    frequency_hz: NDArray[np.float64]
    cmrr_db: NDArray[np.float64]
    residual_db: NDArray[np.float64]
    settings: Mapping[str, float | str]


def measured_faults(document: Document, axes: Sequence[Axis], known: Mapping[str, Leaf]) -> Iterator[Fault]:
    """Yield what the measurements of a spec do not agree on with each other or with its axes.

    Parameters
    ----------
    document
        The spec as read.
    axes
        Its axes, those that can be read.
    known
        What each setting takes, from `modepair.sweeps.axes.settings`.

    Yields
    ------
    Fault
        In no particular order.
    """
    node = document.node(("measured",))
    titles: dict[str, int] = {}
    for index, item in enumerate((node.items or []) if node else []):
        if item.entries is None:
            continue
        here: Location = ("measured", index)
        for key, remedy in (
            ("file", "it takes the name of a CSV file"),
            ("frequency", "it takes a column, such as {column: f, unit: kHz}"),
        ):
            if key not in item.entries:
                yield document.fault(here, f"{key} is missing; {remedy}", at_key=True)
        for key in ("frequency", "cmrr"):
            entry = item.entries.get(key)
            if entry is not None and entry.entries is not None and "column" not in entry.entries:
                yield document.fault((*here, key), "column is missing; give the column's name", at_key=True)
        written = {key: entry.text or "" for key, entry in item.entries.items()}
        title = written.get("name", "").strip() or Path(written.get("file", "")).name
        if title and title in titles:
            message = f"{shown(title)} is the name of measured[{titles[title]}] too; give another name"
            yield document.fault(here, message, at_key=True)
        titles.setdefault(title, index)
        yield from _quantity_faults(document, here, set(item.entries))
        for path in (document.node((*here, "case")) or item).entries or {} if "case" in item.entries else ():
            yield from _case_faults(document, (*here, "case", path), path, axes, known)


def _quantity_faults(document: Document, here: Location, keys: set[str]) -> Iterator[Fault]:
    gains = {"differential_gain", "common_gain"} & keys
    if "cmrr" in keys and gains:
        yield document.fault(
            (*here, "cmrr"), "cmrr and gains are both given; leave one of them out", at_key=True
        )
    elif "cmrr" not in keys and len(gains) < 2:
        lacking = (
            "cmrr is missing"
            if not gains
            else f"{({'differential_gain', 'common_gain'} - gains).pop()} is missing"
        )
        message = f"{lacking}; give cmrr, such as {{column: CMRR}}, or both differential_gain and common_gain"
        yield document.fault(here, message, at_key=True)
    if {"residual", "residual_column"} <= keys:
        message = "residual and residual_column are both given; leave one of them out"
        yield document.fault((*here, "residual_column"), message, at_key=True)
    for key in sorted(gains):
        node = document.node((*here, key))
        given = set(node.entries) if node and node.entries is not None else None
        if given is None:
            continue
        if not (given & {"column", "real", "imaginary"}) or (
            "column" in given and given & {"real", "imaginary"}
        ):
            yield document.fault((*here, key), f"a gain takes one form: {_GAIN}", at_key=True)
        elif "column" in given and "unit" not in given:
            yield document.fault((*here, key), "unit is missing; it takes dB or V/V", at_key=True)
        elif "column" not in given and not {"real", "imaginary"} <= given:
            yield document.fault(
                (*here, key), "real and imaginary go together; give both columns", at_key=True
            )
        elif "column" not in given and "unit" in given:
            yield document.fault((*here, key, "unit"), "complex gains are in V/V; remove unit", at_key=True)


def _case_faults(
    document: Document, location: Location, path: str, axes: Sequence[Axis], known: Mapping[str, Leaf]
) -> Iterator[Fault]:
    axis = next((axis for axis in axes if axis.path == path), None)
    if axis is None:
        paths = [axis.path for axis in axes]
        near = suggestion(path, paths) or (
            f"; the axes are {listed(paths)}" if paths else "; the spec has no vary"
        )
        yield document.fault(location, f"{shown(path)} is not an axis of this sweep{near}", at_key=True)
        return
    node = document.node(location)
    written = node.text if node else None
    if written is None:
        return
    try:
        value = known[axis.path].parse(written)
    except (KeyError, RefusedError):
        value = None
    if value not in axis.values:
        message = f"{shown(written)} is not on this axis; its values are {listed(axis.labels)}"
        yield document.fault(location, message)


def read_measurements(
    document: Document, entries: Sequence[Measured], axes: Sequence[Axis], known: Mapping[str, Leaf]
) -> tuple[Measurement, ...]:
    """Read the CSV files of a spec's measurements.

    Parameters
    ----------
    document
        The spec, by which files are found.
    entries
        Its measurements.
    axes, known
        As for `measured_faults`, which has found nothing.

    Returns
    -------
    tuple of Measurement
        In the order of the spec.

    Raises
    ------
    SpecError
        With every fault of the files: at the spec's key where a file cannot be read, else at the CSV's own
        line and column.
    """
    found: list[Measurement] = []
    faults: list[Fault] = []
    for index, entry in enumerate(entries):
        path = Path(document.file).parent / entry.file
        try:
            bench = read_bench_file(path, entry.columns)
            found.append(_measurement(bench, entry, axes, known))
        except SpecError as error:
            for fault in error.faults:
                if fault.line:
                    faults.append(fault)
                    continue
                looked = shown(str(path), LONGEST_PATH)
                message = (
                    f"{shown(entry.file)} cannot be used: {fault.message} "
                    f"(looked for {looked}; paths start at the spec's folder)"
                )
                faults.append(document.fault(("measured", index, "file"), message))
    if faults:
        raise SpecError(faults)
    return tuple(found)


def _measurement(
    bench: BenchFile, entry: Measured, axes: Sequence[Axis], known: Mapping[str, Leaf]
) -> Measurement:
    """Work a measurement out of its columns."""
    frequency_hz = bench.values[entry.frequency.column] * FREQUENCY_UNITS[entry.frequency.unit]
    faults = [
        bench.fault(row, entry.frequency.column, "a frequency must be above 0")
        for row in np.flatnonzero(~(frequency_hz > 0)).tolist()
    ]
    order = np.argsort(frequency_hz, kind="stable")
    same = np.flatnonzero(np.diff(frequency_hz[order]) == 0)
    for row in sorted(order[same + 1].tolist()):
        first = int(np.flatnonzero(frequency_hz == frequency_hz[row])[0])
        message = f"this frequency is in line {bench.line[first]} already; keep one of the rows"
        faults.append(bench.fault(row, entry.frequency.column, message))
    if entry.cmrr:
        cmrr_db = bench.values[entry.cmrr.column]
        faults += _beyond(bench, entry.cmrr.column, cmrr_db)
    elif entry.differential_gain and entry.common_gain:
        differential_db, its_faults = _gain_db(bench, entry.differential_gain)
        common_db, other_faults = _gain_db(bench, entry.common_gain)
        faults += its_faults + other_faults
        cmrr_db = differential_db - common_db
    else:
        raise RefusedError("neither CMRR nor both gains are given")
    residual_db = np.full(frequency_hz.shape, math.inf)
    if entry.residual is not None:
        residual_db = np.full(frequency_hz.shape, 20 * math.log10(entry.residual))
    elif entry.residual_column:
        residual_db = bench.values[entry.residual_column]
        faults += _beyond(bench, entry.residual_column, residual_db)
    if faults:
        raise SpecError(sorted(faults, key=lambda fault: (fault.line, fault.column)))
    by_path = {axis.path: axis for axis in axes}
    settings = {path: known[path].parse(text) for path, text in entry.case.items() if path in by_path}
    return Measurement(entry.title, frequency_hz[order], cmrr_db[order], residual_db[order], settings)


def _beyond(bench: BenchFile, column: str, level_db: NDArray[np.float64]) -> list[Fault]:
    """Return a fault for each level that no laboratory reads."""
    return [
        bench.fault(row, column, "a CMRR must lie between -200 and 400 dB")
        for row in np.flatnonzero(~((level_db >= -200) & (level_db <= 400))).tolist()
    ]


def _gain_db(bench: BenchFile, gain: GainColumns) -> tuple[NDArray[np.float64], list[Fault]]:
    """Return a gain's magnitude in dB, and faults where it is zero or beyond reason."""
    if gain.column and gain.unit == "dB":
        level_db = bench.values[gain.column]
        rows = np.flatnonzero(np.abs(level_db) > 400).tolist()
        return level_db, [
            bench.fault(row, gain.column, "a gain must lie between -400 and 400 dB") for row in rows
        ]
    column = gain.column or gain.real or ""
    magnitude = np.abs(bench.values[column])
    if gain.imaginary:
        magnitude = np.hypot(magnitude, bench.values[gain.imaginary])
    elif gain.column:
        faults = [
            bench.fault(row, column, "a magnitude must be above 0")
            for row in np.flatnonzero(~(bench.values[column] > 0)).tolist()
        ]
        if faults:
            return np.zeros_like(magnitude), faults
    zero = np.flatnonzero(~(magnitude > 0)).tolist()
    faults = [bench.fault(row, column, "a gain of 0 has no CMRR") for row in zero]
    return 20 * np.log10(np.where(magnitude > 0, magnitude, 1.0)), faults
