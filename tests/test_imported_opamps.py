"""Imported op-amps: on the bench, in sweeps, about an operating point that is checked.

Kinds of truth: the design equations of a published macromodel; a linear model file against the built-in
macromodel of the same values; ngspice on its own with the deck that a run leaves behind.
"""

from __future__ import annotations

import json
import math
import os
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from modepair.circuits import Bias, built_stage, candidates, imported_models, structures
from modepair.circuits.bench import bench_netlist, imported_mounting
from modepair.reports.bench import Bench, bench_figures
from modepair.reports.model_warnings import bench_warnings
from modepair.runner import run
from modepair.runner.bench_run import known_opamps
from modepair.runner.cli.app import app
from modepair.runner.engine import engine
from modepair.runner.errors import SimulationError
from modepair.runner.sweep import Run
from modepair.sweeps import Opamp, SpecError, expand, load_spec, read_candidates
from tests.boyle import Boyle
from tests.spice_process import needs_ngspice, run_ngspice

FREQUENCY = np.geomspace(1e-3, 1e9, 601)
FIVE = "pins: [plus, minus, positive_supply, negative_supply, output], supplies: [15, -15]"

LINEAR = """* A linear op-amp: one pole, CMRR of 1e4, output resistance, an input resistance.
.subckt amp p n o
g1 0 g p n 1e-4
gc 0 g p 0 5e-9
gd 0 g n 0 5e-9
r1 g 0 1e9
c1 g 0 {1e-4/6.283185307179586e6}
e1 i 0 g 0 1
ro i o 75
rid p n 2meg
.ends
"""
SAME_AS_LINEAR = (
    "open_loop_gain: 100 dB, gain_bandwidth: 1 MHz, cmrr: 80 dB, "
    "input_resistance_differential: 2M, output_resistance: 75"
)

SPEC = """title: Imported
stage: {topology: difference, parts: {R1: 10k, R2: 10k, R3: 10k, R4: 10.01k}, opamp: STAGE_OPAMP, load: 10k}
source: {resistance: 100, cable_capacitance: 1n}
frequency: {start: 1, stop: 100k, points_per_decade: 10, spots: [50]}
"""


def measured(path: Path, name: str) -> Bench:
    """Measure a candidate of a file with this process's own engine."""
    opamps = read_candidates(path)
    mounting = imported_mounting(imported_models([name], opamps)[name])
    text, vectors = bench_netlist(mounting)
    engine().load(text, nonlinear=True)
    return Bench.from_solve(
        name, FREQUENCY, engine().analyse("ac dec 50 0.001 1000000000.0", FREQUENCY, vectors)
    )


def write(folder: Path, models: dict[str, str], opamps: dict[str, str]) -> Path:
    for name, text in models.items():
        (folder / name).write_text(text)
    path = folder / "mine.yaml"
    path.write_text("opamps:\n" + "".join(f"  {name}: {{{text}}}\n" for name, text in opamps.items()))
    return path


def spec_in(folder: Path, opamps: dict[str, str], *, opamp: str = "mine", further: str = "") -> Path:
    path = folder / "spec.yaml"
    given = "".join(f"  {name}: {{{text}}}\n" for name, text in opamps.items())
    path.write_text(SPEC.replace("STAGE_OPAMP", opamp) + further + f"opamps:\n{given}")
    return path


@pytest.mark.parametrize(
    "design",
    [
        Boyle(),
        Boyle(gain=1e6, unity_hz=3e6, margin_deg=70, cmrr=1e5, slew=2e6, beta=80, output_ohm=90),
        Boyle(gain=3e4, unity_hz=2e5, cmrr=2e3, slew=1e5, beta=300, output_ohm=600),
    ],
)
def test_bench_gives_what_the_design_equations_predict(design: Boyle, tmp_path: Path) -> None:
    path = write(tmp_path, {"b.lib": design.text()}, {"b": f"file: b.lib, subcircuit: BOYLE, {FIVE}"})
    one = measured(path, "b")
    figures = bench_figures(one)
    for name, predicted in design.figures().items():
        # The equations leave out that the tail resistor takes a little of the tail current (up to 0.4 % here).
        assert figures[name] == pytest.approx(predicted, rel=1e-2), name
    (warning,) = bench_warnings(one, {})
    assert "CMRR does not depend on frequency" in warning


