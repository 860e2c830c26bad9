"""Own circuits: a stage out of a circuit file, through all that the tool does with a stage.

Kinds of truth: the built-in three-op-amp stage written down as a file; the dense solver with the example's wiring
written down anew; closed forms of a series resonator, a transistor pair and a guard; ngspice on its own.
"""

from __future__ import annotations

import json
import re
import subprocess
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

from modepair.circuits import built_stage, structures
from modepair.reports import ModePair
from modepair.runner import Run, compare_runs, open_run, run
from modepair.runner.analyses import plan_analyses
from modepair.runner.batches import solve_batch
from modepair.runner.cli.app import app
from modepair.runner.engine import engine
from modepair.runner.journal import run_key
from modepair.runner.plans import drawn_case, plan_batches
from modepair.runner.pool import BatchSolver, worker_pool
from modepair.runner.specs import read_spec
from modepair.runner.worst_case import budget_cases
from modepair.sweeps import expand
from tests.boyle import Boyle
from tests.dense import Network, solve_dense
from tests.spice_process import needs_ngspice, run_ngspice
from tests.test_imported_opamps import LINEAR, SAME_AS_LINEAR
from tests.test_runner_resume import COMMAND

EXAMPLES = Path(__file__).parent.parent / "sweeps" / "examples"
EXAMPLE = EXAMPLES / "telluric-electrodes.yaml"

SAME_CIRCUIT_DB = 1e-6
"""Measured: 1e-12. The decks of one circuit differ in the order of their elements, so in their pivots: 1e-10 V of
round-off in the 1e-3 V and more that common mode leaves at the output are 1e-6 dB."""

THREE_OPAMPS = """* the built-in three-op-amp stage, as a file; its elements stand in another order than their names
.param leg=10k
.subckt inamp p n ref out
XA1 p s1 o1 opamp
XA2 n s2 o2 opamp
RF1 o1 s1 {leg}
CF1 o1 s1 10p
RF2 o2 s2 {2*leg/2}
CF2 o2 s2 10p
Rg  s1 s2 200
R1  o2 n1 10k
R2  n1 out 10k
C2  n1 out 15p
R3  o1 p1 10k
R4  p1 ref 1e4
C4  p1 ref 15p
XA3 p1 n1 out opamp
.ends
"""

OWN = """\
title: Three op-amps
stage:
  topology: netlist
  file: own/three.cir
  subcircuit: INAMP
  ports: [plus, minus, reference, output]
  opamp: quiet-bipolar
  parts: {R4: 10.01k, A2.gain_bandwidth: 7 MHz}
  reference_resistance: 0.2
  load: 10k
source: {resistance: 350, imbalance: 10, cable_capacitance: 3n}
frequency: {start: 1, stop: 1M, points_per_decade: 6, spots: [50, 1k]}
vary:
  stage.parts.R1: [10k, 10.1k]
limits: {cmrr: [[1, 80 dB], [100, 80 dB]], yield: {least: 90 %}}
tolerance:
  draws: 64
  seed: 3
  sampling: SAMPLING
  parts:
    - {of: [R1, R2, R3, R4], absolute: 0.1 %, matching: 0.01 %}
    - {of: [RG], absolute: 1 %}
    - {of: [C2, C4], absolute: 5 %}
    - {of: [A1.cmrr, A2.cmrr, A3.cmrr], least: 100 dB}
    - {of: [A1.gain_bandwidth], absolute: 30 %}
"""

BUILT_IN = (
    re.sub(r"  (file|subcircuit|ports): .*\n", "", OWN)
    .replace("topology: netlist", "topology: three-opamp")
    .replace(
        "{R4: 10.01k,",
        "{RF1: 10k, RF2: 10k, RG: 200, R1: 10k, R2: 10k, R3: 10k, R4: 10.01k, C2: 15p, C4: 15p, CF1: 10p, CF2: 10p,",
    )
)


def spec_in(folder: Path, text: str, circuit: str = "", name: str = "own.cir") -> Path:
    (folder / "own").mkdir(exist_ok=True)
    if circuit:
        (folder / "own" / name).write_text(circuit)
    path = folder / "spec.yaml"
    path.write_text(text)
    return path


BAND = "{start: 1, stop: 1M, points_per_decade: 6}"


