"""The pool: batches go to worker processes, and what happens when one of them dies, hangs or eats memory.

The pool is a `concurrent.futures.Executor`, so another one can take its place. A batch that cost its worker is solved
again in a process of its own, and if it costs that one too, a case at a time, so that each case that costs a worker is
known after one time-out. Other batches are solved whole, whatever happens beside them, so their results keep every bit.
"""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable, Hashable, Iterable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future
from contextlib import contextmanager
from dataclasses import dataclass, replace
from types import TracebackType

import numpy as np

from modepair.runner.allowances import TIME_LIMIT_S, Allowance, allowance, solve_within, warm
from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved, solve_batch
from modepair.runner.errors import EngineDeadError, SimulationError
from modepair.runner.workers import ExecutorFactory, submit, worker_pool

__all__ = ["BatchSolver", "ExecutorFactory", "worker_pool"]

DIED = "the simulator process died on this case"
NO_MEMORY = "the simulator ran out of memory"
NOT_TRIED = "not tried, since each of the first three cases with the same op-amps cost the simulator"

LEAST_TRIED = 3
"""Cases that must have cost a worker, with none solved, before their like are given up."""

LOSSES = (BrokenExecutor, EngineDeadError, MemoryError)
"""How the loss of a worker shows in a future."""


@dataclass
class _Kin:
    """What became of cases that are alike, in the order of results."""

    solved: bool = False
    lost: int = 0

    @property
    def hopeless(self) -> bool:
        return not self.solved and self.lost >= LEAST_TRIED

    def take(self, solved: Solved) -> None:
        self.solved |= len(solved.failures) < len(solved.position)
        self.lost += solved.lost


@dataclass
class _Flight:
    """A batch on its way; or one that needs no solving."""

    batch: Batch | Solved
    kin: _Kin
    future: Future[Solved] | None
    submitted: float = 0.0


