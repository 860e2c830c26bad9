"""Benching: op-amps on the bench, each in the simulator of a worker process."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from concurrent.futures import BrokenExecutor, Future
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from modepair.circuits import Bias
from modepair.circuits.bench import Mounting, bench_netlist
from modepair.reports.bench import Bench
from modepair.runner.allowances import MEMORY_BYTES, TIME_LIMIT_S, Allowance, limited
from modepair.runner.batches import check_biases
from modepair.runner.engine import engine
from modepair.runner.errors import EngineDeadError, SimulationError
from modepair.runner.workers import ExecutorFactory, submit

DIED = "the simulator process died on this model, or took more than the time and memory that it is allowed"

LOSSES = (BrokenExecutor, EngineDeadError, MemoryError)
"""How the loss of a worker shows in a future."""

__all__ = ["BENCH_START_HZ", "BENCH_STOP_HZ", "measure_opamps"]

BENCH_START_HZ, BENCH_STOP_HZ, POINTS_PER_DECADE = 1e-3, 1e9, 50


@dataclass(frozen=True)
class Solve:
    """What a worker measured: complex vectors, shape (v, F), and ngspice's version."""

    vectors: npt.NDArray[np.complex128]
    engine: str


def _frequencies() -> npt.NDArray[np.float64]:
    decades = round(float(np.log10(BENCH_STOP_HZ / BENCH_START_HZ)))
    return np.geomspace(BENCH_START_HZ, BENCH_STOP_HZ, decades * POINTS_PER_DECADE + 1)


def _solve(text: str, vectors: tuple[str, ...], bias: Bias | None) -> Solve:
    with limited(Allowance(TIME_LIMIT_S, MEMORY_BYTES)):
        simulator = engine()
        simulator.load(text, nonlinear=bias is not None)
        if bias is not None:
            check_biases(simulator, [bias])
        command = f"ac dec {POINTS_PER_DECADE} {BENCH_START_HZ!r} {BENCH_STOP_HZ!r}"
        return Solve(simulator.analyse(command, _frequencies(), vectors), simulator.version)


def measure_opamps(
    executors: ExecutorFactory, jobs: int, mountings: Mapping[str, Mounting]
) -> Iterator[tuple[str, Bench | SimulationError, str]]:
    """Measure op-amps.

    Parameters
    ----------
    executors : callable
        Makes an executor of so many workers.
    jobs : int
        Number of workers.
    mountings : mapping of str to Mounting
        The op-amps by name.

    Yields
    ------
    name : str
        Of each, in their order.
    result : Bench or SimulationError
        The measurement, or why there is none. A model that ends its worker costs no other its measurement.
    version : str
        Version of ngspice; empty without a result.
    """
    tasks = {name: (*bench_netlist(mounting), mounting.bias) for name, mounting in mountings.items()}
    with executors(min(jobs, max(1, len(tasks)))) as executor:
        futures = {name: submit(executor, _solve, *task) for name, task in tasks.items()}
        for name, future in futures.items():
            try:
                yield _found(name, future)
            except LOSSES:
                with executors(1) as alone:
                    try:
                        yield _found(name, submit(alone, _solve, *tasks[name]))
                    except LOSSES as error:
                        reason = str(error) if isinstance(error, EngineDeadError) else DIED
                        yield name, EngineDeadError(f"{name}: {reason}"), ""


def _found(name: str, future: Future[Solve]) -> tuple[str, Bench | SimulationError, str]:
    try:
        solve = future.result()
    except EngineDeadError:
        raise
    except SimulationError as error:
        return name, SimulationError(f"{name}: {error}"), ""
    return name, Bench.from_solve(name, _frequencies(), solve.vectors), solve.engine
