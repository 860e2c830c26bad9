"""From a spec to a run folder, as a user of the Python interface meets it."""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from modepair.reports import ModePair
from modepair.runner import Run, run
from tests.dense import solve_dense

SPEC = """\
title: Two candidates on a cable
stage:
  topology: three-opamp
  parts: {RF1: 10k, RF2: 10k, R1: 10k, R2: 10.01k, R3: 10k, R4: 10k, A2.gain_bandwidth: 7.6M}
  gain: 101
  reference_resistance: 0.5
source: {resistance: 350, cable_capacitance: 3n, between_capacitance: 1n, bias_resistance: 10M}
frequency: {start: 1, stop: 1M, points_per_decade: 5, spots: [50, 60, 440, 1k]}
vary:
  stage.opamp: [good, poor]
  source.imbalance: [0, 10, -10]
  stage.gain: [11, 101]
opamps:
  good: {open_loop_gain: 130 dB, gain_bandwidth: 8 MHz, phase_margin: 60, cmrr: 120 dB, cmrr_corner: 300 Hz,
         input_resistance_differential: 1M, input_capacitance_common: 2p, output_resistance: 50}
  poor: {open_loop_gain: 100 dB, gain_bandwidth: 1 MHz, cmrr: 80 dB}
"""


@pytest.fixture(scope="module")
def spec(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("specs") / "cable.yaml"
    path.write_text(SPEC, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def result(spec: Path, tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(spec, tmp_path_factory.mktemp("runs") / "cable", jobs=1)


def test_the_folder_holds_what_it_should(result: Run) -> None:
    files = {str(path.relative_to(result.folder)) for path in result.folder.rglob("*") if path.is_file()}
    assert files == {
        "cases.csv", "cmrr.png", "cmrr.svg", "curves.parquet", "gains.png", "gains.svg", "run.json", "summary.md",
        *(f"decks/three-opamp-{number}.cir" for number in range(1, 7)),
    }  # fmt: skip


def test_a_row_per_case_in_the_order_of_the_product(result: Run) -> None:
    cases = result.cases
    assert cases["case"].tolist() == list(range(1, 13))
    assert cases["stage.opamp"].tolist() == ["good"] * 6 + ["poor"] * 6
    assert cases["source.imbalance"].tolist() == [0, 0, 10, 10, -10, -10] * 2
    assert (cases["state"] == "done").all()
    assert result.failed == 0
    pd.testing.assert_frame_equal(
        pd.read_csv(result.folder / "cases.csv", keep_default_na=False), cases, check_dtype=False, rtol=1e-12
    )


def test_curves_are_sorted_complete_and_hold_the_spots_exactly(result: Run) -> None:
    curves = result.curves
    assert list(curves.columns[:8]) == [
        "case", "draw", "frequency_hz", "common_re", "common_im", "differential_re", "differential_im", "cmrr_db",
    ]  # fmt: skip
    assert curves.equals(curves.sort_values(["case", "draw", "frequency_hz"]))
    assert (curves["draw"] == 0).all()
    frequencies = curves[curves["case"] == 7]["frequency_hz"].to_numpy()
    assert len(frequencies) == 31 + 3
    assert {50.0, 60.0, 440.0, 1000.0} <= set(frequencies)
    assert len(curves) == 12 * 34
    rho = np.abs(
        (curves.common_re + 1j * curves.common_im) / (curves.differential_re + 1j * curves.differential_im)
    )
    np.testing.assert_allclose(curves["cmrr_db"], -20 * np.log10(rho), rtol=1e-12)


def test_spot_figures_are_those_of_the_curves(result: Run) -> None:
    at = result.curves[result.curves["frequency_hz"] == 440.0].set_index("case")["cmrr_db"]
    np.testing.assert_allclose(result.cases.set_index("case")["cmrr_db_at_440hz"], at, rtol=1e-12)


def test_a_case_agrees_with_the_dense_solver(result: Run) -> None:
    """Case 9: the poor op-amps, 10 ohm in the plus leg, gain 11; to 1e-5 dB, the round-off of the two solves."""
    parts = {"RF1": 1e4, "RF2": 1e4, "R1": 1e4, "R2": 10010.0, "R3": 1e4, "R4": 1e4, "RREF": 0.5}
    parts["RG"] = 2e4 / (11 / 1.001 - 1)
    parts |= {
        "RSP": 350.0,
        "RSN": 350.0,
        "RI": 10.0,
        "CCP": 3e-9,
        "CCN": 3e-9,
        "CCB": 1e-9,
        "RBP": 1e7,
        "RBN": 1e7,
    }
    for name in ("A1", "A2", "A3"):
        parts |= {f"{name}.open_loop_gain": 1e5, f"{name}.gain_bandwidth": 1e6, f"{name}.cmrr": 1e4}
    parts["A2.gain_bandwidth"] = 7.6e6
    curve = result.curves[result.curves["case"] == 9]
    expected = ModePair(
        curve["frequency_hz"].to_numpy(), *solve_dense("three-opamp", parts, curve["frequency_hz"].to_numpy())
    )
    np.testing.assert_allclose(curve["cmrr_db"], expected.cmrr_db, atol=1e-5)


def test_the_record_makes_the_run_repeatable(result: Run) -> None:
    record = json.loads((result.folder / "run.json").read_text(encoding="utf-8"))
    assert record["spec"] == SPEC
    assert record["spec_digest"] == result.spec.digest
    assert record["counts"] == {"cases": 12, "draws": 0, "failed": 0, "frequencies": 34}
    assert set(record["versions"]) >= {"modepair", "ngspice", "PySpice", "numpy"}
    assert all(record["versions"].values())
    assert record["opamps"]["poor"]["gain_bandwidth"] == 1e6


def test_the_same_bytes_whatever_the_number_of_processes(spec: Path, result: Run, tmp_path: Path) -> None:
    again = run(spec, tmp_path / "again", jobs=2)
    for name in ("curves.parquet", "cases.csv", "cmrr.svg", "decks/three-opamp-3.cir"):
        assert (again.folder / name).read_bytes() == (result.folder / name).read_bytes(), name


@pytest.mark.skipif(shutil.which("ngspice") is None, reason="needs the stand-alone ngspice")
def test_a_deck_runs_stand_alone_to_the_same_curve(result: Run) -> None:
    """The printed 12 digits of both outputs; 1e-6 dB is far above that and the round-off of another pivot order."""
    deck = result.folder / "decks" / "three-opamp-2.cir"
    comment = deck.read_text(encoding="utf-8").splitlines()[1]
    assert comment == "* case 3: stage.opamp good, source.imbalance 10, stage.gain 11"
    printed = subprocess.run(
        ["ngspice", "-b", deck], capture_output=True, text=True, check=True, timeout=60
    ).stdout
    values: dict[float, float] = {}
    for row in re.findall(r"^\d+\t([-+.e\d]+)\t([-+.e\d]+)\t?$", printed, re.MULTILINE):
        values[float(row[0])] = float(row[1])
    # A sweep of one frequency is printed without a table, behind the command that the deck echoes.
    for frequency, rest in re.findall(
        r"^ac lin 1 (\S+) \S+$(.*?)(?=^ac|\Z)", printed, re.MULTILINE | re.DOTALL
    ):
        values[float(frequency)] = float(re.search(r"^cmrr_db = (\S+)$", rest, re.MULTILINE)[1])
    curve = result.curves[result.curves["case"] == 3].set_index("frequency_hz")["cmrr_db"]
    assert len(values) == len(curve) + 1  # 50 and 60 Hz are solved with one more half-way between them
    for frequency, cmrr_db in curve.items():
        nearest = min(values, key=lambda f: abs(f - frequency))
        assert abs(nearest / frequency - 1) < 1e-9
        assert abs(values[nearest] - cmrr_db) < 1e-6


def test_a_failed_case_is_a_row_with_its_reason_and_the_others_go_on(tmp_path: Path) -> None:
    spec = tmp_path / "one-fails.yaml"
    # An op-amp so slow and of so little gain that its gain node asks for a capacitor beyond all numbers.
    spec.write_text(
        "title: one fails\n"
        "stage: {topology: difference, parts: {R1: 10k, R2: 10k, R3: 10k, R4: 10.1k}}\n"
        "frequency: {start: 1, stop: 1k, points_per_decade: 3, spots: [50]}\n"
        "vary: {stage.opamp: [fine, other]}\n"
        "opamps:\n"
        "  fine: {open_loop_gain: 100 dB, gain_bandwidth: 1M}\n"
        "  other: {open_loop_gain: 90 dB, gain_bandwidth: 2M}\n",
        encoding="utf-8",
    )
    from modepair.runner import plans

    original = plans.BatchPlan.batch

    def sabotaged(self: plans.BatchPlan) -> plans.Batch:
        batch = original(self)
        if 1 in batch.position:
            batch.values[:, 0] = np.inf
        return batch

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(plans.BatchPlan, "batch", sabotaged)
        result = run(spec, tmp_path / "run", jobs=1)
    assert result.failed == 1
    assert result.cases["state"].tolist()[0] == "done"
    assert result.cases["state"].tolist()[1].startswith("failed: element R")
    assert result.cases["cmrr_db_at_50hz"].notna().tolist() == [True, False]
    assert set(result.curves["case"]) == {1}
    assert "failed" in (tmp_path / "run" / "summary.md").read_text(encoding="utf-8")


def test_killed_in_the_middle_leaves_no_half_folder_and_the_next_run_works(tmp_path: Path) -> None:
    axes = "".join(
        f"  stage.parts.R{n}: [{', '.join(f'10.00{k}k' for k in range(1, 7))}]\n" for n in range(1, 5)
    )
    text = SPEC.replace(SPEC[SPEC.index("vary:") : SPEC.index("opamps:")], f"vary:\n{axes}")
    text = text.replace("R1: 10k, R2: 10.01k, R3: 10k, R4: 10k, ", "").replace(
        "  gain: 101\n", "  opamp: good\n"
    )
    text = text.replace("points_per_decade: 5", "points_per_decade: 40")
    (tmp_path / "long.yaml").write_text(text, encoding="utf-8")
    target = tmp_path / "runs" / "long"
    command = [sys.executable, "-c", "import sys; from modepair.runner import run; run(*sys.argv[1:])"]
    victim = subprocess.Popen([*command, tmp_path / "long.yaml", target])
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and victim.poll() is None:
        started = list((tmp_path / "runs").glob(".long.unfinished-*/curves.parquet"))
        if started and started[0].stat().st_size > 100_000:
            break
        time.sleep(0.02)
    assert victim.poll() is None, "the run ended before it could be killed"
    victim.send_signal(signal.SIGKILL)
    victim.wait()
    assert not target.exists()
    (tmp_path / "long.yaml").write_text(
        text.replace(axes, axes.splitlines()[0] + "\n").replace(
            "parts: {", "parts: {R2: 10k, R3: 10k, R4: 10k, "
        ),
        encoding="utf-8",
    )
    subprocess.run([*command, tmp_path / "long.yaml", target], check=True, timeout=120)
    assert sorted(os.listdir(target.parent)) == ["long"]
    assert len(pd.read_csv(target / "cases.csv")) == 6