def test_a_model_that_is_not_as_declared_is_told(tmp_path: Path) -> None:
    path = write(
        tmp_path,
        {"b.lib": Boyle().text()},
        {"b": f"file: b.lib, subcircuit: boyle, {FIVE}, cmrr: 100 dB, gain_bandwidth: 1 MHz"},
    )
    result = CliRunner().invoke(app, ["opamp", "--file", str(path)])
    text = " ".join(result.output.split())
    assert "WARNING b: CMRR of the model is 89.5 dB, declared is 100.0 dB: 10.5 dB less." in text
    assert "supply rejection positive" in text
    assert text.index("WARNING") < text.index("measured")


@pytest.fixture(scope="module")
def both(tmp_path_factory: pytest.TempPathFactory) -> Run:
    """One run with a linear model, the macromodel of the same values, and a second model of other values."""
    folder = tmp_path_factory.mktemp("both")
    (folder / "amp.lib").write_text(LINEAR)
    (folder / "other.lib").write_text(LINEAR.replace("5e-9", "5e-8"))
    pins = "subcircuit: amp, pins: [plus, minus, output]"
    path = spec_in(
        folder,
        {
            "mine": f"file: amp.lib, {pins}",
            "other": f"file: other.lib, {pins}",
            "same": SAME_AS_LINEAR,
        },
        further="vary: {stage.opamp: [mine, other, same], source.imbalance: [0, 10]}\n",
    )
    return run(path, folder / "out", jobs=1)


def test_a_linear_model_gives_the_curve_of_the_macromodel_of_its_values(both: Run) -> None:
    curves = both.curves.set_index(["case", "frequency_hz"])["cmrr_db"]
    for imported, same in ((1, 5), (2, 6)):
        # Two decks, so other pivots: 1e-10 V of the 1e-4 V of common-mode output are 1e-5 dB.
        np.testing.assert_allclose(curves[imported], curves[same], atol=1e-4)


def test_models_do_not_share_a_deck(both: Run) -> None:
    at_50 = both.cases["cmrr_db_at_50hz"].tolist()
    assert at_50[0] == pytest.approx(at_50[4], abs=1e-3)
    assert abs(at_50[2] - at_50[0]) > 3
    record = json.loads((both.folder / "run.json").read_text())
    assert set(record["models"]) == {"mine", "other"}
    assert len(set(record["models"].values())) == 2
    assert record["opamps"]["mine"]["subcircuit"] == "amp"


def test_the_warning_stands_at_the_top_of_the_page(both: Run) -> None:
    page = (both.folder / "summary.md").read_text()
    assert page.index("**Warning:** mine: the model's CMRR does not depend on frequency") < page.index(
        "cases done"
    )
    assert "| op-amp mine | model amp.lib, subcircuit amp |" in page
    assert [text.split(":")[0] for text in both.warnings] == ["same", "mine", "other"]


def test_a_model_without_a_mechanism_is_told_by_run_check_and_compare(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)  # compare runs a spec into runs/ there
    (tmp_path / "amp.lib").write_text(re.sub(r"g[cd] .*\n", "", LINEAR))
    path = spec_in(
        tmp_path,
        {"mine": "file: amp.lib, subcircuit: amp, pins: [plus, minus, output]"},
        further="vary: {stage.opamp: [mine, fast-jfet]}\n",
    )
    out = tmp_path / "out"
    for arguments in (["run", str(path), "-o", str(out)], ["compare", str(path)], ["compare", str(out)]):
        result = CliRunner().invoke(app, arguments)
        assert "WARNING mine: the model has no CMRR mechanism" in result.output, arguments


