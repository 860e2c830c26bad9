"""The command line.

Exit status: 0 done, 1 judged and failing, 2 usage, spec or output, 3 simulation failed, 130 interrupted, 141 when
whoever read the output has left.
"""

from __future__ import annotations

import sys

import typer

from modepair.runner.cli.budget import budget_command
from modepair.runner.cli.check import check_command
from modepair.runner.cli.compare import compare_command
from modepair.runner.cli.netlist import netlist_command
from modepair.runner.cli.opamp import opamp_command
from modepair.runner.cli.options import SIMULATION_FAILED, USAGE
from modepair.runner.cli.run import run_command
from modepair.runner.cli.schema import schema_command
from modepair.runner.cli.tighten import tighten_command

__all__ = ["app", "main"]

BROKEN_PIPE = 128 + 13
"""Exit status of a program that nobody listens to, as a shell gives it for the signal."""

app = typer.Typer(
    help="CMRR over frequency of difference and instrumentation amplifier stages, swept in ngspice.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
app.command("run")(run_command)
app.command("check")(check_command)
app.command("compare")(compare_command)
app.command("budget")(budget_command)
app.command("tighten")(tighten_command)
app.command("netlist")(netlist_command)
app.command("opamp")(opamp_command)
app.command("schema")(schema_command)


def main() -> None:
    """Run the command line and turn every known error into its message and exit status."""
    from modepair.sweeps import ModepairError, SpecError

    try:
        app(prog_name="modepair")
    except SpecError as error:
        _fail(str(error), USAGE)
    except ModepairError as error:
        from modepair.runner.errors import OutputError

        usage = isinstance(error, OutputError | ValueError)
        message = "; ".join([str(error), *getattr(error, "__notes__", ())])
        _fail(f"modepair: {message}", USAGE if usage else SIMULATION_FAILED)
    except SystemExit as ended:
        # The command line's library ends with 1 where nobody reads, and hangs this over the stream.
        if ended.code == 1 and type(sys.stdout).__name__ == "PacifyFlushWrapper":
            sys.exit(BROKEN_PIPE)
        raise
    except BrokenPipeError:
        # Whoever read the output has left; keep the interpreter from complaining as it closes the stream.
        sys.stderr.close()
        sys.exit(BROKEN_PIPE)
    except OSError as error:
        where = f"{error.filename}: " if error.filename else ""
        _fail(f"modepair: {where}{error.strerror or error}", USAGE)


def _fail(message: str, status: int) -> None:
    print(message, file=sys.stderr)
    sys.exit(status)