def small(subcircuit: str, ports: str, further: str = "", frequency: str = BAND) -> str:
    return (
        f"stage:\n  topology: netlist\n  file: own/own.cir\n  subcircuit: {subcircuit}\n"
        f"  ports: [{ports}]\n{further}frequency: {frequency}\n"
    )


def solved(path: Path, case: int = 1) -> ModePair:
    """The nominal gains of one case of a run."""
    result = run(path, path.parent / f"{path.stem}-out", jobs=1)
    assert result.cases["state"].tolist() == ["done"] * len(result.cases), result.cases["state"].tolist()
    return pair_of(result, case)


def pair_of(result: Run, case: int = 1) -> ModePair:
    rows = result.curves[(result.curves["case"] == case) & (result.curves["draw"] == 0)]
    common, differential = (
        (rows[f"{name}_re"] + 1j * rows[f"{name}_im"]).to_numpy() for name in ("common", "differential")
    )
    return ModePair(rows["frequency_hz"].to_numpy(), common, differential)


@pytest.fixture(scope="module")
def both(tmp_path_factory: pytest.TempPathFactory) -> tuple[Run, Run]:
    """The same stage as an own circuit and built in."""
    found = []
    for name, text in (("own", OWN), ("built-in", BUILT_IN)):
        folder = tmp_path_factory.mktemp(name)
        path = spec_in(folder, text.replace("SAMPLING", "random"), THREE_OPAMPS, "three.cir")
        found.append(run(path, folder / "out", jobs=1, page=True))
    return found[0], found[1]


# The built-in stage is the truth.


def test_an_own_circuit_equals_the_built_in_stage_that_it_copies(both: tuple[Run, Run]) -> None:
    own, built_in = both
    np.testing.assert_allclose(
        own.curves["cmrr_db"], built_in.curves["cmrr_db"], rtol=0, atol=SAME_CIRCUIT_DB
    )
    assert own.cases.columns.tolist() == built_in.cases.columns.tolist()
    for column in own.cases.select_dtypes("number"):
        np.testing.assert_allclose(own.cases[column], built_in.cases[column], rtol=1e-7, err_msg=column)
    assert own.verdicts["verdict"].tolist() == built_in.verdicts["verdict"].tolist()


def test_its_boards_are_the_same_by_name(both: tuple[Run, Run]) -> None:
    own, built_in = (pd.read_parquet(one.folder / "quantiles.parquet") for one in both)
    np.testing.assert_allclose(own.to_numpy(), built_in.to_numpy(), rtol=1e-6)
    own, built_in = (pd.read_csv(one.folder / "worst_boards.csv") for one in both)
    pd.testing.assert_frame_equal(own, built_in, rtol=1e-12)


@pytest.mark.parametrize("sampling", ["random", "latin-hypercube", "sobol"])
def test_its_draws_are_the_same_in_each_way_of_sampling(sampling: str, tmp_path: Path) -> None:
    tables = []
    for name, text in (("own", OWN), ("built-in", BUILT_IN)):
        (tmp_path / name).mkdir()
        path = spec_in(tmp_path / name, text.replace("SAMPLING", sampling), THREE_OPAMPS, "three.cir")
        result = run(path, tmp_path / name / "out", jobs=1, draw=17)
        tables.append(pd.read_csv(result.folder / "board.csv"))
    own, built_in = (table.sort_values(["case", "part"], ignore_index=True) for table in tables)
    pd.testing.assert_frame_equal(own, built_in, rtol=0, atol=0)
    assert set(own["part"]) >= {"R1", "RG", "C4", "A2.cmrr", "A1.gain_bandwidth"}


def test_its_budget_is_that_of_the_built_in_stage_but_for_what_names_two_sides(both: tuple[Run, Run]) -> None:
    budgets = []
    for one in both:
        spec = read_spec(one.spec.path)
        sweep = expand(spec)
        with worker_pool() as factory, BatchSolver(factory, 1) as solver:
            budgets += budget_cases(sweep, solver, plan_analyses(spec.frequency), [1])
    own, built_in = ({c.name: c for c in budget.contributions} for budget in budgets)
    tolerances = [name for name, one in built_in.items() if one.kind == "tolerance"]
    assert tolerances == [name for name, one in own.items() if one.kind == "tolerance"]
    for name in (*tolerances, "RREF", "RI", "A1.cmrr"):
        # Central differences of rho: each of some 1e-5 with the solve's round-off of 1e-12.
        np.testing.assert_allclose(own[name].rho, built_in[name].rho, rtol=1e-5, atol=1e-11, err_msg=name)
    # Which of an own circuit's parts stand side by side is not known.
    assert {name for name, one in own.items() if one.kind == "nominal"} == {"RREF", "RI"}
    assert {name for name, one in built_in.items() if one.kind == "nominal"} > {"RREF", "RI"}