@needs_ngspice
def test_the_deck_left_behind_runs_to_the_same_curve(tmp_path: Path) -> None:
    (tmp_path / "b.lib").write_text(Boyle().text())
    path = spec_in(tmp_path, {"mine": f"file: b.lib, subcircuit: boyle, {FIVE}"})
    result = run(path, tmp_path / "out", jobs=1)
    sweep = expand(result.spec)
    (block,) = sweep.blocks
    (structure,) = structures(built_stage(result.spec, block), block.parts, 1)
    alone = tmp_path / "alone"
    alone.mkdir()
    vectors = run_ngspice(structure.text(0) + "\n.ac dec 10 1.0 100000.0\n.end\n", alone)
    cmrr_db = 20 * np.log10(np.abs(vectors["out_d"] / vectors["out_c"]))
    curve = result.curves[result.curves["frequency_hz"] != 50]
    np.testing.assert_allclose(curve["cmrr_db"], cmrr_db, atol=1e-6)


def test_draws_and_budgets_work_with_an_imported_model(tmp_path: Path) -> None:
    (tmp_path / "b.lib").write_text(Boyle().text())
    tolerance = "tolerance: {draws: 20, parts: [{of: [R1, R2, R3, R4], absolute: 0.1 %}]}\n"
    path = spec_in(tmp_path, {"mine": f"file: b.lib, subcircuit: boyle, {FIVE}"}, further=tolerance)
    result = run(path, tmp_path / "out", jobs=1)
    assert result.cases["state"].tolist() == ["done"]
    # Closed form: four resistors at their edges, G = 1, with the nominal 0.1 % of R4: (1 + G)/(5 t), 52 dB.
    assert 50 < result.cases["cmrr_db_p1_at_50hz"].iloc[0] < 66


def states(folder: Path, opamps: dict[str, str], further: str = "", opamp: str = "mine") -> list[str]:
    result = run(spec_in(folder, opamps, further=further, opamp=opamp), folder / "out", jobs=1)
    return result.cases["state"].tolist()


def test_a_saturated_output_fails_its_own_cases_with_the_reason(tmp_path: Path) -> None:
    (tmp_path / "b.lib").write_text(Boyle().text())
    offset = Boyle().text().replace("q2 c2 inp e2 qx", "q2 c2 inq e2 qx\nvos inp inq dc OFFSET")
    # At a gain of 909, 20 mV of offset ask for 18 V, which the clamps stop short of; at 1 V nothing holds at all.
    for name, volts in (("mild", "20m"), ("gross", "1")):
        (tmp_path / f"{name}.lib").write_text(offset.replace("OFFSET", volts))
    opamps = {name: f"file: {name}.lib, subcircuit: boyle, {FIVE}" for name in ("b", "mild", "gross")}
    path = spec_in(
        tmp_path, opamps, opamp="b", further="vary: {stage.opamp: [b, mild, gross, general-purpose]}\n"
    )
    path.write_text(
        path.read_text().replace("R1: 10k, R2: 10k, R3: 10k, R4: 10.01k", "R1: 1k, R2: 1M, R3: 1k, R4: 1M")
    )
    result = run(path, tmp_path / "out", jobs=1)
    good, mild, gross, built_in = result.cases["state"].tolist()
    assert (good, built_in) == ("done", "done")
    for state in (mild, gross):
        assert re.match(
            r"failed: A1 needs [0-9.e+]+ times the input that it needs on the bench: at an operating point",
            state,
        ), state


def test_exchanged_pins_are_told_though_an_operating_point_is_found(tmp_path: Path) -> None:
    swapped = FIVE.replace("plus, minus", "minus, plus")
    path = write(tmp_path, {"b.lib": Boyle().text()}, {"b": f"file: b.lib, subcircuit: boyle, {swapped}"})
    assert "are plus and minus exchanged in pins?" in bench_warnings(measured(path, "b"), {})[0]


def test_inputs_that_are_not_between_the_supplies_fail_the_case(tmp_path: Path) -> None:
    (tmp_path / "amp.lib").write_text(
        LINEAR.replace("p n o", "p n vp vn o").replace("rid p n", "rs vp vn 1k\nrid p n")
    )
    pins = FIVE.replace("[15, -15]", "[30, 0]")
    (state,) = states(tmp_path, {"mine": f"file: amp.lib, subcircuit: amp, {pins}"})
    assert "with supplies of 30 V and 0 V, not between them" in state


