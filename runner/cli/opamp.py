"""`modepair opamp`."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from modepair.runner.cli.options import SIMULATION_FAILED, AsJson, Folder, Jobs

if TYPE_CHECKING:
    from modepair.reports.bench_tables import BenchPage
    from modepair.runner.errors import SimulationError

__all__ = ["opamp_command"]


def opamp_command(
    names: Annotated[
        list[str] | None,
        typer.Argument(metavar="[NAME]...", help="Op-amps to measure; all if none is named."),
    ] = None,
    spec: Annotated[
        Path | None, typer.Option("--spec", metavar="SPEC", help="Measure op-amps that this spec knows.")
    ] = None,
    file: Annotated[
        Path | None,
        typer.Option("--file", metavar="FILE", help="Measure op-amps of this file of candidates."),
    ] = None,
    output: Folder = None,
    jobs: Jobs = None,
    as_json: AsJson = False,
) -> None:
    """Measure op-amp models on a bench of their own, beside their declared values.

    Gain, phase, CMRR, input and output impedance over frequency, of the built-in candidates or of those in a spec or
    a file. Says when a model has no CMRR mechanism, or has one without frequency dependence. With -o, page, curves and
    plot go to that folder.
    """
    from modepair.runner.bench_run import bench, known_opamps

    if spec is not None and file is not None:
        raise typer.BadParameter(
            "--spec and --file are both given; leave one of them out", param_hint="--file"
        )
    known = known_opamps(spec, file)
    unknown = [name for name in names or () if name not in known]
    if unknown:
        from modepair.sweeps.words import listed, suggestion

        near = suggestion(unknown[0], known) or f"; known: {listed(list(known)[:20])}"
        where = "" if spec or file else "; --spec or --file names a file of your own"
        raise typer.BadParameter(f"there is no op-amp {unknown[0]!r}{near}{where}", param_hint="NAME")
    wanted = {name: known[name] for name in dict.fromkeys(names or known)}
    result = bench(wanted, output, jobs=jobs)
    if as_json:
        print(_as_json(result.pages, result.failures))
    else:
        _print(result.pages, result.failures)
        if output is not None:
            print(f"Folder: {output}")
    if result.failures:
        raise typer.Exit(SIMULATION_FAILED)


def _print(pages: list[BenchPage], failures: dict[str, SimulationError]) -> None:
    from modepair.reports import console_for
    from modepair.reports.bench_tables import print_bench

    console = console_for(sys.stdout)
    for page in pages:
        print_bench(console, page)
        console.print()
    for error in failures.values():
        console.print(f"failed: {error}", style="red", markup=False, soft_wrap=True)


def _as_json(pages: list[BenchPage], failures: dict[str, SimulationError]) -> str:
    from modepair.reports.bench_tables import bench_rows

    content = {
        "figures": bench_rows(pages),
        "warnings": [text for page in pages for text in page.warnings],
        "failed": {name: str(error) for name, error in failures.items()},
    }
    return json.dumps(content, indent=2, ensure_ascii=False)
