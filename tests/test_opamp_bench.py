"""The op-amp bench: what it measures of a macromodel is what the macromodel was given.

Kind of truth: closed form, the macromodel's own equations: A0, GBW = A0 f1, the phase margin that sets the
second pole, k(f) = (1 + jf/fc)/CMRR, and its impedances.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from modepair.circuits import candidates
from modepair.circuits.bench import Mounting, bench_netlist, macromodel_mounting
from modepair.reports.bench import Bench, bench_figures, compare_figures
from modepair.reports.bench_tables import BenchPage
from modepair.reports.model_warnings import bench_warnings, parameter_warnings
from modepair.runner.bench_run import bench
from modepair.runner.benching import measure_opamps
from modepair.runner.cli.app import app
from modepair.runner.engine import engine
from modepair.runner.errors import SimulationError
from modepair.runner.workers import worker_pool

FREQUENCY = np.geomspace(1e-3, 1e9, 601)
RATIOS = ("open_loop_gain", "cmrr")
NO_OWN_LIMIT = {"open_loop_gain": 1e5, "gain_bandwidth": 1e6}


def measured(parameters: Mapping[str, float], name: str = "part") -> Bench:
    """Measure a macromodel with this process's own engine."""
    text, vectors = bench_netlist(macromodel_mounting(parameters))
    engine().load(text)
    return Bench.from_solve(
        name, FREQUENCY, engine().analyse("ac dec 50 0.001 1000000000.0", FREQUENCY, vectors)
    )


@pytest.mark.parametrize("name", candidates())
def test_a_built_in_macromodel_returns_its_own_values(name: str) -> None:
    declared = candidates()[name].parameters
    figures = bench_figures(measured(declared))
    for one in compare_figures(figures, declared):
        if one.declared is None or one.parameter == "cmrr_sign":
            continue
        assert one.measured is not None, one.parameter
        # The limits that the project asks for; straight lines between 50 points a decade cost a tenth of them.
        if one.parameter in RATIOS:
            assert one.difference_db == pytest.approx(0, abs=0.05), one.parameter
        else:
            assert one.measured == pytest.approx(one.declared, rel=5e-3), one.parameter
    assert bench_warnings(measured(declared), declared) == []


def test_curves_are_those_of_the_equations() -> None:
    one = measured({**NO_OWN_LIMIT, "cmrr": 3e4, "cmrr_corner": 700.0, "output_resistance": 80.0})
    gain = 1e5 / (1 + 1j * FREQUENCY / 10.0)
    # The loop's inductor, 6 Gohm at 1 mHz, on 80 ohm: 1.3e-8; the limit is three times that.
    np.testing.assert_allclose(one.gain, gain, rtol=4e-8)
    np.testing.assert_allclose(one.error, (1 + 1j * FREQUENCY / 700.0) / 3e4, rtol=4e-8)
    np.testing.assert_allclose(one.output_impedance, 80.0, rtol=4e-8)


def test_a_negative_error_has_its_sign() -> None:
    figures = bench_figures(measured({**NO_OWN_LIMIT, "cmrr": 1e4, "cmrr_sign": -1.0, "cmrr_corner": 1e3}))
    assert figures["cmrr_sign"] == -1.0
    assert figures["cmrr"] == pytest.approx(1e4, rel=1e-6)


def test_a_gain_that_still_rises_at_the_lowest_frequency_is_a_bound_and_its_bandwidth_is_right() -> None:
    one = measured({"open_loop_gain": 1e12, "gain_bandwidth": 1e3})
    assert not one.gain_is_flat
    assert bench_figures(one)["gain_bandwidth"] == pytest.approx(1e3, rel=1e-4)
    assert "still rises at 1 mHz" in BenchPage(one, {}).notes[0]


def test_a_model_without_a_mechanism_is_told() -> None:
    one = measured(NO_OWN_LIMIT)
    assert (one.cmrr_db[FREQUENCY < 1e6] > 200).all()
    (warning,) = bench_warnings(one, {})
    assert warning.startswith("part: the model has no CMRR mechanism")
    assert parameter_warnings("part", NO_OWN_LIMIT) == [warning]


def test_a_model_without_frequency_dependence_is_told() -> None:
    one = measured({**NO_OWN_LIMIT, "cmrr": 1e5})
    (warning,) = bench_warnings(one, {})
    assert "CMRR does not depend on frequency, 100.0 dB at every frequency up to its unity gain" in warning
    assert len(parameter_warnings("part", {"cmrr": 1e5})) == 1
    assert parameter_warnings("part", {"cmrr": 1e5, "cmrr_corner": 1.0}) == []