# An independent solution of the example.


def telluric(network: Network, plus: str, minus: str, ref: str) -> None:
    """The example's circuit, written down a second time."""
    for name, node in (("CW1", plus), ("CW2", minus)):
        network.capacitor(name, node, "screen")
    network.capacitor("CSE", "screen", "0")
    network.resistor("RLINK", "screen", "0")
    for side, node, inner in (("1", plus, "a"), ("2", minus, "b")):
        network.capacitor(f"CIN{side}", node, inner)
        network.resistor(f"RIN{side}", inner, ref)
        network.opamp(f"A{side}", inner, f"s{side}", f"o{side}")
        network.resistor(f"RF{side}", f"o{side}", f"s{side}")
        network.resistor(f"RG{side}", f"s{side}", "middle")
    network.resistor("R1", "o2", "n")
    network.resistor("R2", "n", "out")
    network.resistor("R3", "o1", "p")
    network.resistor("R4", "p", ref)
    network.opamp("A3", "p", "n", "out")
    network.opamp("A4", "middle", "drive", "drive")
    network.resistor("RGUARD", "drive", "screen")


@pytest.fixture(scope="module")
def example(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(EXAMPLE, tmp_path_factory.mktemp("example") / "out", jobs=1)


def test_the_example_agrees_with_the_dense_solution(example: Run) -> None:
    sweep = expand(read_spec(EXAMPLE))
    for case in range(1, sweep.count + 1):
        pair = pair_of(example, case)
        common, differential = solve_dense(telluric, drawn_case(sweep, case).parts, pair.frequency_hz)
        # 1e-10 V of round-off in the 5e-5 V and more that common mode leaves at the output are 2e-5 dB.
        expected_db = -20 * np.log10(np.abs(common / differential))
        np.testing.assert_allclose(pair.cmrr_db, expected_db, rtol=0, atol=1e-3, err_msg=str(case))
        np.testing.assert_allclose(pair.differential_gain, differential, rtol=1e-6)


def test_the_guard_of_the_example_is_worth_what_theory_says(tmp_path: Path) -> None:
    """Closed form, first order: rho = s r C d, with d the share by which the screen stays behind.

    From the currents into the screen, its resistor against its capacitances: d = s R CSE/(1 + s R (CSE + CW1 + CW2)).
    """
    (tmp_path / "circuits").mkdir()
    (tmp_path / "circuits/telluric-input.cir").write_text(
        (EXAMPLES / "circuits/telluric-input.cir").read_text()
    )
    text = re.sub(r"tolerance:\n(  .*\n)*", "", EXAMPLE.read_text())
    text = re.sub(r"(A\d): low-bias-jfet", r"\1: ideal", text).replace(
        "[low-bias-jfet, micropower-cmos]", "[ideal]"
    )
    text += "opamps: {ideal: {open_loop_gain: 180 dB, gain_bandwidth: 10 GHz}}\n"
    # Inputs that draw nothing, so that the cables are all there is.
    text = text.replace("  load: 10k\n", "  load: 10k\n  parts: {RIN1: 1T, RIN2: 1T}\n")
    (tmp_path / "spec.yaml").write_text(text)
    result = run(tmp_path / "spec.yaml", tmp_path / "out", jobs=1)
    s = 2j * np.pi * 50.0
    for row in result.cases.to_dict("records"):
        guard = row["stage.parts.RGUARD"]
        behind = s * guard * 10e-9 / (1 + s * guard * 20e-9) if row["stage.parts.RLINK"] > 1 else 1.0
        expected_db = -20 * np.log10(abs(s * 1e3 * 5e-9 * behind))
        # Of the order of s times 2.5 kohm times 5 nF, 0.004 at 50 Hz, nothing more is in the form: 0.04 dB.
        assert row["cmrr_db_at_50hz"] == pytest.approx(expected_db, abs=0.04)


# Closed forms.

RLC = """* a resonator in the plus leg
.subckt rlc p n out
RA  p a 1k
L1  a out 10m
CA  out 0 1n
RN  n 0 1k
.ends
"""


def test_an_inductor_is_a_part(tmp_path: Path) -> None:
    """Closed form: H = 1/(1 + s R C + s^2 L C); the minus leg does nothing, so A_cm = H and A_dm = H/2."""
    text = small(
        "rlc", "plus, minus, output", frequency="{start: 1k, stop: 300k, points_per_decade: 20, spots: [50k]}"
    )
    path = spec_in(tmp_path, text + "vary: {stage.parts.L1: [10m, 22 mH]}\n", RLC)
    result = run(path, tmp_path / "out", jobs=1)
    for case, inductance in ((1, 10e-3), (2, 22e-3)):
        pair = pair_of(result, case)
        s = 2j * np.pi * pair.frequency_hz
        answer = 1 / (1 + s * 1e3 * 1e-9 + s**2 * inductance * 1e-9)
        np.testing.assert_allclose(pair.common_gain, answer, rtol=1e-9)
        np.testing.assert_allclose(pair.differential_gain, answer / 2, rtol=1e-9)


TRANSFORMER = """* nothing that has a value of its own
.subckt transformer p n out
L1 p n 1
L2 out 0 4
K1 L1 L2 0.5
.ends
"""


def test_a_circuit_may_have_no_part_at_all(tmp_path: Path) -> None:
    """Closed form: A_dm = k sqrt(L2/L1) = 1, and no common mode passes, which is above the floor."""
    text = small("transformer", "plus, minus, output")
    result = run(spec_in(tmp_path, text, TRANSFORMER), tmp_path / "out", jobs=1)
    assert result.cases["differential_gain"].tolist() == pytest.approx([1.0], rel=1e-9)
    assert "lowest" in result.cases["above_floor"][0]


PAIR = """* a transistor pair with a resistor for a tail: a circuit without an op-amp's place
.model q0 npn(is=1e-15 bf=1e6)
.subckt pair p n vcc vee out
RC1 vcc c1 10k
RC2 vcc out 10k
Q1  c1 p e q0
Q2  out n e q0
RE  e vee 20k
.ends
"""


def test_a_transistor_pair_has_the_rejection_of_its_tail(tmp_path: Path) -> None:
    """Closed form at one collector: CMRR = (1 + 2 gm RE)/2 with gm = I/(2 VT), the tail's I from 15 V - VBE."""
    text = small("pair", "plus, minus, positive_supply, negative_supply, output", "  supplies: [15, -15]\n")
    pair = solved(spec_in(tmp_path, text, PAIR))
    thermal = 1.380649e-23 * 300.15 / 1.602176634e-19
    current = 7e-4
    for _ in range(50):
        current = (15 - thermal * np.log(current / 2 / 1e-15)) / 20e3
    gm = current / 2 / thermal
    # 0.1 %: ngspice's constants and its gmin.
    assert np.abs(pair.differential_gain[0]) == pytest.approx(gm * 10e3 / 2, rel=1e-3)
    assert pair.cmrr_db[0] == pytest.approx(20 * np.log10((1 + 2 * gm * 20e3) / 2), abs=0.01)


REMAINDER = """* a difference stage whose op-amp is followed by a buffer: what else a circuit may hold
.subckt half a b
R1 a b 5k
R2 a b 5k
.ends
.subckt buffered p n ref out
R1  n s {k}
R2  s out {k}
R3  p q {k}
R4  q ref {k}
XA1 q s y opamp
E1  z 0 y 0 1
L1  z w 1u
L2  w 0 1u
K1  L1 L2 0.5
RW  w v 1
Xh  z out half
.param k=10k
.ends
"""


def test_the_remainder_is_solved_with_the_parts(tmp_path: Path) -> None:
    """Closed form with R4 = R (1 + d), the others R: A_cm = d/(2 + d), A_dm = (1 + 2 (1 + d)/(2 + d))/2.

    What buffers the op-amp inside the loop does not matter.
    """
    text = small("buffered", "plus, minus, reference, output", "  opamp: ideal\n  parts: {R4: 10.1k}\n")
    text += "opamps: {ideal: {open_loop_gain: 160 dB, gain_bandwidth: 1 GHz}}\n"
    path = spec_in(tmp_path, text, REMAINDER)
    pair = solved(path)
    differential = (1 + 2.02 / 2.01) / 2
    # A loop gain of 1e8.
    assert pair.cmrr_db[0] == pytest.approx(20 * np.log10(differential / (0.01 / 2.01)), abs=1e-5)
    assert np.abs(pair.differential_gain[0]) == pytest.approx(differential, rel=1e-7)
    spec = read_spec(path)
    assert dict(spec.circuit.values) == {"R1": 1e4, "R2": 1e4, "R3": 1e4, "R4": 1e4, "RW": 1.0}
    deck = next(iter(plan_batches(expand(spec)))).deck
    # All linear, so nothing asks for an operating point.
    assert ".option noopac" in deck.text
    assert not deck.nonlinear


# Imported op-amps in an own circuit.

DIFFERENCE = """* the difference stage
.subckt diff p n ref vcc vee out
R1 n s 10k
R2 s out 10k
R3 p q 10k
R4 q ref 10.01k
XA1 PLACE opamp
.ends
"""
THREE, FIVE = "q s out", "q s vcc vee out"
FIVE_PINS = "pins: [plus, minus, positive_supply, negative_supply, output]"


def with_imported(place: str, opamp: str, supplies: str = "[15, -15]") -> tuple[str, str]:
    circuit = DIFFERENCE.replace("PLACE", place)
    ports = "plus, minus, reference, positive_supply, negative_supply, output"
    text = small("diff", ports, f"  supplies: {supplies}\n  opamp: mine\n  load: 10k\n")
    return text + f"opamps:\n  mine: {{{opamp}}}\n", circuit


def test_an_imported_op_amp_takes_a_place_of_three_nodes(tmp_path: Path) -> None:
    (tmp_path / "amp.lib").write_text(LINEAR)
    curves = []
    for opamp in ("file: amp.lib, subcircuit: amp, pins: [plus, minus, output]", SAME_AS_LINEAR):
        text, circuit = with_imported(THREE, opamp)
        curves.append(solved(spec_in(tmp_path, text, circuit)).cmrr_db)
    # Two decks, so other pivots: 1e-10 V of the 1e-4 V of common-mode output are 1e-5 dB.
    np.testing.assert_allclose(curves[0], curves[1], rtol=0, atol=1e-4)


def test_a_place_of_five_nodes_has_the_circuits_supplies(tmp_path: Path) -> None:
    (tmp_path / "b.lib").write_text(Boyle().text())
    own_supplies = f"file: b.lib, subcircuit: boyle, {FIVE_PINS}, supplies: [15, -15]"
    curves = []
    for place in (THREE, FIVE):
        text, circuit = with_imported(place, own_supplies)
        curves.append(solved(spec_in(tmp_path, text, circuit)).cmrr_db)
    np.testing.assert_allclose(curves[1], curves[0], rtol=0, atol=1e-6)
    # Its inputs are at 0 V; the circuit's supplies, not the candidate's own, say that this is out of reach.
    text, circuit = with_imported(FIVE, own_supplies, "[30, 5]")
    result = run(spec_in(tmp_path, text, circuit), tmp_path / "high", jobs=1)
    assert "A1's plus input is at " in result.cases["state"][0]
    assert "with supplies of 30 V and 5 V" in result.cases["state"][0]


def test_a_guard_driver_is_not_taken_for_saturated(tmp_path: Path) -> None:
    """In differential mode it has nothing to do, and between its inputs there is nothing but round-off."""
    (tmp_path / "circuits").mkdir()
    (tmp_path / "circuits/telluric-input.cir").write_text(
        (EXAMPLES / "circuits/telluric-input.cir").read_text()
    )
    (tmp_path / "amp.lib").write_text(LINEAR)
    text = re.sub(r"tolerance:\n(  .*\n)*", "", EXAMPLE.read_text())
    text = text.replace("[low-bias-jfet, micropower-cmos]", "[mine, same]")
    text = re.sub(r"(A\d): low-bias-jfet", r"\1: mine", text)
    mine = "{file: amp.lib, subcircuit: amp, pins: [plus, minus, output]}"
    text += f"opamps:\n  mine: {mine}\n  same: {{{SAME_AS_LINEAR}}}\n"
    (tmp_path / "spec.yaml").write_text(text)
    cases = run(tmp_path / "spec.yaml", tmp_path / "out", jobs=1).cases
    assert cases["state"].tolist() == ["done"] * 8
    by_guard = cases.set_index("stage.opamps.A4")["cmrr_db_at_1000hz"]
    np.testing.assert_allclose(by_guard["mine"], by_guard["same"], rtol=0, atol=1e-3)


# What a run leaves behind.


@needs_ngspice
def test_the_deck_runs_alone_to_the_same_curve(example: Run, tmp_path: Path) -> None:
    sweep = expand(read_spec(EXAMPLE))
    (block, *_) = sweep.blocks
    structure = structures(built_stage(sweep.spec, block), block.parts, len(block.case))[0]
    vectors = run_ngspice(structure.text(0) + "\n.ac dec 15 0.1 20000.0\n.end\n", tmp_path)
    pair = pair_of(example, int(block.case[0]))
    grid = sweep.spec.frequency.grid_hz
    on_grid = [int(np.abs(pair.frequency_hz - f).argmin()) for f in grid]
    cmrr_db = 20 * np.log10(np.abs(vectors["out_d"] / vectors["out_c"]))
    # The program writes the same doubles; in process the deck was loaded and altered, which costs 1e-7 dB.
    np.testing.assert_allclose(pair.cmrr_db[on_grid], cmrr_db, rtol=0, atol=1e-6)


def test_a_run_is_read_again_without_its_circuits_file(both: tuple[Run, Run], tmp_path: Path) -> None:
    own, _ = both
    file = Path(own.spec.path).parent / "own/three.cir"
    text = file.read_text()
    file.unlink()
    try:
        again = open_run(own.folder)
        assert again.spec.circuit is not None
        assert again.spec.vocabulary.own_parts == own.spec.vocabulary.own_parts
        assert again.spec.circuit.digest == own.spec.circuit.digest
        assert again.cases["state"].tolist() == ["done", "done"]
        compare_runs([again], by=["stage.parts.R1"])
        command = [*COMMAND, "run", own.spec.path, "-o", str(tmp_path / "gone")]
        result = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)
    finally:
        file.write_text(text)
    assert result.returncode == 2
    assert "stage.file: own/three.cir is no file that can be read (looked for" in result.stderr
    assert not (tmp_path / "gone").exists()


