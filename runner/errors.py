"""What can go wrong when a sweep runs."""

from __future__ import annotations

from modepair.sweeps.faults import ModepairError

__all__ = ["EngineDeadError", "EngineMissingError", "OutputError", "ReadingError", "SimulationError"]


class SimulationError(ModepairError, RuntimeError):
    """A circuit could not be simulated; the next one may."""


class EngineDeadError(SimulationError):
    """The simulator library is beyond use in this process."""


class EngineMissingError(ModepairError, RuntimeError):
    """The ngspice library was not found.

    Parameters
    ----------
    variable : str
        The environment variable that can name it.
    detail : str, optional
        What the system said when it was opened.
    """

    def __init__(self, variable: str, detail: str = "") -> None:
        super().__init__(variable, detail)
        self.variable = variable
        self.detail = detail

    def __str__(self) -> str:
        because = f" ({self.detail})" if self.detail else ""
        return (
            f"the ngspice library was not found{because}; looked for libngspice where the system keeps its "
            "libraries. Install it with: apt-get install libngspice0 (Debian, Ubuntu), dnf install "
            f"libngspice (Fedora), brew install libngspice (macOS); or name its file in {self.variable}"
        )


class OutputError(ModepairError, OSError):
    """A run folder could not be written."""


class ReadingError(ModepairError, ValueError):
    """A folder is not a run folder, or not a whole one."""