def test_exchanged_inputs_are_told() -> None:
    one = measured({**NO_OWN_LIMIT, "cmrr": 1e5, "cmrr_corner": 1e3})
    turned = Bench(
        "part", FREQUENCY, -one.gain, one.common_gain, *(one.common_admittance,) * 2, one.output_impedance
    )
    assert "are plus and minus exchanged in pins?" in bench_warnings(turned, {})[0]


@pytest.mark.parametrize(
    ("declared", "message"),
    [
        ({"cmrr": 1.5e5}, "CMRR of the model is 100.0 dB, declared is 103.5 dB: 3.5 dB less."),
        ({"cmrr": 1.3e5}, ""),
        (
            {"open_loop_gain": 5e4},
            "open-loop gain of the model is 100.0 dB, declared is 94.0 dB: 6.0 dB more.",
        ),
        (
            {"cmrr_corner": 2e3},
            "the corner of its CMRR of the model is 1 kHz, declared is 2 kHz: 6.0 dB less.",
        ),
        ({"gain_bandwidth": 3e6}, "gain-bandwidth of the model is 1 MHz, declared is 3 MHz: 9.5 dB less."),
    ],
)
def test_differences_above_3_db_are_told(declared: dict[str, float], message: str) -> None:
    one = measured({**NO_OWN_LIMIT, "cmrr": 1e5, "cmrr_corner": 1e3})
    assert bench_warnings(one, declared) == ([f"part: {message}"] if message else [])


def test_a_model_that_ends_its_worker_costs_no_other_its_measurement() -> None:
    sound = macromodel_mounting(NO_OWN_LIMIT)
    # An unclosed bracket ends ngspice's process.
    killer = Mounting(sound.cards, "b1 a 0 v=v(b\n")
    with worker_pool() as executors:
        found = {
            name: result
            for name, result, _ in measure_opamps(
                executors, 2, {"good": sound, "bad": killer, "other": sound}
            )
        }
    assert isinstance(found["good"], Bench)
    assert isinstance(found["other"], Bench)
    assert isinstance(found["bad"], SimulationError)
    assert str(found["bad"]).startswith("bad: ")


def test_the_folder_holds_page_curves_and_plot(tmp_path: Path) -> None:
    result = bench({"one": candidates()["quiet-bipolar"]}, tmp_path / "out", jobs=1)
    assert result.failures == {}
    names = {path.name for path in (tmp_path / "out").iterdir()}
    assert names == {"bench.csv", "bench.md", "bench.png", "bench.svg", "bench_curves.csv", "run.json"}
    assert "| CMRR | 120.00 dB | 120.00 dB | 0.00 dB |" in (tmp_path / "out" / "bench.md").read_text()


def invoke(*arguments: str) -> tuple[int, str]:
    result = CliRunner().invoke(app, ["opamp", *arguments])
    return result.exit_code, result.output


def test_the_command_prints_tables_and_json() -> None:
    status, text = invoke("fast-jfet", "zero-drift")
    assert status == 0
    assert text.index("fast-jfet (macromodel)") < text.index("zero-drift (macromodel)")
    status, text = invoke("zero-drift", "--json")
    figures = {row["figure"]: row for row in json.loads(text)["figures"]}
    assert status == 0
    assert figures["cmrr"]["measured"] == pytest.approx(figures["cmrr"]["declared"], rel=1e-3)
    assert figures["input_capacitance_common"]["unit"] == "F"


def test_candidates_of_a_file_and_of_a_spec_are_measured_with_their_warning_above_the_table(
    tmp_path: Path,
) -> None:
    file = tmp_path / "mine.yaml"
    file.write_text("opamps: {mine: {open_loop_gain: 100 dB, gain_bandwidth: 1 MHz}}\n")
    status, text = invoke("--file", str(file))
    assert status == 0
    assert text.index("WARNING mine: the model has no CMRR mechanism") < text.index("measured")
    spec = tmp_path / "spec.yaml"
    spec.write_text(
        "stage: {topology: difference, parts: {R1: 1k, R2: 1k, R3: 1k, R4: 1k}, opamp: mine}\n"
        "frequency: {start: 1, stop: 1k}\nopamp_files: [mine.yaml]\n"
    )
    assert invoke("mine", "--spec", str(spec))[0] == 0


def test_unknown_names_and_both_files_are_refused() -> None:
    status, text = invoke("zero-drif")
    assert status == 2
    assert "there is no op-amp 'zero-drif'; did you mean zero-drift?" in " ".join(
        text.replace("│", " ").split()
    )
    status, text = invoke("--spec", "a", "--file", "b")
    assert status == 2
    assert "both given" in text
