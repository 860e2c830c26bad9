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
from types import TracebackType
from typing import ParamSpec, TypeVar

import numpy as np

from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved, solve_batch
from modepair.runner.engine import engine
from modepair.runner.errors import EngineDeadError

__all__ = ["BatchSolver", "ExecutorFactory", "worker_pool"]

ExecutorFactory = Callable[[int], Executor]

P = ParamSpec("P")
R = TypeVar("R")

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


def _warm() -> None:
    """Import and start the engine, so that it is ready when the first batch comes."""
    engine()


class BatchSolver:
    """Solves batches in many processes; a worker that dies costs the case it died on, and no other.

    Use it as a context manager.

    Parameters
    ----------
    factory : callable
        Makes an executor of so many workers.
    jobs : int
        Number of workers.
    """

    def __init__(self, factory: ExecutorFactory, jobs: int) -> None:
        self._factory = factory
        self._jobs = jobs
        self._executor = factory(jobs)

    def __enter__(self) -> BatchSolver:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._executor.shutdown(wait=True, cancel_futures=True)

    def warm(self) -> None:
        """Start the workers, while the caller goes on."""
        for _ in range(self._jobs):
            _submit(self._executor, _warm)

    def solve(self, batches: Iterable[Batch], analyses: Analyses) -> Iterator[Solved]:
        """Solve batches and give them back in their order.

        Parameters
        ----------
        batches : iterable of Batch
            Taken only as fast as they are solved.
        analyses : Analyses
            What to run on each case.

        Yields
        ------
        Solved
            For each batch.
        """
        source = iter(batches)
        waiting: deque[tuple[Batch, Future[Solved]]] = deque()
        exhausted = False
        while waiting or not exhausted:
            while not exhausted and len(waiting) < 2 * self._jobs + 1:
                batch = next(source, None)
                if batch is None:
                    exhausted = True
                else:
                    waiting.append((batch, _submit(self._executor, solve_batch, batch, analyses)))
            if not waiting:
                return
            batch, future = waiting.popleft()
            try:
                yield future.result()
            except (BrokenProcessPool, EngineDeadError):
                self._executor.shutdown(wait=True, cancel_futures=True)
                yield self._alone(batch, analyses)
                self._executor = self._factory(self._jobs)
                waiting = deque(
                    (
                        other,
                        kept if _is_solved(kept) else _submit(self._executor, solve_batch, other, analyses),
                    )
                    for other, kept in waiting
                )

    def _alone(self, batch: Batch, analyses: Analyses) -> Solved:
        """Solve a batch whose worker may die in a process of its own; halve it until the cause stands alone."""
        with self._factory(1) as executor:
            try:
                return _submit(executor, solve_batch, batch, analyses).result()
            except (BrokenProcessPool, EngineDeadError) as error:
                reason = str(error) if isinstance(error, EngineDeadError) else DIED
        count = len(batch.position)
        if count == 1:
            gains = np.full((1, 2, analyses.frequency_hz.size), np.nan, np.complex128)
            return Solved(batch.position, gains, {int(batch.position[0]): reason})
        halves = [
            self._alone(half, analyses) for half in (batch.part(0, count // 2), batch.part(count // 2, count))
        ]
        return Solved(
            batch.position,
            np.concatenate([half.gains for half in halves]),
            {place: why for half in halves for place, why in half.failures.items()},
            next((half.engine for half in halves if half.engine), ""),
        )


def _submit(executor: Executor, task: Callable[P, R], *args: P.args, **kwargs: P.kwargs) -> Future[R]:
    try:
        with _main_module_hidden():
            return executor.submit(task, *args, **kwargs)
    except BrokenProcessPool as error:
        broken: Future[R] = Future()
        broken.set_exception(error)
        return broken


def _is_solved(future: Future[Solved]) -> bool:
    """Whether a batch in flight was solved before its pool broke."""
    return future.done() and not future.cancelled() and future.exception() is None
