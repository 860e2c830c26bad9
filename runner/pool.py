"""The pool: worker processes that solve batches, and what happens when one of them dies.

The pool is a `concurrent.futures.Executor`, so another one can take its place. Workers are started by spawn,
each in an empty directory of its own, since ngspice runs a start-up file that it finds in its directory.
"""

from __future__ import annotations

import multiprocessing
import os
import shutil
import signal
import sys
import tempfile
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from multiprocessing.connection import wait
from pathlib import Path

import numpy as np

from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved, solve_batch
from modepair.runner.errors import EngineDeadError

__all__ = ["ExecutorFactory", "solve_batches", "worker_pool"]

ExecutorFactory = Callable[[int], Executor]

DIED = "the simulator process died on this case"


def _leave_with_parent() -> None:
    """End this worker when the process that started it is gone, however it went."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        wait([parent.sentinel])
        os._exit(1)


def _start_worker(home: str) -> None:
    """Prepare a worker: its own empty directory, no reaction to Ctrl-C, the engine loaded."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_leave_with_parent, daemon=True).start()
    directory = Path(home) / f"worker-{os.getpid()}"
    directory.mkdir()
    os.chdir(directory)
    # An empty start-up file here keeps ngspice from running one of the user's.
    (directory / ".spiceinit").write_text("* empty\n", encoding="ascii")


@contextmanager
def _main_module_hidden() -> Iterator[None]:
    """Keep spawn from importing the main script again in each worker, which needs nothing of it."""
    main = sys.modules["__main__"]
    kept = {name: getattr(main, name) for name in ("__file__", "__spec__") if hasattr(main, name)}
    main.__spec__ = None
    main.__dict__.pop("__file__", None)
    try:
        yield
    finally:
        for name, value in kept.items():
            setattr(main, name, value)


@contextmanager
def worker_pool() -> Iterator[ExecutorFactory]:
    """Give a factory of process pools whose directories go when the block ends.

    Yields
    ------
    callable
        Takes a number of processes and returns a `ProcessPoolExecutor`.
    """
    home = tempfile.mkdtemp(prefix="modepair-")

    def make(jobs: int) -> Executor:
        context = multiprocessing.get_context("spawn")
        return ProcessPoolExecutor(jobs, context, initializer=_start_worker, initargs=(home,))

    try:
        yield make
    finally:
        shutil.rmtree(home, ignore_errors=True)


def _submit(executor: Executor, batch: Batch, analyses: Analyses) -> Future[Solved]:
    try:
        with _main_module_hidden():
            return executor.submit(solve_batch, batch, analyses)
    except BrokenProcessPool as error:
        broken: Future[Solved] = Future()
        broken.set_exception(error)
        return broken


def _alone(batch: Batch, analyses: Analyses, factory: ExecutorFactory) -> Solved:
    """Solve a batch whose worker may die, in processes of its own; halve it until the cause stands alone."""
    with factory(1) as executor:
        try:
            return _submit(executor, batch, analyses).result()
        except (BrokenProcessPool, EngineDeadError) as error:
            dead = error
    count = len(batch.position)
    if count > 1:
        halves = [
            _alone(half, analyses, factory)
            for half in (batch.part(0, count // 2), batch.part(count // 2, count))
        ]
        return Solved(
            batch.position,
            np.concatenate([half.gains for half in halves]),
            {place: why for half in halves for place, why in half.failures.items()},
        )
    reason = str(dead) if isinstance(dead, EngineDeadError) else DIED
    gains = np.full((1, 2, analyses.frequency_hz.size), np.nan, np.complex128)
    return Solved(batch.position, gains, {int(batch.position[0]): reason})


def solve_batches(
    batches: Iterable[Batch], analyses: Analyses, factory: ExecutorFactory, jobs: int
) -> Iterator[Solved]:
    """Solve batches in many processes and give them back in their order.

    Parameters
    ----------
    batches : iterable of Batch
        Taken only as fast as they are solved.
    analyses : Analyses
        What to run on each case.
    factory : callable
        Makes an executor of so many workers.
    jobs : int
        Number of workers.

    Yields
    ------
    Solved
        For each batch. A worker that dies costs the case it died on, and no other.
    """
    source = iter(batches)
    waiting: deque[tuple[Batch, Future[Solved]]] = deque()
    executor = factory(jobs)
    try:
        exhausted = False
        while waiting or not exhausted:
            while not exhausted and len(waiting) < 2 * jobs + 1:
                batch = next(source, None)
                if batch is None:
                    exhausted = True
                else:
                    waiting.append((batch, _submit(executor, batch, analyses)))
            if not waiting:
                return
            batch, future = waiting.popleft()
            try:
                yield future.result()
            except (BrokenProcessPool, EngineDeadError):
                executor.shutdown(wait=True, cancel_futures=True)
                yield _alone(batch, analyses, factory)
                executor = factory(jobs)
                again = [(other, future) for other, future in waiting]
                waiting = deque(
                    (other, future if _kept(future) else _submit(executor, other, analyses))
                    for other, future in again
                )
    finally:
        executor.shutdown(wait=True, cancel_futures=True)


def _kept(future: Future[Solved]) -> bool:
    """Whether a batch in flight was solved before its pool broke."""
    return future.done() and not future.cancelled() and future.exception() is None
