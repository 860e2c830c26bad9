"""The command line.

Exit status: 0 done, 1 judged and failing, 2 usage or spec, 3 simulation failed.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

if TYPE_CHECKING:
    from modepair.runner.results import Progress
    from modepair.runner.sweep import Run

__all__ = ["app", "main"]

USAGE = 2
SIMULATION_FAILED = 3
INTERRUPTED = 130

app = typer.Typer(
    help="CMRR over frequency of difference and instrumentation amplifier stages, swept in ngspice.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

SpecFile = Annotated[Path, typer.Argument(metavar="SPEC", help="Sweep spec, a YAML file.")]
Folder = Annotated[Path | None, typer.Option("-o", "--output", metavar="DIR", help="Output folder.")]
Jobs = Annotated[
    int | None,
    typer.Option("--jobs", min=1, max=1024, metavar="N", help="Worker processes; all processors if not given."),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON for a script instead of a table.")]


@app.command("run")
def run_command(spec: SpecFile, output: Folder = None, jobs: Jobs = None, as_json: AsJson = False) -> None:
    """Run a sweep: curves, figures, plots and decks go to a run folder."""
    from modepair.runner.sweep import run

    with _progress() as progress:
        result = run(spec, output, jobs=jobs, progress=progress)
    if as_json:
        print(_as_json(result))
    else:
        _print_run(result)
    if result.failed:
        raise typer.Exit(SIMULATION_FAILED)


@app.command("netlist")
def netlist_command(
    spec: SpecFile,
    case: Annotated[
        int | None, typer.Option("--case", min=1, metavar="N", help="The case to write; case 1 if not given.")
    ] = None,
    output: Folder = None,
) -> None:
    """Write decks for the stand-alone simulator, `ngspice -b`.

    One case goes to the standard output. With -o, its deck goes to that folder, or, without --case, a deck for
    each structure of the sweep.
    """
    from modepair.circuits import candidates
    from modepair.runner.analyses import plan_analyses
    from modepair.runner.decks import case_deck, structure_decks
    from modepair.runner.plans import plan_batches
    from modepair.sweeps import expand, load_spec

    sweep = expand(load_spec(spec, candidates()))
    if case is not None and case > sweep.count:
        raise typer.BadParameter(f"{case} is not a case; the spec has 1 to {sweep.count}", param_hint="--case")
    plans, analyses = plan_batches(sweep), plan_analyses(sweep.spec.frequency)
    if output is None:
        sys.stdout.write(case_deck(sweep, plans, analyses, case or 1))
        return
    if case is not None:
        decks = {f"case-{case}.cir": case_deck(sweep, plans, analyses, case)}
    else:
        decks = structure_decks(sweep, plans, analyses)
    output.mkdir(parents=True, exist_ok=True)
    for name, text in decks.items():
        (output / name).write_text(text, encoding="utf-8")
        print(output / name)


@app.command("schema")
def schema_command() -> None:
    """Print the JSON Schema of a spec, for editors."""
    from modepair.sweeps import json_schema

    print(json.dumps(json_schema(), indent=2, ensure_ascii=False))


def _print_run(result: Run) -> None:
    from modepair.reports.tables import console_for, print_cases

    spec = result.spec
    console = console_for(sys.stdout)
    if spec.title:
        console.print(f"{spec.title}\n", markup=False)
    band = (spec.frequency.start, spec.frequency.stop)
    print_cases(console, result.cases, spec.axes, spec.frequency.spots, band, str(result.folder / "cases.csv"))
    console.print(f"Run folder: {_shown_path(result.folder)}", markup=False, soft_wrap=True)


def _shown_path(path: Path) -> Path:
    """Path as the user would write it from here."""
    here = Path.cwd()
    return path.relative_to(here) if path.is_relative_to(here) else path


def _as_json(result: Run) -> str:
    rows = json.loads(result.cases.to_json(orient="records", double_precision=15))
    content = {"folder": str(result.folder), "failed": result.failed, "cases": rows}
    return json.dumps(content, indent=2, ensure_ascii=False)


@contextmanager
def _progress() -> Iterator[Progress | None]:
    """Show a bar on a terminal; nothing where the error stream is no terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (
        TextColumn("solving"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("cases, time left"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("solving", total=None)
        yield lambda done, count: bar.update(task, completed=done, total=count)


def main() -> None:
    """Run the command line and turn every known error into its message and exit status."""
    from modepair.sweeps import ModepairError, SpecError

    try:
        app(prog_name="modepair")
    except SpecError as error:
        _fail(str(error), USAGE)
    except ModepairError as error:
        from modepair.runner.errors import OutputError

        _fail(f"modepair: {error}", USAGE if isinstance(error, OutputError) else SIMULATION_FAILED)
    except KeyboardInterrupt:
        _fail("modepair: interrupted; nothing was written", INTERRUPTED)
    except BrokenPipeError:
        # Whoever read the output has left; keep the interpreter from complaining as it closes the stream.
        sys.stderr.close()
        sys.exit(1)
    except OSError as error:
        _fail(f"modepair: {error.filename or ''}: {error.strerror or error}", USAGE)


def _fail(message: str, status: int) -> None:
    print(message, file=sys.stderr)
    sys.exit(status)