def test_the_record_keeps_what_a_spec_needs(both: tuple[Run, Run]) -> None:
    kept: dict[str, Any] = json.loads((both[0].folder / "run.json").read_text())["circuit"]
    assert kept["file"] == "own/three.cir"
    assert kept["subcircuit"] == "inamp"
    assert kept["opamps"] == ["A1", "A2", "A3"]
    assert kept["values"]["RF2"] == 10e3
    assert "circuit" not in json.loads((both[1].folder / "run.json").read_text())


def test_a_run_of_another_circuit_does_not_go_on(tmp_path: Path) -> None:
    path = spec_in(tmp_path, OWN.replace("SAMPLING", "random"), THREE_OPAMPS, "three.cir")

    def key() -> Mapping[str, str]:
        sweep = expand(read_spec(path))
        return run_key(sweep, plan_batches(sweep), plan_analyses(sweep.spec.frequency), 64, 0)

    before = key()
    (tmp_path / "own/three.cir").write_text("* another comment\n" + THREE_OPAMPS)
    assert key() == before
    for changed in (
        THREE_OPAMPS.replace("s2 200", "s2 201"),
        THREE_OPAMPS.replace("C4  p1 ref", "C4  p1 out"),
    ):
        (tmp_path / "own/three.cir").write_text(changed)
        assert {name for name, text in key().items() if text != before[name]} == {"stage", "circuits"}


