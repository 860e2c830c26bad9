"""What can go wrong when a sweep runs."""

from __future__ import annotations

from pathlib import Path

from modepair.sweeps.faults import ModepairError

__all__ = [
    "AcceptError",
    "EngineDeadError",
    "EngineMissingError",
    "NothingToJudgeError",
    "OutputError",
    "ReadingError",
    "RequestError",
    "SimulationError",
]


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


class RequestError(ModepairError, ValueError):
    """The spec has nothing of what a command asks for: no such case or draw, no spots, no tolerances."""


class OutputError(ModepairError, OSError):
    """A run folder could not be written."""


class ReadingError(ModepairError, ValueError):
    """A folder is not a run folder, or not a whole one."""


class NothingToJudgeError(ModepairError, ValueError):
    """A spec that has neither limits nor a baseline.

    Parameters
    ----------
    spec : str
        Its file.
    baseline : str
        Name of the baseline that was looked for.
    """

    def __init__(self, spec: str, baseline: str) -> None:
        super().__init__(spec, baseline)
        self.spec = spec
        self.baseline = baseline

    def __str__(self) -> str:
        return (
            f"{self.spec}: there is nothing to judge: the spec has no limits, and there is no {self.baseline} "
            "beside it; give limits, or accept the curves as they are with --accept"
        )


class AcceptError(ModepairError, RuntimeError):
    """A baseline that was not written, since cases failed.

    Parameters
    ----------
    path : Path
        The baseline's file.
    failed : int
        Number of failed cases.
    first : str
        The first of them, with its reason.
    """

    def __init__(self, path: Path, failed: int, first: str) -> None:
        super().__init__(path, failed, first)
        self.path = path
        self.failed = failed
        self.first = first

    def __str__(self) -> str:
        return f"{self.path}: not accepted, since {self.failed} cases failed in simulation: {self.first}"
