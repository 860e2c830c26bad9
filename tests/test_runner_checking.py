"""Checks from end to end: limits, baselines, exit statuses, and what stands on the console and in the run folder."""

from __future__ import annotations

import json
import math
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from modepair.reports.baselines import BaselineError, read_baseline
from modepair.runner import check, run
from modepair.runner.errors import NothingToJudgeError
from modepair.runner.judging import read_curves
from tests.judged_specs import SIX_CASES

EXAMPLES = Path(__file__).parent.parent / "sweeps" / "examples"


def modepair(*arguments: object, cwd: Path) -> subprocess.CompletedProcess[str]:
    command = [
        sys.executable,
        "-c",
        "from modepair.runner.cli.start import main; main()",
        *map(str, arguments),
    ]
    return subprocess.run(command, capture_output=True, text=True, cwd=cwd, timeout=120, check=False)


@pytest.fixture
def spec(tmp_path: Path) -> Path:
    path = tmp_path / "six.yaml"
    path.write_text(SIX_CASES, encoding="utf-8")
    return path


def change(spec: Path, old: str, new: str) -> None:
    text = spec.read_text(encoding="utf-8")
    assert old in text
    spec.write_text(text.replace(old, new), encoding="utf-8")


def expected_case_5_db() -> float:
    """Closed form of the difference stage, first order: rho = d4/2 + k, d4 = 1e-4, k = 1e-4 (1 + jf/1k)."""
    return -20 * math.log10(abs(1e-4 / 2 + 1e-4 * (1 + 3j)))


def test_one_case_of_six_misses_the_mask_at_3_khz(spec: Path) -> None:
    done = modepair("check", spec.name, "-o", "run", cwd=spec.parent)
    assert done.returncode == 1, done.stderr
    rows = [line.split() for line in done.stdout.splitlines() if re.match(r"\s+\d  ", line)]
    assert [row[4] for row in rows] == ["pass"] * 4 + ["fail", "pass"]
    assert rows[4][:4] == ["5", "slow", "10.001k", "cmrr"]
    assert rows[4][7:9] == ["3", "kHz"]
    curves = pd.read_parquet(spec.parent / "run" / "curves.parquet")
    at = curves[(curves["case"] == 5) & (curves["frequency_hz"] == 3000.0)]["cmrr_db"].item()
    assert float(rows[4][5]) == pytest.approx(at - 69.55, abs=0.01)
    # 0.01 dB: second-order terms and the finite open-loop gain
    assert at == pytest.approx(expected_case_5_db(), abs=0.01)
    assert (
        "FAIL: 1 of 6 cases fails. Worst: case 5 (slow, R4 10.001k): cmrr: fail, margin -0.0" in done.stdout
    )


def test_the_same_with_the_mask_a_tenth_of_a_decibel_lower_passes(spec: Path) -> None:
    change(spec, "69.55 dB", "69.45 dB")
    done = modepair("check", spec.name, "-o", "run", cwd=spec.parent)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "PASS: 6 of 6 cases pass. Nearest to its limit: case 5" in done.stdout


def test_verdicts_are_in_the_run_folder_and_on_its_page(spec: Path) -> None:
    result = check(spec, spec.parent / "run", jobs=1)
    assert not result.passed
    verdicts = pd.read_csv(spec.parent / "run" / "verdicts.csv")
    assert verdicts["verdict"].tolist() == ["pass"] * 4 + ["fail", "pass"]
    assert list(verdicts.columns[:4]) == ["case", "stage.opamp", "stage.parts.R4", "quantity"]
    assert verdicts["at_hz"].tolist()[4] == 3000.0
    page = (spec.parent / "run" / "summary.md").read_text(encoding="utf-8")
    assert page.index("## Verdict") < page.index("## What was asked")
    assert (
        "**FAIL: 1 of 6 cases fails. Worst: case 5 (slow, R4 10.001k): cmrr: fail, margin -0.06 dB at 3 kHz"
        in page
    )
    assert 'id="mask"' in (spec.parent / "run" / "cmrr.svg").read_text(encoding="utf-8")


def test_run_tells_the_verdict_and_ends_well(spec: Path) -> None:
    done = modepair("run", spec.name, "-o", "run", cwd=spec.parent)
    assert done.returncode == 0, done.stderr
    assert "Verdict: FAIL: 1 of 6 cases fails." in done.stdout


def test_a_script_reads_json(spec: Path) -> None:
    done = modepair("check", spec.name, "--json", "-o", "run", cwd=spec.parent)
    content = json.loads(done.stdout)
    assert (done.returncode, content["passed"], content["failed"]) == (1, False, 0)
    assert [row["verdict"] for row in content["verdicts"]].count("fail") == 1
    assert content["verdicts"][4]["margin_db"] == pytest.approx(-0.06, abs=0.01)