def test_two_circuits_do_not_share_a_deck(tmp_path: Path) -> None:
    keys = []
    for circuit in (THREE_OPAMPS, THREE_OPAMPS.replace("C4  p1 ref", "C4  p1 out")):
        path = spec_in(tmp_path, OWN.replace("SAMPLING", "random"), circuit, "three.cir")
        keys.append(plan_batches(expand(read_spec(path)))[0].structure.key)
    assert keys[0] != keys[1]


def test_the_page_and_the_summary_tell_of_the_circuit(both: tuple[Run, Run]) -> None:
    page = (both[0].folder / "report.html").read_text()
    text = re.sub(r"<[^>]+>", " ", page)
    assert "subcircuit inamp of own/three.cir, which is not drawn, and its source" in text
    assert re.search(r"\bRG\s+200 Ω\s", text)
    assert re.search(r"\bR1\s+10 kΩ, 10\.1 kΩ\s", text)
    summary = (both[0].folder / "summary.md").read_text()
    assert "| circuit | subcircuit inamp of own/three.cir, sha256 " in summary
    assert "| parts | R4 10.01 kΩ, A2.gain\\_bandwidth 7 MHz |" in summary
    assert "| parts in its file | RF1 10 kΩ, CF1 10 pF, " in summary


def test_a_topology_axis_mixes_the_circuit_with_built_in_stages(tmp_path: Path) -> None:
    text = OWN.replace("SAMPLING", "random").replace("  topology: netlist\n", "")
    text = text.replace("stage.parts.R1: [10k, 10.1k]", "stage.topology: [netlist, three-opamp]")
    text = re.sub(
        r"parts: \{.*\}", "parts: {R4: 10.01k, RF1: 10k, RF2: 10k, R1: 10k, R2: 10k, R3: 10k, RG: 200}", text
    )
    # The capacitors in the file are the own circuit's alone.
    text = text.replace("    - {of: [C2, C4], absolute: 5 %}\n", "    - {of: [CF1], absolute: 5 %}\n")
    result = run(spec_in(tmp_path, text, THREE_OPAMPS, "three.cir"), tmp_path / "out", jobs=1)
    assert result.cases["state"].tolist() == ["done", "done"]
    sweep = expand(read_spec(tmp_path / "spec.yaml"))
    assert [block.topology for block in sweep.blocks] == ["netlist", "three-opamp"]
    assert "CF1" in sweep.blocks[0].parts
    assert "CF1" not in sweep.blocks[1].parts
    assert sweep.own_circuit.tolist() == [True, False]


