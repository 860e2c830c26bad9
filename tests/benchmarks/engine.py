"""Time per case and peak memory of the engine: `python -m tests.benchmarks.engine`.

One process measures all ways in turn, three times over, and prints medians, so that ratios can be compared although
machines differ. The stage has three op-amps; nine parts vary; 121 frequencies are solved in both drives.
"""

from __future__ import annotations

import itertools
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from functools import partial
from pathlib import Path

from modepair.circuits import COPIES, OUTPUT
from modepair.circuits.netlist import DRIVES, circuit, pair_of_drives
from modepair.runner import run
from modepair.runner.analyses import plan_analyses
from modepair.runner.decks import case_deck
from modepair.runner.engine import engine
from modepair.runner.plans import BatchPlan, plan_batches, plan_draws
from modepair.sweeps import Streams, Sweep, expand, load_spec

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

BRIDGE = "{of: [R1, R2, R3, R4], absolute: 0.1 %, matching: 0.01 %, distribution: normal}"
FEW = (
    BRIDGE,
    "{of: [RF1, RF2, RG, RL, RSP, RSN, RI], absolute: 1 %}",
    "{of: [A1.cmrr, A2.cmrr, A3.cmrr], least: 100 dB}",
    "{of: [A1.gain_bandwidth, A2.gain_bandwidth], absolute: 30 %}",
)
"""Every resistor of the stage and the source, every CMRR, two gain-bandwidths."""

EVERY = {
    "open_loop_gain": "absolute: 50 %",
    "gain_bandwidth": "absolute: 30 %",
    "phase_margin": "absolute: 10 %",
    "cmrr": "least: 100 dB",
    "cmrr_corner": "absolute: 30 %",
    "input_resistance_differential": "absolute: 50 %",
    "input_resistance_common": "absolute: 50 %",
    "output_resistance": "absolute: 30 %",
}
MANY = (
    BRIDGE,
    "{of: [RF1, RF2, RG, RL, RSP, RSN, RI, RBP, RBN], absolute: 1 %}",
    *(
        f"{{of: [{', '.join(f'{opamp}.{name}' for opamp in ('A1', 'A2', 'A3'))}], {bound}}}"
        for name, bound in EVERY.items()
    ),
)
"""Every resistor there is, and every parameter of every op-amp but its input capacitances."""

ROUNDS = 3


def write_spec(folder: Path, cases: int, spots: str = "1k, 10k") -> Path:
    """Write a spec of so many cases: an axis for each prime factor of the number, of which there are at most nine."""
    sizes = prime_factors(cases)
    axes = "\n".join(
        f"  {path}: [{', '.join(repr(value * (1 + 1e-4 * step)) for step in range(size))}]"
        for (path, value), size in itertools.zip_longest(VARIED.items(), sizes, fillvalue=1)
    )
    path = folder / f"bench-{cases}.yaml"
    path.write_text(SPEC.format(axes=axes, spots=spots), encoding="utf-8")
    return path


def prime_factors(number: int) -> list[int]:
    """Prime factors of a number, falling."""
    factors = []
    for divisor in range(2, number + 1):
        while number % divisor == 0:
            factors.append(divisor)
            number //= divisor
    return factors[::-1]


def write_drawn_spec(folder: Path, draws: int, entries: Sequence[str]) -> Path:
    """Write a spec of one case, with these entries of tolerances."""
    text = write_spec(folder, 1).read_text(encoding="utf-8")
    text = text[: text.index("vary:")] + text[text.index("opamps:") :]
    text += f"tolerance:\n  draws: {draws}\n  seed: 7\n  parts:\n"
    text += "".join(f"    - {entry}\n" for entry in entries)
    path = folder / f"draws-{draws}.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def average(action: Callable[[], object], seconds: float = 3.0) -> float:
    """Seconds for one call, averaged over a while, so that other work on the machine weighs on all ways alike."""
    action()
    calls = 0
    start = time.perf_counter()
    while time.perf_counter() - start < seconds:
        action()
        calls += 1
    return (time.perf_counter() - start) / calls


def in_turn(ways: dict[str, Callable[[], float]], rounds: int) -> dict[str, float]:
    """Measure each way once in every round; the medians."""
    times: dict[str, list[float]] = {label: [] for label in ways}
    for _ in range(rounds):
        for label, measure in ways.items():
            times[label].append(measure())
    return {label: statistics.median(values) for label, values in times.items()}


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
    return average(once)


