"""A bench run: from op-amp candidates to their measurements, and to a folder with page, curves and plot."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from modepair.circuits import candidates, imported_models
from modepair.circuits.bench import imported_mounting, macromodel_mounting
from modepair.reports.bench import Bench
from modepair.reports.bench_tables import BenchPage, bench_markdown, bench_rows
from modepair.runner.benching import measure_opamps
from modepair.runner.engine import locate_library
from modepair.runner.errors import SimulationError
from modepair.runner.folder import run_folder
from modepair.runner.record import versions
from modepair.runner.specs import read_spec
from modepair.runner.workers import worker_pool
from modepair.sweeps import Opamp, read_candidates

__all__ = ["BenchRun", "bench", "known_opamps"]


@dataclass(frozen=True)
class BenchRun:
    """What came of the bench.

    Attributes
    ----------
    pages : list of BenchPage
        The op-amps that could be measured.
    failures : dict of str to SimulationError
        Why the others could not, by name.
    """

    pages: list[BenchPage]
    failures: dict[str, SimulationError]


def known_opamps(spec: Path | None = None, file: Path | None = None) -> dict[str, Opamp]:
    """Give the op-amps that can be measured.

    Parameters
    ----------
    spec : Path, optional
        A spec: those that it uses or gives, and the built-in ones.
    file : Path, optional
        A file of candidates: those in it.

    Returns
    -------
    dict of str to Opamp
        Without a file the built-in ones.

    Raises
    ------
    SpecError
        If the file cannot be used.
    """
    if spec is not None:
        return read_spec(spec).candidates
    return read_candidates(file) if file is not None else candidates()


def bench(opamps: Mapping[str, Opamp], output: Path | None = None, *, jobs: int | None = None) -> BenchRun:
    """Measure op-amps.

    Parameters
    ----------
    opamps : mapping of str to Opamp
        The candidates.
    output : Path, optional
        A folder to write `bench.md`, `bench.csv`, `bench_curves.csv` and the plot to.
    jobs : int, optional
        Number of worker processes; the number of processors where absent.

    Returns
    -------
    BenchRun
        Measurements in the order of the op-amps.

    Raises
    ------
    SpecError
        If an imported model's file is refused.
    EngineMissingError
        If there is no ngspice library.
    OutputError
        If the folder cannot be written.
    """
    started = datetime.now(UTC)
    locate_library()
    models = imported_models(opamps, opamps)
    mountings = {
        name: imported_mounting(models[name]) if name in models else macromodel_mounting(opamp.parameters)
        for name, opamp in opamps.items()
    }
    pages: list[BenchPage] = []
    failures: dict[str, SimulationError] = {}
    engine = ""
    with worker_pool() as executors:
        for name, result, version in measure_opamps(executors, jobs or os.cpu_count() or 1, mountings):
            engine = engine or version
            if isinstance(result, Bench):
                pages.append(BenchPage(result, opamps[name].declared, name in models))
            else:
                failures[name] = result
    if output is not None and pages:
        _write(output, pages, failures, {"date": started.strftime("%Y-%m-%d %H:%M UTC"), **versions(engine)})
    return BenchRun(pages, failures)


def _write(
    output: Path,
    pages: Sequence[BenchPage],
    failures: Mapping[str, SimulationError],
    provenance: dict[str, str],
) -> None:
    import numpy as np
    import pandas as pd

    from modepair.reports import write_plot
    from modepair.reports.bench_plots import plot_bench

    with run_folder(output) as folder:
        pd.DataFrame(bench_rows(pages)).to_csv(folder.path("bench.csv"), index=False)
        curves = [
            pd.DataFrame(
                {
                    "opamp": page.bench.name,
                    "frequency_hz": page.bench.frequency_hz,
                    "gain_db": 20 * np.log10(np.abs(page.bench.gain)),
                    "gain_phase_deg": np.degrees(np.unwrap(np.angle(page.bench.gain))),
                    "error_re": page.bench.error.real,
                    "error_im": page.bench.error.imag,
                    "cmrr_db": page.bench.cmrr_db,
                    "differential_input_ohm": 1 / np.abs(page.bench.differential_admittance),
                    "common_input_ohm": 1 / np.abs(page.bench.common_admittance),
                    "output_ohm": np.abs(page.bench.output_impedance),
                }
            )
            for page in pages
        ]
        pd.concat(curves).to_csv(folder.path("bench_curves.csv"), index=False)
        plot = write_plot(
            plot_bench([page.bench for page in pages], title="Op-amp bench"), folder.path("bench")
        )[0]
        folder.write_text("bench.md", bench_markdown(pages, plot.name, provenance))
        warnings = [text for page in pages for text in page.warnings]
        folder.publish(
            {
                "bench": [page.bench.name for page in pages],
                "failed": {name: str(error) for name, error in failures.items()},
                "warnings": warnings,
                **provenance,
            }
        )
