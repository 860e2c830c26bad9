"""The ngspice engine: one library instance in this process, and rules that let no wrong result pass.

ngspice reports many failures only as text on its error stream, keeps simulating an older circuit when a new
one did not load, and leaves older plots in place when an analysis fails. So every load starts from an empty
simulator, any unexpected line of text is a failure, and a result counts only if it is in a new plot, complete
and finite.
"""

from __future__ import annotations

import logging
import os
from collections.abc import Iterable, Sequence
from ctypes.util import find_library
from functools import cache
from pathlib import Path

import numpy as np
import numpy.typing as npt

from modepair.runner.errors import EngineDeadError, EngineMissingError, SimulationError

__all__ = ["LINE_LENGTH", "Engine", "engine", "locate_library"]

LIBRARY_VARIABLE = "NGSPICE_LIBRARY_PATH"

LINE_LENGTH = 1000
"""Characters of a line of commands; the longest that ngspice takes has 1023."""

COMMANDS_BEFORE_RELEASE = 400
"""ngspice keeps each command it is given, about a kilobyte a run, until told to let go."""

HARMLESS = (
    "Note: can't find init file.",
    "Using SPARSE 1.3 as Direct Linear Solver",
    "Note: No compatibility mode",
)
"""Starts of the lines that some versions print on their error stream at a good start or load."""

CONVERGENCE_TALK = (
    "Note:",
    "Trying gmin",
    "Further gmin increment",
    "One successful",
    "Supplies reduced to",
    "Warning: singular matrix",
    "Warning: Further gmin increment",
    "Warning: Dynamic gmin stepping failed",
    "Warning: True gmin stepping failed",
    "Warning: Gmin stepping failed",
    "Warning: gmin stepping failed",
    "Warning: Source stepping failed",
    "Warning: source stepping failed",
)
"""Starts of the lines that tell how an operating point is being found. That none was found is told by others."""

FREQUENCY_MATCH = 1e-9
"""Relative distance within which a solved frequency is the one asked for; ngspice's grid is exact to 1e-14."""

MACOS_PLACES = ("/opt/homebrew/lib/libngspice.dylib", "/usr/local/lib/libngspice.dylib")


def locate_library() -> str:
    """Find the ngspice library.

    Returns
    -------
    str
        What `NGSPICE_LIBRARY_PATH` says, else what the system's search for libngspice finds.

    Raises
    ------
    EngineMissingError
        If there is none.
    """
    named = os.environ.get(LIBRARY_VARIABLE)
    if named:
        return named
    found = find_library("ngspice") or next((place for place in MACOS_PLACES if Path(place).exists()), None)
    if found is None:
        raise EngineMissingError(LIBRARY_VARIABLE)
    return found