def accept(spec: Path) -> Path:
    result = check(spec, spec.parent / "run", accept=True, jobs=1)
    assert result.accepted
    assert result.baseline == spec.with_name("six.baseline.txt")
    return result.baseline


@pytest.fixture
def unlimited(spec: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The spec without limits, for baselines alone; checks in this process draw no pages, which takes most time."""
    from modepair.runner import pages

    monkeypatch.setattr(pages, "write_pages", lambda *_: None)
    text = spec.read_text(encoding="utf-8")
    spec.write_text(text[: text.index("limits:")], encoding="utf-8")
    return spec


def test_a_resistor_changed_by_a_twentieth_of_a_percent_fails_with_the_case_and_the_drop(
    unlimited: Path,
) -> None:
    accept(unlimited)
    change(unlimited, "R3: 10k", "R3: 9.995k")
    done = modepair("check", unlimited.name, cwd=unlimited.parent)
    assert done.returncode == 1, done.stderr
    rows = [line.split() for line in done.stdout.splitlines() if re.match(r"\s+\d  ", line)]
    # Closed form, first order: an error of 5e-4 in R3 adds 2.5e-4 to rho. Case 1 had k = 1e-5.
    drop = 20 * math.log10((2.5e-4 + 1e-5) / 1e-5)
    first = next(line for line in done.stdout.splitlines() if re.match(r"\s+1  ", line))
    assert rows[0][4] == "fail"
    assert float(re.search(r"fell by ([\d.]+) dB", first)[1]) == pytest.approx(drop, abs=0.05)  # type: ignore[index]
    assert "stage.parts.R3: 10k before, 9.995k now" in done.stdout


def test_a_comment_or_another_order_of_axes_passes(unlimited: Path) -> None:
    accept(unlimited)
    change(unlimited, "title: Six cases", "# Another comment\ntitle: Six cases, told otherwise")
    axis = "  stage.opamp: [fast, slow]\n"
    change(unlimited, axis, "")
    change(unlimited, "9.999k]\n", f"9.999k]\n{axis}")
    result = check(unlimited, unlimited.parent / "run", jobs=1)
    assert result.passed
    verdicts = result.run.verdicts
    assert verdicts["verdict"].tolist() == ["pass"] * 6
    np.testing.assert_allclose(verdicts["margin_db"], 0.1, atol=0.02)
    assert list(result.run.changes) == []


def test_new_and_missing_cases_are_named(unlimited: Path) -> None:
    accept(unlimited)
    change(unlimited, "9.999k", "9.998k")
    result = check(unlimited, unlimited.parent / "run", jobs=1)
    assert not result.passed
    verdicts = result.run.verdicts
    assert verdicts["case"].tolist() == [1, 2, 3, 4, 5, 6, 0, 0]
    assert verdicts["verdict"].tolist() == ["pass", "pass", "new", "pass", "pass", "new", "fail", "fail"]
    assert verdicts["note"].iloc[-1] == (
        "in the baseline, but not in the sweep: stage.opamp slow, stage.parts.R4 9.999k"
    )
    assert list(result.run.changes) == [
        "vary.stage.parts.R4: 9.999k, 10k, 10.001k before, 9.998k, 10k, 10.001k now"
    ]


def test_op_amp_data_that_changed_are_told(unlimited: Path) -> None:
    accept(unlimited)
    change(unlimited, "cmrr: 80 dB", "cmrr: 86 dB")
    result = check(unlimited, unlimited.parent / "run", jobs=1)
    assert [
        change for change in result.run.changes if change.startswith("opamps.slow.cmrr: 10k before, 19.95")
    ]
    improved = result.run.verdicts["note"].str.contains("better by up to")
    assert improved.tolist()[3:] == [True, True, True]


def test_the_allowance_is_kept_in_the_baseline_and_can_be_set(unlimited: Path) -> None:
    path = accept(unlimited)
    assert read_baseline(path).allow_db == 0.1
    check(unlimited, unlimited.parent / "run", accept=True, allow_db=0.5, jobs=1)
    assert read_baseline(path).allow_db == 0.5
    change(unlimited, "R3: 10k", "R3: 9.9999k")
    assert not check(unlimited, unlimited.parent / "run", jobs=1).passed
    assert check(unlimited, unlimited.parent / "run", allow_db=20.0, jobs=1).passed
    accept(unlimited)
    assert read_baseline(path).allow_db == 0.5


def test_a_baseline_elsewhere_is_named(unlimited: Path) -> None:
    elsewhere = unlimited.parent / "accepted.txt"
    check(unlimited, unlimited.parent / "run", baseline=elsewhere, accept=True, jobs=1)
    assert elsewhere.exists()
    assert check(unlimited, unlimited.parent / "run", baseline=elsewhere, jobs=1).passed
    with pytest.raises(
        BaselineError, match=r"none\.txt: the baseline cannot be read: no such file or directory"
    ):
        check(unlimited, unlimited.parent / "run", baseline=unlimited.parent / "none.txt", jobs=1)


def test_a_baseline_that_cannot_be_read_is_a_usage_error(unlimited: Path) -> None:
    unlimited.with_name("six.baseline.txt").write_text("nonsense\n", encoding="utf-8")
    done = modepair("check", unlimited.name, cwd=unlimited.parent)
    assert done.returncode == 2
    assert done.stderr.startswith("modepair: six.baseline.txt:1:1: nonsense stands before any section")


def test_without_limits_and_baseline_there_is_nothing_to_judge(unlimited: Path) -> None:
    message = (
        r"six\.yaml: there is nothing to judge: the spec has no limits, and there is no six\.baseline\.txt"
    )
    with pytest.raises(NothingToJudgeError, match=message):
        check(unlimited, unlimited.parent / "run", jobs=1)
    done = modepair("check", unlimited.name, cwd=unlimited.parent)
    assert done.returncode == 2
    assert "or accept the curves as they are with --accept" in done.stderr
    assert not (unlimited.parent / "runs").exists()


def test_an_allowance_without_a_unit_is_refused(spec: Path) -> None:
    done = modepair("check", spec.name, "--allow", "0.5", cwd=spec.parent)
    assert done.returncode == 2
    assert "0.5 has no unit; write 0.5 dB if dB is meant; --allow takes 0 dB or more" in " ".join(
        done.stderr.replace("│", " ").split()
    )


def test_a_failed_case_fails_in_every_quantity(spec: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from modepair.runner import plans
    from modepair.runner.batches import Batch
    from modepair.runner.errors import AcceptError

    original = plans.BatchPlan.batch

    def sabotaged(self: plans.BatchPlan) -> Batch:
        batch = original(self)
        batch.values[batch.position == 1] = np.inf
        return batch

    monkeypatch.setattr(plans.BatchPlan, "batch", sabotaged)
    result = check(spec, spec.parent / "run", jobs=1)
    verdicts = result.run.verdicts.set_index("case")
    assert verdicts.loc[2, "verdict"] == "fail"
    assert str(verdicts.loc[2, "note"]).startswith("the simulation failed: element ")
    assert verdicts["verdict"].tolist() == ["pass", "fail", "pass", "pass", "fail", "pass"]
    with pytest.raises(
        AcceptError, match=r"six\.baseline\.txt: not accepted, since 1 cases failed .*: case 2 failed: "
    ):
        check(spec, spec.parent / "run", accept=True, jobs=1)
    assert not spec.with_name("six.baseline.txt").exists()


def test_interference_is_in_the_table_of_cases(spec: Path) -> None:
    change(spec, "limits:", "interference: {lines: [{at: 60, volts: 5, harmonics: 2}]}\nlimits:")
    result = run(spec, spec.parent / "run", jobs=1)
    cases = pd.read_csv(spec.parent / "run" / "cases.csv")
    assert cases.columns[-1] == "state"
    assert not [name for name in cases.columns if "60hz" in name and name.startswith("cmrr")]
    curve = next(pair for _, pair in read_curves(result.folder / "curves.parquet"))
    at = [int(np.flatnonzero(curve.frequency_hz == hz)[0]) for hz in (60.0, 120.0)]
    volts = np.array([5.0, 2.5]) * np.abs(curve.common_gain[:, at])
    np.testing.assert_allclose(cases["output_error_v"], np.hypot(*volts.T), rtol=1e-9)
    assert "## Interference" in (result.folder / "summary.md").read_text(encoding="utf-8")


@pytest.mark.parametrize("path", sorted(EXAMPLES.glob("*.yaml")), ids=lambda path: path.stem)
def test_examples_with_limits_pass_them(path: Path, tmp_path: Path) -> None:
    if "\nlimits:" not in path.read_text(encoding="utf-8"):
        pytest.skip("no limits")
    result = check(path, tmp_path / "run", jobs=1)
    assert result.passed, result.run.verdicts[result.run.verdicts["verdict"] != "pass"].to_string()
