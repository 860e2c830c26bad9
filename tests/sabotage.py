"""Cases that crash, hang or eat memory, for the tests of what a run survives. Light: the workers import it."""

from __future__ import annotations

import ctypes
import os
import signal
import time

import numpy as np

from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved, solve_batch

CRASHING, HANGING, EATING = 5, 14, 23
"""Positions, in the sweep of `tests/test_runner_surviving.py`, of the cases that do it."""


def sabotaged(batch: Batch, analyses: Analyses) -> Solved:
    """Solve a batch, but come to grief where one of these cases is in it."""
    if CRASHING in batch.position:
        os.kill(os.getpid(), signal.SIGSEGV)
    if HANGING in batch.position:
        # In a library, with Python's lock held: no thread of this process can do anything about it.
        while True:
            ctypes.PyDLL(None).pause()
    if EATING in batch.position:
        eaten = []
        while True:
            eaten.append(np.empty(1 << 25))
    return solve_batch(batch, analyses)


def hanging(batch: Batch, analyses: Analyses) -> Solved:
    """Solve a batch, but hang where one of the cases from 12 on is in it."""
    while (batch.position >= 12).any():
        time.sleep(1.0)
    return solve_batch(batch, analyses)


def hopeless(batch: Batch, analyses: Analyses) -> Solved:
    """Solve a batch, but crash on each case from 8 to 15."""
    if ((batch.position >= 8) & (batch.position < 16)).any():
        os.kill(os.getpid(), signal.SIGSEGV)
    return solve_batch(batch, analyses)


def large() -> bytes:
    """Give a result that takes a while to send."""
    return bytes(1 << 29)