def pyspice_objects(plans: list[BatchPlan]) -> float:
    """Build PySpice objects for each case and drive, and let PySpice run them."""
    rows: Iterator[int] = itertools.cycle(range(len(plans[0].rows)))

    def once() -> None:
        row = next(rows)
        elements = plans[0].structure.elements(plans[0].rows[row : row + 1])
        for copy, drive in DRIVES.items():
            built = circuit(pair_of_drives(elements, {copy: drive}), saved=[f"v({OUTPUT}_{copy})"])
            simulator = built.simulator()
            simulator.ac(variation="dec", number_of_points=20, start_frequency=1, stop_frequency=1e6)

    return average(once)


def stand_alone(sweep: Sweep, plans: list[BatchPlan]) -> float:
    deck = case_deck(sweep, plans, plan_analyses(sweep.spec.frequency), 1)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "case.cir"
        path.write_text(deck, encoding="utf-8")
        return average(lambda: subprocess.run(["ngspice", "-b", path], capture_output=True, check=True))


def modepair(spec: Path, folder: Path, jobs: int, count: int) -> float:
    start = time.perf_counter()
    run(spec, folder / "run", jobs=jobs)
    return (time.perf_counter() - start) / count


def start_to_finish(spec: Path, folder: Path) -> float:
    """Seconds of the whole command, interpreter and all."""
    command = [sys.executable, "-c", "from modepair.runner.cli.start import main; main()"]
    start = time.perf_counter()
    subprocess.run([*command, "run", spec, "-o", folder / "run"], capture_output=True, check=True)
    return time.perf_counter() - start


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
    large, few, huge = (write_spec(folder, cases) for cases in (4000, 10, 20_000))
    most = expand(load_spec(huge)).count
    sweep = expand(load_spec(large))
    plans = plan_batches(sweep)
    count = sweep.count
    bare, one, two = (
        "bare ac of a loaded deck",
        f"modepair, {count} cases, one job",
        f"modepair, {count} cases, two jobs",
    )
    objects = "PySpice objects, simulator().ac() twice"
    found = in_turn(
        {
            bare: lambda: bare_ac(sweep, plans),
            one: lambda: modepair(large, folder, 1, count),
            two: lambda: modepair(large, folder, 2, count),
            f"modepair, {most} cases, one job": lambda: modepair(huge, folder, 1, most),
            objects: lambda: pyspice_objects(plans),
            "ngspice -b, one process a case": lambda: stand_alone(sweep, plans),
        },
        ROUNDS,
    )
    print_rows(found, found[bare])
    print(f"two jobs against one: {found[one] / found[two]:.2f} times")
    print(f"PySpice objects against modepair with one job: {found[objects] / found[one]:.1f} times")
    whole = statistics.median(start_to_finish(few, folder) for _ in range(ROUNDS))
    print(f"a sweep of {expand(load_spec(few)).count} cases, command to files: {whole:.2f} s")


def measure_draws(folder: Path) -> None:
    for entries in (FEW, MANY):
        spec = write_drawn_spec(folder, 10_000, entries)
        sweep = expand(load_spec(spec))
        plans = plan_batches(sweep)
        altered = altered_elements(sweep)
        bare, one, two = (
            "bare ac of a loaded deck",
            f"modepair, 10,000 draws, {altered} elements altered, one job",
            f"modepair, 10,000 draws, {altered} elements altered, two jobs",
        )
        found = in_turn(
            {
                bare: partial(bare_ac, sweep, plans),
                one: partial(modepair, spec, folder, 1, 10_000),
                two: partial(modepair, spec, folder, 2, 10_000),
            },
            ROUNDS,
        )
        print_rows(found, found[bare])
        print(f"two jobs against one: {found[one] / found[two]:.2f} times")


def altered_elements(sweep: Sweep) -> int:
    """Elements of each copy of the circuit that differ from one draw to the next."""
    assert sweep.spec.tolerance is not None
    values = next(iter(plan_draws(sweep, Streams(sweep.spec.tolerance)))).batch().values
    return int((values[0] != values[1]).sum())


def measure_memory(folder: Path) -> None:
    for label, spec in (
        ("1,000 cases", write_spec(folder, 1000)),
        ("20,000 cases", write_spec(folder, 20_000)),
        ("10,000 draws", write_drawn_spec(folder, 10_000, FEW)),
        ("100,000 draws", write_drawn_spec(folder, 100_000, FEW)),
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