@pytest.mark.parametrize(
    ("volts", "reason"),
    [
        ((0.0, 0.0, 1.0), ""),
        ((16.0, 16.0, 1.0), "A1's plus input is at 16 V with supplies of 15 V and -15 V, not between them"),
        ((0.0, -15.0, 1.0), "A1's minus input is at -15 V"),
        ((0.0, 0.0, 14.8), "A1's output is at 14.8 V with supplies of 15 V and -15 V, at a rail"),
        ((0.0, 0.0, -20.0), "A1's output is at -20 V"),
        (
            (0.3, 0.1, 12.6),
            "A1's inputs are 0.2 V apart at an output of 12.6 V, so that feedback does not hold it",
        ),
    ],
)
def test_an_operating_point_is_judged(volts: tuple[float, float, float], reason: str) -> None:
    fault = Bias("A1", "p", "n", "o", (15.0, -15.0)).fault(*volts)
    assert fault.startswith(reason)
    assert bool(fault) == bool(reason)


def test_no_operating_point_is_a_failure_not_a_curve() -> None:
    # A voltage that is 1 V when it is below 0.5 V, and 0 V when it is above.
    text = (
        ".title modepair\n.save v(a)\nB1 a 0 v = v(a) < 0.5 ? 1 : 0\nR1 a 0 1k\nV1 b 0 DC 0 AC 1\nR2 b a 1k\n"
    )
    engine().load(text, nonlinear=True)
    with pytest.raises(SimulationError, match=r"\S"):
        engine().operating_point(["a"])
    with pytest.raises(SimulationError, match=r"\S"):
        engine().analyse("ac lin 1 1.0 1.0", np.array([1.0]), ["a"])


def test_extra_pins_are_connected_as_named(tmp_path: Path) -> None:
    path = write(
        tmp_path,
        {"amp.lib": LINEAR.replace("p n o\n", "p n o sd ref nc\nrs sd 0 1k\nrr ref 0 1k\nrn nc 0 1k\n")},
        {"a": "file: amp.lib, subcircuit: amp, "
              "pins: [plus, minus, output, {shutdown: positive_supply}, ground, open], supplies: [5, -5]"},
    )  # fmt: skip
    (model,) = imported_models(["a"], read_candidates(path)).values()
    assert model.instance("A2", "x", "y", "z").nodes == ("x", "y", "z", "supply5p0", "0", "a2_open5")


def fault_texts(folder: Path, opamp: str, further: str = "") -> str:
    path = spec_in(folder, {"mine": opamp}, further=further)
    with pytest.raises(SpecError, match=r"spec\.yaml:") as caught:
        screened(path)
    return str(caught.value)


def screened(path: Path) -> None:
    spec = load_spec(path, candidates())
    built_stage(spec, expand(spec).blocks[0])


AMP = "file: amp.lib, subcircuit: amp, pins: [plus, minus, output]"


@pytest.fixture
def folder(tmp_path: Path) -> Iterator[Path]:
    (tmp_path / "amp.lib").write_text(LINEAR)
    return tmp_path


@pytest.mark.parametrize(
    ("opamp", "message"),
    [
        (
            "subcircuit: amp, open_loop_gain: 100 dB, gain_bandwidth: 1M",
            "subcircuit has no effect without file",
        ),
        ("file: amp.lib, pins: [plus, minus, output]", "opamps.mine: subcircuit is missing"),
        (
            "file: amp.lib, subcircuit: amp",
            "opamps.mine: pins is missing; it takes what each port of the subcircuit is",
        ),
        (AMP.replace("plus, ", ""), "plus is not among them; pins takes each of plus, minus and output once"),
        (AMP.replace("output", "output, output"), "output is there 2 times"),
        (
            AMP.replace("output", "outputt"),
            "outputt is nothing that a pin is connected to; did you mean output?",
        ),
        (AMP.replace("circuit: amp", "circuit: a b"), "a b is not a subcircuit's name"),
        (
            AMP.replace("output]", "output, positive_supply]"),
            "supplies is missing, which positive_supply needs",
        ),
        (AMP + ", supplies: [-15, 15]", "[-15, 15] is no pair of supplies"),
        (AMP + ", supplies: [15]", "[15] is no pair of supplies"),
        (AMP + ", supplies: [15k ohm, -15]", "15k ohm"),
        (AMP.replace("amp.lib", "gone.lib"), "gone.lib is no file that can be read (looked for"),
        (
            AMP.replace("subcircuit: amp", "subcircuit: ampp"),
            "amp.lib has no subcircuit ampp; did you mean amp?",
        ),
        (AMP.replace("output]", "output, ground]"), "4 pins are given, amp has 3 ports: p, n, o"),
    ],
)
def test_faults_of_a_candidate_are_told_where_they_stand(folder: Path, opamp: str, message: str) -> None:
    assert message in fault_texts(folder, opamp)