class BatchSolver:
    """Solves batches in many processes; a case that costs its process costs no other case.

    Use it as a context manager.

    Parameters
    ----------
    factory : callable
        Makes an executor of so many workers.
    jobs : int
        Number of workers.
    time_limit_s : float
        Seconds that one case may take; a batch may take some more, by its size.
    """

    def __init__(self, factory: ExecutorFactory, jobs: int, time_limit_s: float = TIME_LIMIT_S) -> None:
        self._factory = factory
        self._jobs = jobs
        self._time_limit_s = time_limit_s
        self._executor = factory(jobs)

    def __enter__(self) -> BatchSolver:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._executor.shutdown(wait=error is None, cancel_futures=True)

    def warm(self) -> None:
        """Start the workers, while the caller goes on."""
        for _ in range(self._jobs):
            submit(self._executor, warm)

    def solve(
        self,
        batches: Iterable[Batch | Solved],
        analyses: Analyses,
        alike: Callable[[int], Hashable] | None = None,
    ) -> Iterator[Solved]:
        """Solve batches and give them back in their order.

        Parameters
        ----------
        batches : iterable of Batch or Solved
            Taken only as fast as they are solved; what is solved already goes through.
        analyses : Analyses
            What to run on each case.
        alike : callable, optional
            Takes a position and tells the kind of its case, the same for all cases of a batch. Where the first cases
            of a kind each cost a worker, the rest of the kind is given up. Cases of one deck are of one kind where
            absent.

        Yields
        ------
        Solved
            For each batch.
        """
        source = iter(batches)
        waiting: deque[_Flight] = deque()
        kinds: dict[Hashable, _Kin] = {}
        exhausted = False
        while waiting or not exhausted:
            while not exhausted and len(waiting) < 2 * self._jobs + 1:
                batch = next(source, None)
                if batch is None:
                    exhausted = True
                    break
                deck = batch.deck.text if isinstance(batch, Batch) else ""
                kin = kinds.setdefault(alike(int(batch.position[0])) if alike else deck, _Kin())
                waiting.append(self._launched(batch, kin, analyses))
            if not waiting:
                return
            flight = waiting.popleft()
            solved = self._landed(flight, waiting, analyses)
            flight.kin.take(solved)
            yield solved

    def _allowed(self, batch: Batch, analyses: Analyses) -> Allowance:
        return allowance(len(batch.position), analyses, self._time_limit_s)

    def _handed(self, executor: Executor, batch: Batch, analyses: Analyses) -> Future[Solved]:
        return submit(executor, solve_within, self._allowed(batch, analyses), solve_batch, batch, analyses)

    def _launched(self, batch: Batch | Solved, kin: _Kin, analyses: Analyses) -> _Flight:
        if isinstance(batch, Solved) or kin.hopeless:
            return _Flight(batch, kin, None)
        return _Flight(batch, kin, self._handed(self._executor, batch, analyses), time.monotonic())

    def _landed(self, flight: _Flight, waiting: deque[_Flight], analyses: Analyses) -> Solved:
        """Wait for a batch; if its worker or another is lost, find out what the batch itself comes to."""
        batch = flight.batch
        if isinstance(batch, Solved):
            return batch
        if flight.future is None or flight.kin.hopeless:
            return _failed(batch, analyses, NOT_TRIED)
        try:
            return flight.future.result()
        except LOSSES:
            # Of all batches in flight the oldest is the only one that can have taken so long.
            late = time.monotonic() - flight.submitted >= self._allowed(batch, analyses).seconds
        self._executor.shutdown(wait=True, cancel_futures=True)
        solved = None if late else self._whole(batch, analyses)
        if solved is None:
            solved = self._one_by_one(batch, analyses, replace(flight.kin))
        self._executor = self._factory(self._jobs)
        for other in waiting:
            if isinstance(other.batch, Batch) and other.future is not None and not _is_solved(other.future):
                other.future = self._handed(self._executor, other.batch, analyses)
                other.submitted = time.monotonic()
        return solved

    @contextmanager
    def _isolated(self) -> Iterator[Executor]:
        """Give a process to lose, ready to solve."""
        executor = self._factory(1)
        try:
            submit(executor, warm).result()
            yield executor
        except BrokenExecutor as error:
            raise SimulationError("worker processes end as soon as they start") from error
        finally:
            executor.shutdown(wait=False, cancel_futures=True)

    def _whole(self, batch: Batch, analyses: Analyses) -> Solved | None:
        """Solve a batch in a process of its own; None if that is lost."""
        with self._isolated() as executor:
            try:
                return self._handed(executor, batch, analyses).result()
            except LOSSES:
                return None

    def _one_by_one(self, batch: Batch, analyses: Analyses, kin: _Kin) -> Solved:
        """Solve each case of a batch by itself, in a new process after each that is lost."""
        singles = deque(batch.part(index, index + 1) for index in range(len(batch.position)))
        pieces: list[Solved] = []
        while singles and not kin.hopeless:
            with self._isolated() as executor:
                futures = [self._handed(executor, single, analyses) for single in singles]
                for future in futures:
                    single = singles.popleft()
                    allowed = self._allowed(single, analyses).seconds
                    begun = time.monotonic()
                    try:
                        solved = future.result()
                    except LOSSES as error:
                        reason = _reason(error, time.monotonic() - begun, allowed)
                        solved = replace(_failed(single, analyses, reason), lost=1)
                    pieces.append(solved)
                    kin.take(solved)
                    if solved.lost:
                        break
        pieces += [_failed(single, analyses, NOT_TRIED) for single in singles]
        return Solved(
            batch.position,
            np.concatenate([piece.gains for piece in pieces]),
            {place: why for piece in pieces for place, why in piece.failures.items()},
            next((piece.engine for piece in pieces if piece.engine), ""),
            sum(piece.lost for piece in pieces),
        )


def _reason(error: BaseException, seconds: float, allowed: float) -> str:
    if isinstance(error, MemoryError):
        return NO_MEMORY
    if isinstance(error, EngineDeadError):
        return str(error)
    # Its own timer ended the worker, if it took all of its time; the clock here starts a moment later.
    return f"the simulator did not come back within {allowed:.0f} s" if seconds > 0.95 * allowed else DIED


def _failed(batch: Batch, analyses: Analyses, reason: str) -> Solved:
    gains = np.full((len(batch.position), 2, analyses.frequency_hz.size), np.nan, np.complex128)
    return Solved(batch.position, gains, dict.fromkeys(batch.position.tolist(), reason))


def _is_solved(future: Future[Solved]) -> bool:
    """Whether a batch in flight was solved before its pool broke."""
    return future.done() and not future.cancelled() and future.exception() is None