@pytest.mark.parametrize(
    ("command", "status", "said"),
    [
        (["check", "SPEC", "-o", "OUT"], 0, "PASS: 2 of 2 cases pass"),
        (["budget", "SPEC", "-o", "OUT"], 0, "A1.cmrr"),
        (["tighten", "SPEC", "--set", "0"], 0, "is tight enough"),
        (["netlist", "SPEC", "--case", "2"], 0, "R1_c o2_n_c n1_n_c 10100.0"),
        (["compare", "SPEC", "--by", "stage.parts.R1"], 0, "R1 10k"),
        (["run", "SPEC", "-o", "OUT", "--jobs", "2", "--resume"], 0, "case     R1"),
    ],
)
def test_every_command_takes_an_own_circuit(
    command: list[str], status: int, said: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)  # compare runs a spec into runs/ there
    text = OWN.replace("SAMPLING", "random").replace("{of: [C2, C4]", "{of: [CF1]")
    path = spec_in(tmp_path, text, THREE_OPAMPS, "three.cir")
    arguments = [{"SPEC": str(path), "OUT": str(tmp_path / "out")}.get(word, word) for word in command]
    result = CliRunner().invoke(app, arguments)
    assert result.exit_code == status, result.output
    assert said in result.output


def test_a_changed_circuit_is_among_what_changed_since_a_baseline(tmp_path: Path) -> None:
    path = spec_in(tmp_path, OWN.replace("SAMPLING", "random"), THREE_OPAMPS, "three.cir")
    runner = CliRunner()
    assert runner.invoke(app, ["check", str(path), "-o", str(tmp_path / "a"), "--accept"]).exit_code == 0
    (tmp_path / "own/three.cir").write_text(THREE_OPAMPS.replace("s2 200", "s2 220"))
    said = runner.invoke(app, ["check", str(path), "-o", str(tmp_path / "b")]).output
    assert re.search(r"stage\.parts\.RG\W+was 200\b.*220|stage\.parts\.RG.*200.*220", said), said


