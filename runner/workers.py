"""Workers: local processes, each in an empty directory of its own, that end with the process that started them.

They are started by spawn. The directory is empty since ngspice runs a start-up file that it finds in its directory.
"""

from __future__ import annotations

import multiprocessing
import os
import shutil
import signal
import sys
import tempfile
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from multiprocessing import resource_tracker
from multiprocessing.connection import Connection, wait
from multiprocessing.context import SpawnContext, SpawnProcess
from pathlib import Path
from typing import Any, ParamSpec, TypeVar

__all__ = ["ExecutorFactory", "submit", "worker_pool"]

ExecutorFactory = Callable[[int], Executor]

P = ParamSpec("P")
R = TypeVar("R")

STOPPING = {signal.SIGINT, signal.SIGTERM, signal.SIGHUP}
"""Signals that must not strike while a worker is being started."""


class _Workers(SpawnContext):
    """Starts processes and remembers them."""

    def __init__(self) -> None:
        super().__init__()
        self.started: list[SpawnProcess] = []

    def Process(self, *args: Any, **kwargs: Any) -> SpawnProcess:  # type: ignore[override]  # noqa: N802
        """Make a process; a `ProcessPoolExecutor` calls this for each of its workers."""
        process = SpawnProcess(*args, **kwargs)
        self.started = [other for other in self.started if other.is_alive()]
        self.started.append(process)
        return process

    def end(self) -> None:
        """Kill what still runs."""
        for process in self.started:
            if process.is_alive():
                process.kill()
        for process in self.started:
            if process.pid is not None:
                process.join(5.0)


class _Pool(ProcessPoolExecutor):
    """A process pool whose workers can be killed at any moment."""

    def __init__(self, jobs: int, context: _Workers, home: str) -> None:
        super().__init__(jobs, context, initializer=_start_worker, initargs=(home,))
        self._results_end: Connection = vars(self._result_queue)["_writer"]

    def let_go(self) -> None:
        """Wait for no more results, once the workers are gone.

        A thread may be reading a result whose sender was killed in the middle of it; it would wait for the rest as long
        as this process can still write there itself, and keep the interpreter from ending.
        """
        self._results_end.close()


def _leave_with_parent(home: str) -> None:
    """End this worker when the process that started it is gone, however it went, and take its directory along."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        wait([parent.sentinel])
        shutil.rmtree(home, ignore_errors=True)
        os._exit(1)


def _start_worker(home: str) -> None:
    """Prepare a worker: its own empty directory, no reaction to Ctrl-C, limits."""
    # Not at the top: what starts a worker early must not wait for the simulator's modules.
    from modepair.runner.allowances import confine

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.pthread_sigmask(signal.SIG_UNBLOCK, STOPPING - {signal.SIGINT})
    threading.Thread(target=_leave_with_parent, args=(home,), daemon=True).start()
    directory = Path(home) / f"worker-{os.getpid()}"
    try:
        directory.mkdir()
        os.chdir(directory)
        # An empty start-up file here keeps ngspice from running one of the user's.
        (directory / ".spiceinit").write_text("* empty\n", encoding="ascii")
    except OSError as error:
        confine(error)
    else:
        confine()


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
def _undisturbed() -> Iterator[None]:
    """Hold back Ctrl-C and the like for a moment; a worker started meanwhile never sees Ctrl-C.

    The mask goes to the worker. It holds for this thread alone, and a signal that another thread takes would be handled
    here all the same, so the handlers wait too.
    """
    came: list[int] = []
    handlers = {}
    if threading.current_thread() is threading.main_thread():
        handlers = {number: handler for number in STOPPING if callable(handler := signal.getsignal(number))}
    held = signal.pthread_sigmask(signal.SIG_BLOCK, STOPPING)
    try:
        for number in handlers:
            signal.signal(number, lambda number, frame: came.append(number))
        yield
    finally:
        for number, handler in handlers.items():
            signal.signal(number, handler)
        signal.pthread_sigmask(signal.SIG_SETMASK, held)
        if came:
            signal.raise_signal(came[0])


@contextmanager
def worker_pool() -> Iterator[ExecutorFactory]:
    """Give a factory of process pools; processes and their directories go when the block ends.

    Yields
    ------
    callable
        Takes a number of processes and returns a `ProcessPoolExecutor`.
    """
    home = tempfile.mkdtemp(prefix="modepair-")
    # It would let signals through in the middle of the start of the first worker.
    resource_tracker.ensure_running()
    context = _Workers()
    pools: list[_Pool] = []

    def make(jobs: int) -> Executor:
        pools.append(_Pool(jobs, context, home))
        return pools[-1]

    try:
        yield make
    finally:
        context.end()
        for pool in pools:
            pool.let_go()
        shutil.rmtree(home, ignore_errors=True)


def submit(executor: Executor, task: Callable[P, R], *args: P.args, **kwargs: P.kwargs) -> Future[R]:
    """Hand a task to an executor; one whose workers are gone gives a future that says so.

    Parameters
    ----------
    executor : Executor
        The executor.
    task : callable
        A function of a module.
    *args, **kwargs
        What it takes.

    Returns
    -------
    Future
        For what the task returns.
    """
    try:
        with _main_module_hidden(), _undisturbed():
            return executor.submit(task, *args, **kwargs)
    except BrokenProcessPool as error:
        broken: Future[R] = Future()
        broken.set_exception(error)
        return broken
