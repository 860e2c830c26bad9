"""Time per case and peak memory of the engine: `python -m tests.benchmarks.engine`.

One process measures everything in turn and prints one table, so that ratios can be compared although
machines differ. The stage has three op-amps; nine parts vary; 121 frequencies are solved in both drives.
"""

from __future__ import annotations

import itertools
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

from modepair.circuits import COPIES, OUTPUT
from modepair.circuits.netlist import DRIVES, circuit
from modepair.runner import run
from modepair.runner.analyses import plan_analyses
from modepair.runner.plans import BatchPlan, plan_batches
from modepair.runner.decks import case_deck
from modepair.runner.engine import engine
from modepair.sweeps import Sweep, expand, load_spec

SPEC = """\
title: Benchmark
stage:
  topology: three-opamp
  parts: {{RF1: 10k, RF2: 10k, RG: 200, R1: 10k, R2: 10k, R3: 10k, R4: 10k}}
  opamp: bench
  load: 10k
source:
  resistance: 350
  imbalance: 10
  between_capacitance: 1n
  bias_resistance: 10M
frequency: {{start: 1, stop: 1M, points_per_decade: 20, spots: [{spots}]}}
vary:
{axes}
opamps:
  bench: {{open_loop_gain: 130 dB, gain_bandwidth: 8 MHz, phase_margin: 60, cmrr: 120 dB, cmrr_corner: 300 Hz,
          input_resistance_differential: 1M, input_capacitance_differential: 8p,
          input_resistance_common: 1G, input_capacitance_common: 2p, output_resistance: 50}}
"""
VARIED = {
    "stage.parts.R1": 10e3,
    "stage.parts.R2": 10e3,
    "stage.parts.R3": 10e3,
    "stage.parts.R4": 10e3,
    "stage.parts.RF1": 10e3,
    "stage.parts.RF2": 10e3,
    "source.parts.RSP": 350.0,
    "source.parts.CCP": 3e-9,
    "source.parts.CCN": 3e-9,
}


def write_spec(folder: Path, cases: int, spots: str = "1k, 10k") -> Path:
    """Write a spec of at least so many cases: nine axes, as even as the number allows."""
    sizes = [1] * len(VARIED)
    for index in itertools.cycle(range(len(sizes))):
        if np.prod(sizes) >= cases:
            break
        sizes[index] += 1
    axes = "\n".join(
        f"  {path}: [{', '.join(repr(value * (1 + 1e-4 * step)) for step in range(size))}]"
        for (path, value), size in zip(VARIED.items(), sizes, strict=True)
    )
    path = folder / f"bench-{cases}.yaml"
    path.write_text(SPEC.format(axes=axes, spots=spots), encoding="utf-8")
    return path


def fastest(action: Callable[[], object], repeats: int, rounds: int = 5) -> float:
    """Seconds for one call: the fastest of several rounds, which other work on the machine disturbs least."""
    action()
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        for _ in range(repeats):
            action()
        times.append((time.perf_counter() - start) / repeats)
    return min(times)


def bare_ac(sweep: Sweep, plans: list[BatchPlan]) -> float:
    simulator = engine()
    simulator.load(plans[0].deck.text)
    analyses = plan_analyses(sweep.spec.frequency)
    command, frequencies, _ = analyses.commands[0]
    vectors = [f"{OUTPUT}_{copy}" for copy in COPIES]
    shared = simulator._shared  # the bare command: no check, no copy of the result

    def once() -> None:
        shared.exec_command(command)
        shared.exec_command("destroy")

    simulator.analyse(command, frequencies, vectors)
    return fastest(once, 200)


def pyspice_objects(plans: list[BatchPlan]) -> float:
    """Build PySpice objects for each case and drive, and let PySpice run them."""
    rows: Iterator[int] = itertools.cycle(range(len(plans[0].rows)))

    def once() -> None:
        row = next(rows)
        elements = plans[0].structure.elements(plans[0].rows[row : row + 1])
        for copy, drive in DRIVES.items():
            simulator = circuit(elements, 0, {copy: drive}).simulator()
            simulator.ac(variation="dec", number_of_points=20, start_frequency=1, stop_frequency=1e6)

    return fastest(once, 10, 3)


def stand_alone(sweep: Sweep, plans: list[BatchPlan]) -> float:
    deck = case_deck(sweep, plans, plan_analyses(sweep.spec.frequency), 1)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "case.cir"
        path.write_text(deck, encoding="utf-8")
        return fastest(lambda: subprocess.run(["ngspice", "-b", path], capture_output=True, check=True), 10, 3)


def modepair(spec: Path, folder: Path, jobs: int, rounds: int = 2) -> float:
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        run(spec, folder / "run", jobs=jobs)
        times.append(time.perf_counter() - start)
    return min(times)


def peak_memory_mb(spec: Path, folder: Path) -> tuple[float, float]:
    """Peak memory of a run in a fresh process: its own, and the largest of its workers."""
    code = (
        "import resource, sys; from modepair.runner import run; run(sys.argv[1], sys.argv[2], jobs=1); "
        "print(*(resource.getrusage(w).ru_maxrss for w in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, spec, folder / "run"], capture_output=True, text=True, check=True
    )
    own, worker = (int(value) / 1024 for value in done.stdout.split())
    return own, worker


def main() -> None:
    """Measure and print."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        small, large, huge = (write_spec(folder, count) for count in (1000, 4000, 20000))
        sweep = expand(load_spec(large))
        plans = plan_batches(sweep)
        bare = bare_ac(sweep, plans)
        rows = [("bare ac of a loaded deck", bare)]
        for jobs in (1, 2):
            rows.append((f"modepair, spec to files, {sweep.count} cases, {jobs} job(s)", modepair(large, folder, jobs) / sweep.count))
        rows.append(("PySpice objects, simulator().ac() twice", pyspice_objects(plans)))
        rows.append(("ngspice -b, one process a case", stand_alone(sweep, plans)))
        print(f"{'way':60} {'ms/case':>8} {'x bare':>7}")
        for label, seconds in rows:
            print(f"{label:60} {seconds * 1e3:8.3f} {seconds / bare:7.2f}")
        print(f"two jobs against one: {rows[1][1] / rows[2][1]:.2f} times; PySpice objects against modepair: {rows[3][1] / rows[1][1]:.1f} times")
        memory = [peak_memory_mb(spec, folder) for spec in (small, huge)]
        for spec, (own, worker) in zip((small, huge), memory, strict=True):
            print(f"peak memory, {spec.stem.split('-')[1]} cases: {own:.0f} MB, its worker {worker:.0f} MB")
        print(f"processors: {os.cpu_count()}")


if __name__ == "__main__":
    main()
