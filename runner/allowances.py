"""Allowances: the time and the memory that a batch may take, enforced by the system in the worker itself.

The timer and the limits are the kernel's, so they also end a worker that is caught in the simulator and never comes
back to Python. They are set in the pool's own worker processes only; any other executor sees to its own.
"""

from __future__ import annotations

import contextlib
import os
import resource
import signal
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved
from modepair.runner.engine import engine
from modepair.runner.errors import EngineDeadError, OutputError

__all__ = ["TIME_LIMIT_S", "Allowance", "allowance", "confine", "limited", "solve_within", "warm"]

TIME_LIMIT_S = 30.0
"""Seconds that one case may take, and that a batch may take on top of `SECONDS_A_POINT`."""

SECONDS_A_POINT = 2e-3
"""Seconds allowed for a case and frequency; linear circuits take some microseconds."""

MEMORY_BYTES = 2 << 30
"""Address space that a batch may take beyond what the worker has when its engine is ready (about 150 MB)."""

MEMORY_A_POINT = 8 * 2 * 16
"""The same for a case and frequency: two complex gains, held several times on their way."""

NO_MEMORY = ("can't allocate", "cannot allocate", "out of memory")
"""What ngspice says, in small letters, when memory fails it."""

NO_RECOVERY = "cannot recover"


@dataclass(frozen=True)
class Allowance:
    """What a batch may take.

    Attributes
    ----------
    seconds : float
        Time by the clock, in seconds; half as much again of processor time.
    memory : int
        Address space in bytes, beyond that of an idle worker.
    """

    seconds: float
    memory: int


class _Confinement:
    """Whether this process is a worker of the pool, what it has when idle, and why it could not be prepared."""

    active = False
    idle_bytes = 0
    fault: OSError | None = None


def allowance(cases: int, analyses: Analyses, time_limit_s: float = TIME_LIMIT_S) -> Allowance:
    """Work out what a batch may take.

    Parameters
    ----------
    cases : int
        Cases in the batch.
    analyses : Analyses
        What is run on each.
    time_limit_s : float
        Least time in seconds.

    Returns
    -------
    Allowance
        Generous: some hundred times what a linear circuit takes.
    """
    points = cases * analyses.frequency_hz.size
    return Allowance(time_limit_s + points * SECONDS_A_POINT, MEMORY_BYTES + points * MEMORY_A_POINT)


def confine(fault: OSError | None = None) -> None:
    """Make this process one in which allowances are enforced.

    Parameters
    ----------
    fault : OSError, optional
        Why the process cannot work; every task raises it.
    """
    _Confinement.active = True
    _Confinement.fault = fault
    for number in (signal.SIGALRM, signal.SIGXCPU):
        signal.signal(number, signal.SIG_DFL)
    # A core file of a process that died would fill the disk.
    _limit(resource.RLIMIT_CORE, 0)


def warm() -> None:
    """Import and start the engine, so that it is ready when the first batch comes."""
    fault = _Confinement.fault
    if fault is not None:
        raise OutputError(f"{fault.filename}: cannot be written: {fault.strerror}")
    engine()


def solve_within(
    allowed: Allowance, solve: Callable[[Batch, Analyses], Solved], batch: Batch, analyses: Analyses
) -> Solved:
    """Solve a batch in a worker, which the system ends if it takes more than it may.

    Parameters
    ----------
    allowed : Allowance
        What it may take.
    solve : callable
        Solves it.
    batch : Batch
        The cases.
    analyses : Analyses
        What to run on each.

    Returns
    -------
    Solved
        What `solve` returned.

    Raises
    ------
    MemoryError
        If there was not enough memory; the process must be given up.
    EngineDeadError
        If the simulator is beyond use; the process must be given up.
    """
    with limited(allowed):
        return _sound(solve(batch, analyses))


@contextlib.contextmanager
def limited(allowed: Allowance) -> Iterator[None]:
    """Have the system end this process, a worker with its engine started, if a block takes more than it may.

    Parameters
    ----------
    allowed : Allowance
        What the block may take.

    Yields
    ------
    None
        Once, with the limits set.
    """
    warm()
    if not _Confinement.active:
        yield
        return
    if not _Confinement.idle_bytes:
        _Confinement.idle_bytes = _address_space()
    if _Confinement.idle_bytes:
        _limit(resource.RLIMIT_AS, _Confinement.idle_bytes + allowed.memory)
    used = resource.getrusage(resource.RUSAGE_SELF)
    _limit(resource.RLIMIT_CPU, int(used.ru_utime + used.ru_stime + 1.5 * allowed.seconds) + 1)
    signal.setitimer(signal.ITIMER_REAL, allowed.seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)


def _sound(solved: Solved) -> Solved:
    """Refuse results of an engine that lost its footing on the way: those that came after may be wrong."""
    for reason in solved.failures.values():
        if any(words in reason.lower() for words in NO_MEMORY):
            raise MemoryError(reason)
        if NO_RECOVERY in reason:
            raise EngineDeadError(reason)
    return solved


def _limit(kind: int, most: int) -> None:
    """Set a soft limit, as far as the hard one allows; systems without such a limit go without."""
    hard = resource.getrlimit(kind)[1]
    soft = most if hard == resource.RLIM_INFINITY else min(most, hard)
    with contextlib.suppress(ValueError, OSError):
        resource.setrlimit(kind, (soft, hard))


def _address_space() -> int:
    """Address space of this process in bytes; 0 where the system does not tell."""
    try:
        pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[0])
    except OSError:
        return 0
    return pages * os.sysconf("SC_PAGE_SIZE")
