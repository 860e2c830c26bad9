"""From specs and run folders to a comparison, as a user of the command line meets it."""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

from modepair.runner import ReadingError, Run, run
from modepair.runner.cli.app import app
from modepair.runner.comparing import compare_runs
from modepair.runner.reading import open_run
from modepair.sweeps import Spec

SPEC = """\
title: Two op-amps on a cable
stage:
  topology: three-opamp
  parts: {RF1: 10k, RF2: 10k, R1: 10k, R2: 10.01k, R3: 10k, R4: 10k}
  gain: 101
source: {resistance: 350, cable_capacitance: 3n}
frequency: {start: 10, stop: 100k, points_per_decade: 10, spots: [50, 1k]}
vary:
  stage.opamp: [nan, poor]
  source.imbalance: [0, 10]
limits: {cmrr: [[50, 90 dB], [10k, 60 dB]]}
opamps:
  nan: {open_loop_gain: 130 dB, gain_bandwidth: 8 MHz, cmrr: 120 dB, cmrr_corner: 300, note: costs more,
        unit_price: 2.5}
  poor: {open_loop_gain: 100 dB, gain_bandwidth: 1 MHz, cmrr: 80 dB, cmrr_corner: 1k, cmrr_sign: -1}
measured:
  - name: board 3
    file: board.csv
    frequency: {column: f}
    cmrr: {column: c}
    case: {stage.opamp: poor}
    residual: 95 dB
"""
CLI = CliRunner()