@pytest.mark.parametrize(
    ("further", "message"),
    [
        ("vary: {opamps.mine.cmrr: [80 dB, 90 dB]}\n", "vary.opamps.mine.cmrr: mine is an imported model"),
        (
            "vary: {stage.parts.A1.cmrr: [80 dB, 90 dB]}\n",
            "vary.stage.parts.A1.cmrr: A1 is an imported model",
        ),
        (
            "tolerance: {draws: 10, parts: [{of: [A1.cmrr], least: 80 dB}]}\n",
            "A1 is an imported model, which no parameter changes, so A1.cmrr cannot vary; take it out here",
        ),
    ],
)
def test_settings_without_effect_on_a_model_are_refused(folder: Path, further: str, message: str) -> None:
    assert message in fault_texts(folder, AMP, further)


def test_a_parameter_of_an_instance_is_taken_where_one_candidate_has_it(folder: Path) -> None:
    path = spec_in(
        folder,
        {"mine": AMP},
        further="vary: {stage.opamp: [mine, fast-jfet], stage.parts.A1.cmrr: [80 dB]}\n",
    )
    assert expand(load_spec(path, candidates())).count == 2


def test_a_hostile_model_is_refused_with_file_and_line(tmp_path: Path) -> None:
    canary = tmp_path / "canary.txt"
    path = write(
        tmp_path,
        {"a.lib": f"{LINEAR}*#shell touch {canary}\n.control\nshell touch {canary}\n.endc\n"},
        {"a": AMP.replace("amp.lib", "a.lib")},
    )
    result = CliRunner().invoke(app, ["opamp", "--file", str(path)])
    assert isinstance(result.exception, SpecError)
    assert re.search(r"a\.lib:12:1: ngspice runs this comment as a command", str(result.exception))
    assert not canary.exists()


def test_missing_code_models_are_named_with_the_remedy(tmp_path: Path) -> None:
    path = write(tmp_path, {"b.lib": Boyle().text()}, {"b": f"file: b.lib, subcircuit: boyle, {FIVE}"})
    # Without its scripts ngspice does not load the code models, as where they are not installed.
    environment = {**os.environ, "SPICE_SCRIPTS": str(tmp_path)}
    program = "from modepair.runner.cli.app import main; main()"
    done = subprocess.run(
        [sys.executable, "-c", program, "opamp", "--file", str(path)],
        env=environment, capture_output=True, text=True, timeout=120, check=False,
    )  # fmt: skip
    assert done.returncode == 3
    assert "POLY and TABLE need ngspice's code models" in done.stdout
    assert "apt-get install ngspice" in done.stdout


def test_a_changed_model_file_is_screened_again(folder: Path) -> None:
    path = write(folder, {}, {"a": AMP})
    before = imported_models(["a"], read_candidates(path))["a"].text
    (folder / "amp.lib").write_text(LINEAR.replace("75", "150"))
    assert imported_models(["a"], read_candidates(path))["a"].text != before


def test_a_candidate_is_a_macromodel_or_a_model(folder: Path) -> None:
    path = write(folder, {}, {"a": AMP + ", cmrr: 80 dB"})
    opamp = known_opamps(None, path)["a"]
    assert isinstance(opamp, Opamp)
    assert opamp.parameters == {}
    assert opamp.declared == {"cmrr": pytest.approx(1e4)}
    assert math.isclose(20 * math.log10(opamp.declared["cmrr"]), 80)