def test_gains_are_read_in_the_passband(example: Run) -> None:
    """Closed form: two capacitors and their resistors make one corner, 1/(2 pi 22 nF 22 Mohm) = 329 mHz."""
    row = example.cases.iloc[0]
    assert row["differential_gain"] == pytest.approx(9.0, rel=1e-3)
    # Read on a grid of 15 points a decade: straight lines in dB between them cost 1 %.
    assert row["lower_corner_hz"] == pytest.approx(1 / (2 * np.pi * 22e-9 * 22e6), rel=0.02)
    assert 12e3 < row["bandwidth_hz"] < 13e3
    spread = (row["differential_gain_p99"] - row["differential_gain_p1"]) / row["differential_gain"]
    # The capacitors' 1 % moves the corner, not the gain: at the lowest frequency it would be 2 %.
    assert spread < 1e-4
    names = example.cases.columns.tolist()
    assert names.index("lower_corner_hz") == names.index("bandwidth_hz") + 1


def test_a_stage_without_the_own_circuit_is_restored_but_not_solved(both: tuple[Run, Run]) -> None:
    again = open_run(both[0].folder)
    with pytest.raises(
        ValueError, match=r"must be read with read_circuit, to have a circuit that can be solved"
    ):
        plan_batches(expand(again.spec))