@pytest.fixture(scope="module")
def spec(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("specs") / "cable.yaml"
    path.write_text(SPEC, encoding="utf-8")
    (path.parent / "board.csv").write_text("f,c\n50,96\n1000,80\n", encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def made(spec: Path, tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(spec, tmp_path_factory.mktemp("runs") / "cable", jobs=1, page=True)


@pytest.fixture
def copy(made: Run, tmp_path: Path) -> Path:
    return Path(shutil.copytree(made.folder, tmp_path / "cable"))


def command(*arguments: object) -> str:
    result = CLI.invoke(app, ["compare", *map(str, arguments)])
    assert result.exit_code == 0, result.output
    return result.stdout


def test_a_run_folder_gives_back_its_run(made: Run) -> None:
    """An op-amp may be called nan, and files that the spec named are not needed again."""
    again = open_run(made.folder)
    pd.testing.assert_frame_equal(again.cases, made.cases, check_dtype=False)
    assert again.cases["stage.opamp"].tolist() == ["nan", "nan", "poor", "poor"]
    assert again.spec.title == "Two op-amps on a cable"
    assert again.spec.candidates["nan"].note == "costs more"
    assert again.spec.limits == made.spec.limits
    columns = ["case", "quantity", "verdict", "margin_db", "at_hz"]
    pd.testing.assert_frame_equal(again.verdicts[columns], made.verdicts[columns], check_dtype=False)
    (measured,) = again.spec.measurements
    assert (measured.name, measured.settings) == ("board 3", {"stage.opamp": "poor"})
    np.testing.assert_array_equal(measured.cmrr_db, [96.0, 80.0])
    np.testing.assert_allclose(measured.residual_db, 95.0, rtol=1e-12)


def test_margins_are_those_of_the_curves(made: Run) -> None:
    """Recomputed from curves.parquet: the mask falls 30 dB from 50 Hz to 10 kHz, straight over log f."""
    table = compare_runs([made]).comparison.table
    curves = made.curves
    inside = curves[curves["frequency_hz"].between(50, 10e3)]
    asked = 90 - 30 * np.log(inside["frequency_hz"] / 50) / np.log(200)
    margin = (inside["cmrr_db"] - asked).groupby(inside["case"]).min()
    expected = {"nan": min(margin[1], margin[2]), "poor": min(margin[3], margin[4])}
    found = dict(zip(table["candidate"], table["margin_db"], strict=True))
    assert found == pytest.approx(expected, abs=1e-9)  # the same numbers
    assert set(table["decided_by"]) <= {"imbalance 0", "imbalance 10"}


def test_the_command_writes_table_csv_markdown_and_page(made: Run, tmp_path: Path) -> None:
    text = command(made.folder, "-o", tmp_path / "out")
    assert text.startswith("Two op-amps on a cable\n")
    assert (
        "Ranked by the smallest margin to the mask at any solved frequency, in the worst of 2 conditions."
        in text
    )
    table = pd.read_csv(tmp_path / "out" / "comparison.csv", keep_default_na=False)
    assert sorted(table["candidate"]) == ["nan", "poor"]
    headline = text.splitlines()[2]
    assert (tmp_path / "out" / "comparison.md").read_text(encoding="utf-8").count(headline[:40]) == 1
    page = (tmp_path / "out" / "report.html").read_text(encoding="utf-8")
    assert "costs more" in page
    assert "board 3 against case 3" in page
    assert {path.name for path in (tmp_path / "out").iterdir()} == {
        "comparison.csv",
        "comparison.md",
        "report.html",
    }


def test_json_for_a_script(made: Run) -> None:
    content = json.loads(command(made.folder, "--json"))
    assert [one["candidate"] for one in content["candidates"]] == compare_runs([made]).comparison.table[
        "candidate"
    ].tolist()
    assert content["meets_mask"] in (True, False)


def test_a_spec_is_run_first(spec: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    text = command(spec, "--jobs", 1)
    assert "Two op-amps on a cable" in text
    assert (tmp_path / "runs" / "cable" / "run.json").is_file()


def test_several_runs_are_candidates_of_their_own(made: Run, copy: Path) -> None:
    other = copy.rename(copy.with_name("other"))
    table = compare_runs([made, open_run(other)]).comparison.table
    assert sorted(table["candidate"]) == ["cable: nan", "cable: poor", "other: nan", "other: poor"]
    assert table.groupby("rank").size().max() >= 2  # the same run twice cannot be told apart


def test_other_axes_can_be_the_candidates(made: Run) -> None:
    table = compare_runs([made], by=("source.imbalance",)).comparison.table
    assert sorted(table["candidate"]) == ["imbalance 0", "imbalance 10"]
    with pytest.raises(
        ReadingError, match=r"stage\.gain is not an axis of this sweep; its axes: stage\.opamp, source"
    ):
        compare_runs([made], by=("stage.gain",))


def test_one_run_without_candidates_is_refused(made: Run) -> None:
    text = SPEC.replace("  stage.opamp: [nan, poor]\n", "").replace("gain: 101", "gain: 101\n  opamp: poor")
    text = text[: text.index("measured:")]
    path = Path(made.spec.path).with_name("single.yaml")
    path.write_text(text, encoding="utf-8")
    single = run(path, made.folder.with_name("single"), jobs=1, page=True)
    with pytest.raises(ReadingError, match=r"single: there are no candidates to compare; vary stage\.opamp"):
        compare_runs([single])
    page = (single.folder / "report.html").read_text(encoding="utf-8")
    assert "<h2>Candidates</h2>" not in page
    assert re.findall(r'<p class="headline">(.*?)</p>', page)[0].startswith(
        "1 of 2 cases fails. Worst: case 2 "
    )


def test_runs_that_ask_for_different_masks_are_refused(made: Run, spec: Path) -> None:
    path = spec.with_name("lower.yaml")
    path.write_text(SPEC.replace("90 dB", "89.9 dB"), encoding="utf-8")
    lower = run(path, made.folder.with_name("lower"), jobs=1)
    with pytest.raises(
        ReadingError, match="cable and lower ask for different masks, so no margin compares them"
    ):
        compare_runs([made, lower])


def test_the_page_of_a_run_names_the_failing_case_and_its_margin(made: Run) -> None:
    page = (made.folder / "report.html").read_text(encoding="utf-8")
    worst = made.verdicts.loc[made.verdicts["margin_db"].idxmin()]
    assert worst["verdict"] == "fail"
    assert f"{worst['margin_db']:+.2f} dB" in page
    assert "limits not kept" in page


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (lambda f: shutil.rmtree(f), "no such file or folder; a spec or a run folder is needed"),
        (
            lambda f: (f / "run.json").unlink(),
            r"this is not a run folder, for it holds no run\.json; modepair run SPEC",
        ),
        (
            lambda f: (f / "run.json").write_text("{"),
            r"run\.json: this is not the record of a run; run the spec again",
        ),
        (
            lambda f: (f / "run.json").write_text("{}"),
            "it must have spec, spec_file, opamps, versions, started",
        ),
        (lambda f: (f / "cases.csv").unlink(), r"cases\.csv: no such file; the run folder is not whole"),
        (
            lambda f: (f / "cases.csv").write_text("case\n1\n"),
            r"cases\.csv: has no column state; run the spec again",
        ),
        (lambda f: (f / "measured.csv").unlink(), r"measured\.csv: cannot be read; run the spec again"),
        (lambda f: (f / "verdicts.csv").write_text("case\n1\n"), r"verdicts\.csv: has no column"),
        (
            lambda f: (f / "curves.parquet").write_text("x"),
            r"curves\.parquet: cannot be read: .*; run the spec again",
        ),
    ],
)
def test_what_is_no_run_folder_is_told_plainly(
    copy: Path, change: Callable[[Path], object], told: str
) -> None:
    change(copy)
    with pytest.raises(ReadingError, match=told):
        compare_runs([open_run(copy)])


def test_a_record_of_another_version_is_told(copy: Path) -> None:
    record = json.loads((copy / "run.json").read_text(encoding="utf-8"))
    (copy / "run.json").write_text(
        json.dumps(record | {"spec": record["spec"].replace("topology", "topolgy")}), encoding="utf-8"
    )
    with pytest.raises(
        ReadingError,
        match=r"its spec cannot be read by this version of modepair(?s:.*)topolgy is not a known key",
    ):
        open_run(copy)
    (copy / "run.json").write_text(json.dumps(record | {"opamps": {"poor": {"gain": 1}}}), encoding="utf-8")
    with pytest.raises(ReadingError, match=r"opamps\.poor is no op-amp; run the spec again"):
        open_run(copy)


def test_the_spec_restored_is_the_spec_read(made: Run) -> None:
    again: Spec = open_run(made.folder).spec
    assert again.digest == made.spec.digest
    assert [axis.labels for axis in again.axes] == [axis.labels for axis in made.spec.axes]
    np.testing.assert_array_equal(again.frequency.frequency_hz, made.spec.frequency.frequency_hz)
