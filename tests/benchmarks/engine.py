"""Time per case and peak memory of the engine: `python -m tests.benchmarks.engine [cases] [draws] [memory]`.

One process measures all ways in turn, five times over, each between two measurements of the bare ac, and prints
medians, so that ratios can be compared although machines differ. The stage has three op-amps; up to nine parts vary;
121 frequencies are solved in both drives.
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
from dataclasses import dataclass
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

ROUNDS = 5


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


def average(action: Callable[[], object], seconds: float = 2.0) -> float:
    """Seconds for one call, averaged over a while, so that other work on the machine weighs on all ways alike."""
    action()
    calls = 0
    start = time.perf_counter()
    while time.perf_counter() - start < seconds:
        action()
        calls += 1
    return (time.perf_counter() - start) / calls


@dataclass(frozen=True)
class Measured:
    """Seconds of one way, and how often the bare ac goes into it; the median over rounds, and all of them."""

    seconds: float
    ratio: float
    ratios: tuple[float, ...]


def in_turn(bare: Callable[[], float], ways: dict[str, Callable[[], float]]) -> dict[str, Measured]:
    """Measure each way once in every round, between two measurements of the bare ac.

    A shared machine changes its speed by a third from one second to another, so each time is compared with what the
    bare ac took just before and just after.
    """
    times: dict[str, list[float]] = {label: [] for label in ways}
    ratios: dict[str, list[float]] = {label: [] for label in ways}
    before = bare()
    for _ in range(ROUNDS):
        for label, measure in ways.items():
            seconds = measure()
            after = bare()
            times[label].append(seconds)
            ratios[label].append(2.0 * seconds / (before + after))
            before = after
    return {
        label: Measured(
            statistics.median(times[label]), statistics.median(ratios[label]), tuple(sorted(ratios[label]))
        )
        for label in ways
    }


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


def print_rows(found: dict[str, Measured]) -> None:
    print(f"{'way':62} {'ms each':>8} {'x bare':>7}  in each round")
    for label, one in found.items():
        print(
            f"{label:62} {one.seconds * 1e3:8.3f} {one.ratio:7.2f}  {' '.join(f'{r:.2f}' for r in one.ratios)}"
        )


def measure_cases(folder: Path) -> None:
    large, few, huge = (write_spec(folder, cases) for cases in (4000, 10, 20_000))
    sweep = expand(load_spec(large))
    plans = plan_batches(sweep)
    one, two = "modepair, 4,000 cases, one job", "modepair, 4,000 cases, two jobs"
    more_one, more_two = "modepair, 20,000 cases, one job", "modepair, 20,000 cases, two jobs"
    objects = "PySpice objects, simulator().ac() twice"
    found = in_turn(
        partial(bare_ac, sweep, plans),
        {
            one: partial(modepair, large, folder, 1, 4000),
            two: partial(modepair, large, folder, 2, 4000),
            more_one: partial(modepair, huge, folder, 1, 20_000),
            more_two: partial(modepair, huge, folder, 2, 20_000),
            objects: partial(pyspice_objects, plans),
            "ngspice -b, one process a case": partial(stand_alone, sweep, plans),
        },
    )
    print_rows(found)
    for first, second in ((one, two), (more_one, more_two)):
        print(f"two jobs against one: {found[first].ratio / found[second].ratio:.2f} times ({second})")
    print(
        f"PySpice objects against modepair with one job: {found[objects].ratio / found[one].ratio:.1f} times"
    )
    whole = [start_to_finish(few, folder) for _ in range(ROUNDS)]
    print(
        f"a sweep of 10 cases, command to files: {statistics.median(whole):.2f} s, at the most {max(whole):.2f} s"
    )


def measure_draws(folder: Path) -> None:
    for entries in (FEW, MANY):
        spec = write_drawn_spec(folder, 10_000, entries)
        sweep = expand(load_spec(spec))
        altered = altered_elements(sweep)
        one, two = (
            f"modepair, 10,000 draws, {altered} elements altered, {jobs}" for jobs in ("one job", "two jobs")
        )
        found = in_turn(
            partial(bare_ac, sweep, plan_batches(sweep)),
            {
                one: partial(modepair, spec, folder, 1, 10_000),
                two: partial(modepair, spec, folder, 2, 10_000),
            },
        )
        print_rows(found)
        print(f"two jobs against one: {found[one].ratio / found[two].ratio:.2f} times")


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