def test_a_part_at_zero_farad_is_not_there(tmp_path: Path) -> None:
    text = small("rlc", "plus, minus, output", "  parts: {CA: 0}\n  load: 1k\n")
    pair = solved(spec_in(tmp_path, text, RLC))
    assert np.abs(pair.common_gain[0]) == pytest.approx(0.5, rel=1e-6)
    summary = (tmp_path / "spec-out" / "summary.md").read_text()
    assert "| parts | CA 0 F |" in summary
    assert "| parts in its file | RA 1 kΩ, L1 10 mH, RN 1 kΩ |" in summary


def test_the_own_circuit_in_the_readme_is_one(tmp_path: Path) -> None:
    readme = (EXAMPLES.parent.parent / "README.md").read_text()
    blocks = re.findall(r"^```yaml\n(.*?)^```", readme, re.MULTILINE | re.DOTALL)
    (stage,) = [block for block in blocks if "topology: netlist\n" in block]
    (tmp_path / "circuits").mkdir()
    name = "circuits/telluric-input.cir"
    (tmp_path / name).write_text((EXAMPLES / name).read_text())
    (tmp_path / "spec.yaml").write_text(stage + f"frequency: {BAND}\n")
    sweep = expand(read_spec(tmp_path / "spec.yaml"))
    assert sweep.blocks[0].parts["RGUARD"] == 220
    assert sweep.blocks[0].parts["A4.gain_bandwidth"] == 200e3
    spice = re.search(r"^```spice\n(.*?)^```", readme, re.MULTILINE | re.DOTALL)
    lines = [line for line in (spice[1] if spice else "").splitlines() if line != "..."]
    file = re.sub(" +", " ", (EXAMPLES / name).read_text())
    assert len(lines) == 4
    assert all(re.sub(" +", " ", line) in file for line in lines)


CONFUSABLE = """* names that a copy of another part, or of an inner element of an op-amp, has
.subckt amp p n ref out
R1 n x 10k
R2 x out 10k
R3 p y 10k
R4 y ref 10k
R1_C y ref 1meg
R1_D x ref 1meg
R1_M x ref 1meg
C1 x out 1n
C1_C y ref 1n
RA1G_D y ref 1meg
RSP_C x ref 1meg
XA1 y x out opamp
.ends
"""


def test_every_part_keeps_its_own_value_whatever_it_is_called(tmp_path: Path) -> None:
    """Each case, altered from the one before, against a deck of its own that is loaded afresh."""
    varied = ("R1", "R1_C", "R1_D", "R1_M", "C1", "C1_C", "RA1G_D", "RSP_C")
    axes = "".join(
        f"  stage.parts.{name}: {'[1n, 2n]' if name.startswith('C') else '[10k, 25k]'}\n" for name in varied
    )
    text = small("amp", "plus, minus, reference, output", "  opamp: good\n").replace(
        "frequency:",
        "source: {resistance: 100}\nopamps: {good: {open_loop_gain: 120 dB, gain_bandwidth: 1M}}\nfrequency:",
    )
    sweep = expand(read_spec(spec_in(tmp_path, f"{text}vary:\n{axes}", CONFUSABLE)))
    analyses = plan_analyses(sweep.spec.frequency)
    for plan in plan_batches(sweep):
        solved_batch = solve_batch(plan.batch(), analyses)
        assert not solved_batch.failures
        for gains, row in list(zip(solved_batch.gains, plan.rows.tolist(), strict=True))[::5]:
            engine().load(plan.structure.text(row))
            np.testing.assert_allclose(
                gains, analyses.solve(engine(), ("out_c", "out_d")), rtol=1e-6, atol=1e-10
            )