class Engine:
    """ngspice in this process.

    Use `engine()`: the library allows one instance in a process.

    Raises
    ------
    EngineMissingError
        If the ngspice library is not found or cannot be opened.
    """

    def __init__(self) -> None:
        # PySpice reads this variable once, when it is imported.
        os.environ[LIBRARY_VARIABLE] = locate_library()
        # PySpice logs each line that ngspice prints; the lines are read and judged here instead.
        logger = logging.getLogger("PySpice")
        logger.addHandler(logging.NullHandler())
        logger.propagate = False
        logger.setLevel(logging.CRITICAL)
        from PySpice.Spice.NgSpice.Shared import NgSpiceShared, ffi

        self._ffi = ffi
        try:
            self._shared = NgSpiceShared.new_instance()
        except OSError as error:
            raise EngineMissingError(LIBRARY_VARIABLE, str(error)) from error
        self._shared.NUMBER_OF_EXEC_CALLS_TO_RELEASE_MEMORY = COMMANDS_BEFORE_RELEASE
        # The frequencies last asked for, and what came back for them and was right.
        self._asked_hz: npt.NDArray[np.float64] | None = None
        self._came_back = b""
        self._holds_result = False
        self._harmless: tuple[str, ...] = HARMLESS

    @property
    def version(self) -> str:
        """Version of the ngspice library."""
        return str(self._shared.ngspice_version)

    def load(self, netlist: str, *, nonlinear: bool = False) -> None:
        """Load a circuit, in place of any other.

        Parameters
        ----------
        netlist : str
            SPICE text without analyses and without `.end`.
        nonlinear : bool
            Whether it needs an operating point, whose search ngspice may talk about.

        Raises
        ------
        SimulationError
            If ngspice says anything against it.
        EngineDeadError
            If the library can load nothing any more; the process must be given up.
        """
        self._quietly("destroy all")
        self._quietly("remcirc")
        self._holds_result = False
        self._harmless = HARMLESS + CONVERGENCE_TALK if nonlinear else HARMLESS
        try:
            self._shared.load_circuit(f"{netlist}\n.end\n")
        except NameError as error:
            raise EngineDeadError(_explained(self._said() or str(error))) from error
        complaints = self._complaints()
        loaded = any(line.startswith("Circuit:") for line in self._shared.stdout.splitlines())
        if complaints or not loaded:
            said = "; ".join(complaints) or "no circuit loaded"
            raise SimulationError(_explained(f"the netlist was refused: {said}"))

    def alter(self, lines: Iterable[str]) -> None:
        """Set element values of the loaded circuit.

        Parameters
        ----------
        lines : iterable of str
            `alter` commands, several in a line with a semicolon between them; at most `LINE_LENGTH` characters each.

        Raises
        ------
        SimulationError
            If ngspice says anything.
        """
        for line in lines:
            self._command(line)

    def analyse(
        self, command: str, frequency_hz: npt.NDArray[np.float64], vectors: Sequence[str]
    ) -> npt.NDArray[np.complex128]:
        """Run one AC analysis of the loaded circuit.

        Parameters
        ----------
        command : str
            The analysis, such as "ac dec 20 1.0 1000000.0".
        frequency_hz : ndarray, shape (F,)
            The frequencies it must come back with, in hertz.
        vectors : sequence of str, length v
            Node names to read.

        Returns
        -------
        ndarray, shape (v, F)
            Complex node voltages.

        Raises
        ------
        SimulationError
            If ngspice says anything, or the result is not new, not complete, not at these frequencies or
            not finite.
        """
        if self._holds_result:
            self._quietly("destroy all")
        self._holds_result = True
        self._command(command)
        name = self._shared.last_plot
        if not name.startswith("ac"):
            raise SimulationError("the analysis left no result")
        got, *columns = [self._vector(f"{name}.{vector}") for vector in ("frequency", *vectors)]
        self._command("destroy")
        self._holds_result = False
        if frequency_hz is not self._asked_hz or got != self._came_back:
            _check_frequencies(np.frombuffer(got, np.complex128), frequency_hz)
            self._asked_hz, self._came_back = frequency_hz, got
        if any(len(column) != len(got) for column in columns):
            raise SimulationError("the analysis came back incomplete")
        result = np.frombuffer(b"".join(columns), np.complex128).reshape(len(vectors), -1)
        if not np.isfinite(result).all():
            raise SimulationError("the analysis gave values that are not finite numbers")
        return result

    def operating_point(self, vectors: Sequence[str]) -> npt.NDArray[np.float64]:
        """Find the operating point of the loaded circuit.

        Parameters
        ----------
        vectors : sequence of str, length v
            Node names to read.

        Returns
        -------
        ndarray, shape (v,)
            DC node voltages, in volts.

        Raises
        ------
        SimulationError
            If there is none, or ngspice says anything beyond how it searches.
        """
        if self._holds_result:
            self._quietly("destroy all")
        self._holds_result = True
        self._command("op")
        name = self._shared.last_plot
        if not name.startswith("op"):
            raise SimulationError("the search for an operating point left no result")
        found = []
        for vector in vectors:
            info = self._shared._ngspice_shared.ngGet_Vec_Info(f"{name}.{vector}".encode("ascii"))
            if info == self._ffi.NULL or info.v_realdata == self._ffi.NULL or info.v_length != 1:
                raise SimulationError(f"the operating point left no voltage {vector}")
            found.append(float(info.v_realdata[0]))
        self._command("destroy")
        self._holds_result = False
        result = np.array(found)
        if not np.isfinite(result).all():
            raise SimulationError("the operating point has voltages that are not finite numbers")
        return result

    def _vector(self, name: str) -> bytes:
        """Copy a complex vector out of the simulator; PySpice's own way costs ten times as much."""
        info = self._shared._ngspice_shared.ngGet_Vec_Info(name.encode("ascii"))
        if info == self._ffi.NULL or info.v_compdata == self._ffi.NULL:
            raise SimulationError(f"the analysis left no vector {name}")
        copied: bytes = self._ffi.buffer(info.v_compdata, info.v_length * 16)[:]
        return copied

    def _command(self, command: str) -> None:
        try:
            self._shared.exec_command(command)
        except NameError as error:
            # PySpice takes every line on the error stream for a failure, ngspice's own verdict is the other one.
            if self._complaints() or not self._shared.stderr or "returned" in str(error):
                raise SimulationError(self._said() or str(error)) from error
        complaints = self._complaints()
        if complaints:
            raise SimulationError("; ".join(complaints))

    def _quietly(self, command: str) -> None:
        """Run a command whose complaint, that there is nothing to remove, does not matter."""
        try:
            self._shared.exec_command(command)
        except NameError:
            return

    def _complaints(self) -> list[str]:
        text = self._shared.stderr
        if not text:
            return []
        lines = (line.strip() for line in text.splitlines())
        return [line for line in lines if line and not line.startswith(self._harmless)]

    def _said(self) -> str:
        """The error text of the last command, or its output where it printed the error there."""
        return "; ".join(
            self._complaints()
            or [line.strip() for line in self._shared.stdout.splitlines() if "error" in line.lower()]
        )


def _check_frequencies(got: npt.NDArray[np.complex128], frequency_hz: npt.NDArray[np.float64]) -> None:
    if (
        got.shape != frequency_hz.shape
        or not (np.abs(got.real - frequency_hz) <= FREQUENCY_MATCH * frequency_hz).all()
    ):
        raise SimulationError(
            f"the analysis came back with {got.size} frequencies that are not the {frequency_hz.size} asked for"
        )


def _explained(message: str) -> str:
    """Name the remedy where ngspice's own message names none."""
    if "mif-error" in message.lower():
        message += (
            "; POLY and TABLE need ngspice's code models, which some systems pack apart from its library. "
            "Install them with: apt-get install ngspice (Debian, Ubuntu)"
        )
    return message


@cache
def _started() -> Engine | EngineMissingError:
    # A failed start is kept too: the library's declarations cannot be read a second time in a process.
    try:
        return Engine()
    except EngineMissingError as error:
        return error


def engine() -> Engine:
    """Return the engine of this process, started at the first call.

    Raises
    ------
    EngineMissingError
        If the ngspice library is not found or cannot be opened.
    """
    started = _started()
    if isinstance(started, EngineMissingError):
        raise started
    return started
