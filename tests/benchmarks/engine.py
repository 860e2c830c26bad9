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
from modepair.runner.decks import case_deck
from modepair.runner.engine import engine
from modepair.runner.plans import BatchPlan, plan_batches
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


def write_drawn_spec(folder: Path, draws: int) -> Path:
    """Write a spec of one case whose resistors, cable and op-amp parameters are all drawn: 25 values."""
    text = write_spec(folder, 1).read_text(encoding="utf-8")
    text = text[: text.index("vary:")] + text[text.index("opamps:") :]
    text = text.replace("  between_capacitance", "  cable_capacitance: 3n\n  between_capacitance")
    entries = [
        "{of: [R1, R2, R3, R4], absolute: 0.1 %, matching: 0.01 %, distribution: normal}",
        "{of: [RF1, RF2, RG, RL, RSP, RSN, RI, CCP, CCN, CCB], absolute: 1 %}",
        *(
            f"{{of: [{', '.join(f'A{n}.{parameter}' for n in (1, 2, 3))}], {bound}}}"
            for parameter, bound in (
                ("cmrr", "least: 100 dB"),
                ("gain_bandwidth", "absolute: 30 %"),
                ("open_loop_gain", "absolute: 50 %"),
                ("input_capacitance_common", "absolute: 20 %"),
            )
        ),
    ]
    text += f"tolerance:\n  draws: {draws}\n  seed: 7\n  parts:\n"
    text += "".join(f"    - {entry}\n" for entry in entries)
    path = folder / f"draws-{draws}.yaml"
    path.write_text(text, encoding="utf-8")
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
        return fastest(
            lambda: subprocess.run(["ngspice", "-b", path], capture_output=True, check=True), 10, 3
        )


def modepair(spec: Path, folder: Path, jobs: int, rounds: int = 2) -> float:
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        run(spec, folder / "run", jobs=jobs)
        times.append(time.perf_counter() - start)
    return min(times)


def start_to_finish(spec: Path, folder: Path) -> float:
    """Seconds of the whole command, interpreter and all."""
    command = [sys.executable, "-c", "from modepair.runner.cli.app import main; main()"]
    return fastest(
        lambda: subprocess.run(
            [*command, "run", spec, "-o", folder / "run"], capture_output=True, check=True
        ),
        1,
        3,
    )


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


def print_rows(rows: dict[str, float], bare: float) -> None:
    print(f"{'way':62} {'ms each':>8} {'x bare':>7}")
    for label, seconds in rows.items():
        print(f"{label:62} {seconds * 1e3:8.3f} {seconds / bare:7.2f}")


def measure_cases(folder: Path) -> None:
    large, few = write_spec(folder, 4000), write_spec(folder, 10)
    sweep = expand(load_spec(large))
    plans = plan_batches(sweep)
    bare = bare_ac(sweep, plans)
    one, two = (modepair(large, folder, jobs) / sweep.count for jobs in (1, 2))
    objects, alone = pyspice_objects(plans), stand_alone(sweep, plans)
    print_rows(
        {
            "bare ac of a loaded deck": bare,
            f"modepair, spec to files, {sweep.count} cases, one job": one,
            f"modepair, spec to files, {sweep.count} cases, two jobs": two,
            "PySpice objects, simulator().ac() twice": objects,
            "ngspice -b, one process a case": alone,
        },
        bare,
    )
    print(f"two jobs against one: {one / two:.2f} times")
    print(f"PySpice objects against modepair with one job: {objects / one:.1f} times")
    print(
        f"a sweep of {expand(load_spec(few)).count} cases, command to files: {start_to_finish(few, folder):.2f} s"
    )


def measure_draws(folder: Path) -> None:
    draws = write_drawn_spec(folder, 10_000)
    sweep = expand(load_spec(draws))
    bare = bare_ac(sweep, plan_batches(sweep))
    one, two = (modepair(draws, folder, jobs, 1) / 10_000 for jobs in (1, 2))
    print_rows(
        {
            "bare ac of a loaded deck": bare,
            "modepair, 10,000 draws of 25 values, one job": one,
            "modepair, 10,000 draws of 25 values, two jobs": two,
        },
        bare,
    )
    print(f"two jobs against one: {one / two:.2f} times")


def measure_memory(folder: Path) -> None:
    for label, spec in (
        ("1,000 cases", write_spec(folder, 1000)),
        ("20,000 cases", write_spec(folder, 20_000)),
        ("10,000 draws", write_drawn_spec(folder, 10_000)),
        ("100,000 draws", write_drawn_spec(folder, 100_000)),
    ):
        own, worker = peak_memory_mb(spec, folder)
        print(f"peak memory, {label}: {own:.0f} MB, its worker {worker:.0f} MB", flush=True)


def main() -> None:
    """Measure what the arguments name, or everything: cases, draws, memory."""
    parts = {"cases": measure_cases, "draws": measure_draws, "memory": measure_memory}
    print(f"processors: {os.cpu_count()}")
    with tempfile.TemporaryDirectory() as name:
        for part in sys.argv[1:] or parts:
            parts[part](Path(name))


if __name__ == "__main__":
    main()
