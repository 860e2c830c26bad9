"""The op-amp bench's tables: measured beside declared, on the console, in Markdown and as rows."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from rich.box import SIMPLE_HEAD
from rich.console import Console
from rich.table import Table
from rich.text import Text

from modepair.reports.bench import Bench, Comparison, bench_figures, compare_figures
from modepair.reports.markdown import escape_markdown
from modepair.reports.model_warnings import bench_warnings
from modepair.sweeps import render

__all__ = ["BenchPage", "bench_markdown", "bench_rows", "print_bench"]

DECIBELS = ("open_loop_gain", "cmrr", "supply_rejection_positive", "supply_rejection_negative")
UNITS = {"resistance": "Ω", "capacitance": "F", "bandwidth": "Hz", "corner": "Hz", "frequency": "Hz"}


@dataclass(frozen=True)
class BenchPage:
    """One op-amp's measurement as its pages tell it.

    Attributes
    ----------
    bench : Bench
        The measurement.
    declared : mapping of str to float
        What was declared, SI values under the names of op-amp parameters.
    imported : bool
        Whether the model came from a file.
    """

    bench: Bench
    declared: Mapping[str, float]
    imported: bool = False

    @property
    def warnings(self) -> list[str]:
        """What must stand at the top."""
        return bench_warnings(self.bench, self.declared)

    @property
    def comparisons(self) -> list[Comparison]:
        """Every figure, measured beside declared."""
        return compare_figures(bench_figures(self.bench), self.declared)

    @property
    def notes(self) -> list[str]:
        """What the figures are not."""
        notes = []
        if not self.bench.gain_is_flat:
            lowest = render(float(self.bench.frequency_hz[0]), "Hz")
            notes.append(
                f"The gain still rises at {lowest}, the lowest frequency measured; at DC it is higher."
            )
        seen = bench_figures(self.bench)
        if "unity_gain_frequency" not in seen:
            notes.append("The gain does not fall to one within the band.")
        if "cmrr" in seen and "cmrr_corner" not in seen:
            notes.append("CMRR does not fall by 3 dB up to the frequency of unity gain.")
        return notes


def _unit(parameter: str) -> str:
    words = parameter.split("_")
    return next((unit for word, unit in UNITS.items() if word in words), "")


def _text(parameter: str, value: float | None) -> str:
    if value is None:
        return "–"
    if parameter in DECIBELS:
        return f"{20 * math.log10(value):.2f} dB" if 0 < value < math.inf else "–"
    if parameter == "phase_margin":
        return f"{value:.1f}°"
    if parameter == "cmrr_sign":
        return f"{value:+.0f}"
    return render(value, _unit(parameter), 4)


def _difference(one: Comparison) -> str:
    if one.measured is None or one.declared is None or one.parameter == "cmrr_sign":
        return ""
    if one.parameter in DECIBELS:
        return "" if one.difference_db is None else f"{_signed(one.difference_db, 2)} dB"
    if one.parameter == "phase_margin":
        return f"{_signed(one.measured - one.declared, 1)}°"
    return f"{_signed(100 * (one.measured / one.declared - 1), 2)} %" if one.declared else ""


def _signed(value: float, decimals: int) -> str:
    """Write a difference with its sign; one that rounds to zero has none."""
    text = f"{value:+.{decimals}f}"
    return text[1:] if float(text) == 0 else text


def _lines(page: BenchPage) -> list[tuple[str, str, str, str]]:
    return [
        (
            one.parameter.replace("_", " ").replace("cmrr", "CMRR"),
            _text(one.parameter, one.measured),
            _text(one.parameter, one.declared),
            _difference(one),
        )
        for one in page.comparisons
    ]


def print_bench(console: Console, page: BenchPage) -> None:
    """Print an op-amp's measurement: warnings first, then the table.

    Parameters
    ----------
    console : rich.console.Console
        Where to print.
    page : BenchPage
        The measurement.
    """
    kind = "imported model" if page.imported else "macromodel"
    console.print(f"{page.bench.name} ({kind})", style="bold", markup=False)
    for warning in page.warnings:
        console.print(f"WARNING {warning}", style="red", markup=False)
    table = Table(box=SIMPLE_HEAD, show_edge=False, pad_edge=False, header_style="bold")
    table.add_column("")
    for header in ("measured", "declared", "difference"):
        table.add_column(header, justify="right", no_wrap=True)
    for line in _lines(page):
        table.add_row(*(Text(cell) for cell in line))
    console.print(table)
    for note in page.notes:
        console.print(note, markup=False)


def bench_markdown(pages: Sequence[BenchPage], plot: str, provenance: Mapping[str, str]) -> str:
    """Write the page of a bench's folder.

    Parameters
    ----------
    pages : sequence of BenchPage
        The measurements.
    plot : str
        File name of the plot.
    provenance : mapping of str to str
        What makes it repeatable.

    Returns
    -------
    str
        Markdown.
    """
    lines = ["# Op-amp bench", ""]
    lines += [f"**Warning:** {escape_markdown(text)}\n" for page in pages for text in page.warnings]
    lines += [f"![Gain, CMRR, phase and output impedance over frequency]({plot})", ""]
    for page in pages:
        kind = "imported model" if page.imported else "macromodel"
        lines += [f"## {escape_markdown(page.bench.name)}, {kind}", ""]
        lines += ["| | measured | declared | difference |", "| :--- | ---: | ---: | ---: |"]
        lines += [f"| {' | '.join(escape_markdown(cell) for cell in line)} |" for line in _lines(page)]
        lines += ["", *(f"{escape_markdown(note)}\n" for note in page.notes)]
    lines += ["## Provenance", "", "| | |", "| --- | --- |"]
    lines += [f"| {escape_markdown(name)} | {escape_markdown(text)} |" for name, text in provenance.items()]
    return "\n".join(lines) + "\n"


def bench_rows(pages: Sequence[BenchPage]) -> list[dict[str, str | float | None]]:
    """Give the measurements as rows, for a script.

    Parameters
    ----------
    pages : sequence of BenchPage
        The measurements.

    Returns
    -------
    list of dict
        `opamp`, `figure`, `unit`, `measured`, `declared`: SI values, ratios plain, the phase margin in degrees.
    """
    return [
        {
            "opamp": page.bench.name,
            "figure": one.parameter,
            "unit": "deg" if one.parameter == "phase_margin" else _unit(one.parameter).replace("Ω", "ohm"),
            "measured": one.measured,
            "declared": one.declared,
        }
        for page in pages
        for one in page.comparisons
    ]
