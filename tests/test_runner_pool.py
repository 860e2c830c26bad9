"""Workers may die; the cases they did not die on are none the worse for it."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from modepair.circuits import COPIES, OUTPUT, BuiltStage, structures
from modepair.runner.analyses import Analyses, plan_analyses
from modepair.runner.batches import Batch, Solved, solve_batch
from modepair.runner.errors import EngineDeadError
from modepair.runner.pool import DIED, BatchSolver, ExecutorFactory, worker_pool
from modepair.sweeps import Frequency

PARTS: dict[str, Any] = {
    "R1": 1e4,
    "R2": 1e4,
    "R3": 1e4,
    "R4": 1e4 * (1 + 1e-3 * np.arange(1, 25)),
    "A1.open_loop_gain": 1e5,
    "A1.gain_bandwidth": 1e6,
}
DEADLY, DULL = 5, 9
"""Positions on which the test's workers die, and find their engine beyond use."""


def dying(batch: Batch, analyses: Analyses) -> Solved:
    """Solve a batch in a worker that a segmentation fault ends where the batch holds position `DEADLY`."""
    if DEADLY in batch.position:
        os.kill(os.getpid(), signal.SIGSEGV)
    if DULL in batch.position:
        raise EngineDeadError("the library can load nothing any more")
    return solve_batch(batch, analyses)


class Dying(Executor):
    """An executor, not of processes itself, that puts `dying` in the place of the real task."""

    def __init__(self, inner: Executor) -> None:
        self.inner = inner

    def submit(self, task: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        return self.inner.submit(task, *(dying if arg is solve_batch else arg for arg in args), **kwargs)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        self.inner.shutdown(wait, cancel_futures=cancel_futures)


@pytest.fixture
def factory() -> Iterator[ExecutorFactory]:
    with worker_pool() as made:
        yield made


@pytest.fixture
def analyses() -> Analyses:
    return plan_analyses(Frequency.model_validate({"start": "1", "stop": "1k", "points_per_decade": "3"}))


def batches(size: int = 4) -> list[Batch]:
    (structure,) = structures(BuiltStage("difference"), PARTS, 24)
    deck = structure.deck()
    vectors = tuple(f"{OUTPUT}_{copy}" for copy in COPIES)
    return [
        Batch(
            structure.rows[start : start + size],
            deck,
            structure.values(structure.rows[start : start + size]),
            vectors,
        )
        for start in range(0, 24, size)
    ]


def gathered(solved: list[Solved]) -> tuple[np.ndarray, dict[int, str]]:
    reasons = {place: why for part in solved for place, why in part.failures.items()}
    return np.concatenate([part.gains for part in solved]), reasons


def test_results_come_in_order_whatever_the_number_of_workers(
    factory: ExecutorFactory, analyses: Analyses
) -> None:
    found = []
    for jobs in (1, 2):
        with BatchSolver(factory, jobs) as solver:
            solver.warm()
            solved = list(solver.solve(iter(batches()), analyses))
        assert [place for part in solved for place in part.position] == list(range(24))
        found.append(gathered(solved)[0])
    np.testing.assert_array_equal(found[0], found[1])
    assert np.isfinite(found[0]).all()


@pytest.mark.parametrize("jobs", [1, 2])
def test_a_worker_that_dies_costs_one_case(factory: ExecutorFactory, analyses: Analyses, jobs: int) -> None:
    with BatchSolver(lambda count: Dying(factory(count)), jobs) as solver:
        gains, reasons = gathered(list(solver.solve(batches(), analyses)))
    assert reasons == {DEADLY: DIED, DULL: "the library can load nothing any more"}
    with BatchSolver(factory, 1) as solver:
        clean, none = gathered(list(solver.solve(batches(), analyses)))
    assert none == {}
    untouched = [place for place in range(24) if place // 4 not in {DEADLY // 4, DULL // 4}]
    np.testing.assert_array_equal(gains[untouched], clean[untouched])
    rest = [place for place in range(24) if place not in {DEADLY, DULL}]
    # A batch that was halved begins with other values, so its pivots may differ: round-off, no more.
    np.testing.assert_allclose(gains[rest], clean[rest], rtol=1e-6)
    assert np.isnan(gains[[DEADLY, DULL]]).all()


def test_a_value_that_the_simulator_would_replace_is_refused(analyses: Analyses) -> None:
    batch = batches()[0]
    values = batch.values.copy()
    values[1, 0], values[2, 0] = -1.0, np.nan
    solved = solve_batch(Batch(batch.position, batch.deck, values, batch.vectors), analyses)
    assert set(solved.failures) == {1, 2}
    assert "must be a finite number above zero" in solved.failures[1]
    assert np.isfinite(solved.gains[[0, 3]]).all()


def _home(_: object = None) -> tuple[str, list[str]]:
    return os.getcwd(), sorted(os.listdir("."))


def test_each_worker_has_an_empty_directory_that_goes_with_the_pool() -> None:
    with worker_pool() as factory, factory(2) as pool:
        homes = {future.result()[0] for future in [pool.submit(_home) for _ in range(20)]}
        _, content = pool.submit(_home).result()
        assert all(Path(home).is_dir() for home in homes)
    assert content == [".spiceinit"]
    assert os.getcwd() not in homes
    assert not any(Path(home).exists() for home in homes)


def test_a_script_without_a_guard_does_not_run_again_in_its_workers(tmp_path: Path) -> None:
    import subprocess

    script = tmp_path / "script.py"
    script.write_text(
        "from modepair.runner.pool import BatchSolver, worker_pool\n"
        "print('once', flush=True)\n"
        "with worker_pool() as factory, BatchSolver(factory, 1) as solver:\n"
        "    solver.warm()\n",
        encoding="utf-8",
    )
    done = subprocess.run([sys.executable, script], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout == "once\n"
    assert done.stderr == ""


KILLED_IN_A_RESULT = """
import os, signal
from pathlib import Path
from modepair.runner.workers import submit, worker_pool
from tests.sabotage import large
def read():
    return int(Path("/proc/self/io").read_text().split()[1])
with worker_pool() as make:
    executor = make(1)
    future = submit(executor, large)
    (worker,) = executor._processes
    start = read()
    while read() < start + (1 << 24):
        pass
    os.kill(worker, signal.SIGKILL)
    executor.shutdown(wait=False)
    print("killed", future.done())
"""


@pytest.mark.skipif(sys.platform != "linux", reason="reads what a process has read from /proc")
def test_a_worker_killed_in_the_middle_of_its_result_holds_nothing_up() -> None:
    done = subprocess.run(
        [sys.executable, "-c", KILLED_IN_A_RESULT], capture_output=True, text=True, check=False, timeout=30
    )
    assert done.stdout == "killed False\n"
    assert done.stderr == ""
    assert done.returncode == 0
