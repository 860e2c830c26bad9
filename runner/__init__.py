"""How it runs: the ngspice engine, batches, worker processes, the run folder and the command line."""

from modepair.runner.errors import EngineMissingError, OutputError, SimulationError
from modepair.runner.sweep import Run, run

__all__ = ["EngineMissingError", "OutputError", "Run", "SimulationError", "run"]
