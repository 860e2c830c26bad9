"""Lines of alterations: they say what differs, in every copy, to the last digit, and no more."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from modepair.circuits.deck import Deck
from modepair.runner.alterations import Alterations
from modepair.runner.analyses import plan_analyses
from modepair.runner.batches import solve_batch
from modepair.runner.engine import LINE_LENGTH
from modepair.runner.plans import plan_batches
from modepair.sweeps import expand, load_spec
from tests.solving import solve

COUNT = 60
COMMANDS = [
    (f"altermod @r{n}_m[rsh]=",) if n % 2 else (f"alter @g{n}_c[gain]=", f"alter @g{n}_d[gain]=")
    for n in range(COUNT)
]
DECK = Deck("", tuple(f"R{n}" if n % 2 else f"G{n}" for n in range(COUNT)), tuple(COMMANDS), np.zeros(COUNT))

VALUES = st.lists(
    st.one_of(st.just(1.0), st.floats(allow_nan=False, allow_infinity=False)), min_size=COUNT, max_size=COUNT
)


@given(VALUES, VALUES)
def test_what_differs_is_set_in_every_copy_and_reads_back_the_same(
    old: list[float], new: list[float]
) -> None:
    lines = Alterations(DECK).between(np.array(old), np.array(new))
    assert all(len(line) <= LINE_LENGTH for line in lines)
    commands = [command.partition("=") for line in lines for command in line.split(";")]
    expected = [
        (command.rstrip("="), value)
        for was, value, commands in zip(old, new, COMMANDS, strict=True)
        if was != value
        for command in commands
    ]
    assert [(name, float(value)) for name, _, value in commands] == expected


def test_a_pattern_seen_before_takes_the_values_of_its_own_case() -> None:
    alterations = Alterations(DECK)
    first, second, third = (np.full(COUNT, value) for value in (1.0, 2.0, 3.0))
    assert alterations.between(first, second) != alterations.between(second, third)
    assert alterations.between(third, third) == []
    lone = third.copy()
    lone[7] = -0.1
    assert alterations.between(third, lone) == ["altermod @r7_m[rsh]=-0.10000000000000001"]


def test_lines_are_filled() -> None:
    lines = Alterations(DECK).between(np.zeros(COUNT), np.full(COUNT, -1.2345678901234567e-300))
    assert len(lines) > 1
    for line, following in pairwise(lines):
        assert len(f"{line};{following.split(';')[0]}") >= LINE_LENGTH


def test_every_value_of_a_sweep_is_set_however_small(tmp_path: Path) -> None:
    """ngspice keeps a resistance below 1 mOhm from being set in some ways, without a word."""
    spec = tmp_path / "small.yaml"
    spec.write_text(
        """\
stage:
  topology: difference
  parts: {R1: 10k, R2: 10k, R3: 10k, R4: 10k, C4: 1p}
  opamp: ideal
frequency: {start: 1k, stop: 1M, points_per_decade: 1}
vary:
  stage.reference_resistance: [10, 1m, 0.1m, 10u, 20]
  stage.parts.C4: [10p, 0.001p]
opamps:
  ideal: {open_loop_gain: 120 dB, gain_bandwidth: 1 GHz}
""",
        encoding="utf-8",
    )
    sweep = expand(load_spec(spec))
    (plan,) = plan_batches(sweep)
    solved = solve_batch(plan.batch(), plan_analyses(sweep.spec.frequency))
    for position, row in zip(solved.position.tolist(), plan.rows.tolist(), strict=True):
        parts = {
            name: float(np.broadcast_to(value, len(plan.case))[row])
            for name, value in sweep.blocks[0].parts.items()
        }
        alone = solve("difference", parts, sweep.spec.frequency.frequency_hz)
        np.testing.assert_allclose(
            solved.gains[position, 0], alone.common_gain, rtol=1e-6, atol=1e-10, err_msg=str(parts)
        )
