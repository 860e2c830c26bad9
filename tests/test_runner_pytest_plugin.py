"""Sweep specs as tests of pytest, as a user runs them: in a process of its own."""

from __future__ import annotations

import re
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from importlib.metadata import entry_points
from pathlib import Path

import pytest

from modepair.runner import check
from tests.judged_specs import SIX_CASES

INSTALLED = any(point.value == "modepair.runner.pytest_plugin" for point in entry_points(group="pytest11"))
PLUGIN = [] if INSTALLED else ["-p", "modepair.runner.pytest_plugin"]


def run_pytest(folder: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-W", "error", "-m", "pytest", *PLUGIN, "-p", "no:cacheprovider", *arguments]
    return subprocess.run(command, capture_output=True, text=True, cwd=folder, timeout=240, check=False)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "sweeps").mkdir()
    (tmp_path / "sweeps" / "six.yaml").write_text(SIX_CASES, encoding="utf-8")
    (tmp_path / "sweeps" / "pipeline.yaml").write_text(
        "stages: [build]\njob:\n  stage: build\n", encoding="utf-8"
    )
    return tmp_path


def test_one_test_per_case_and_quantity_in_junit_and_in_parallel(folder: Path) -> None:
    spec = folder / "sweeps" / "six.yaml"
    spec.write_text(SIX_CASES + "  bandwidth: {least: 10 kHz}\n", encoding="utf-8")
    done = run_pytest(folder, "sweeps/", "--junitxml=out.xml", "-n", "2")
    assert done.returncode == 1, done.stdout + done.stderr
    suite = ElementTree.parse(folder / "out.xml").getroot().find("testsuite")
    assert suite is not None
    assert (suite.get("tests"), suite.get("failures"), suite.get("errors")) == ("12", "1", "0")
    tests = {test.get("name"): test for test in suite.iter("testcase")}
    assert len(tests) == 12
    failed = tests["cmrr[opamp=slow, R4=10.001k]"].find("failure")
    assert failed is not None
    report = str(failed.get("message")) + str(failed.text)
    assert (
        "case 5 (slow, R4 10.001k): cmrr: fail, margin -0.06 dB at 3 kHz (69.49 dB against 69.55 dB)"
        in report
    )
    margin = tests["cmrr[opamp=slow, R4=10.001k]"].find("properties/property[@name='margin_db']")
    assert margin is not None
    assert float(str(margin.get("value"))) == pytest.approx(-0.06, abs=0.01)
    assert tests["bandwidth[opamp=slow, R4=10.001k]"].find("failure") is None


def test_a_failing_test_shows_the_curve_and_how_to_see_it_again(folder: Path) -> None:
    done = run_pytest(folder, "sweeps/six.yaml", "-k", "slow and 10.001k")
    assert done.returncode == 1
    assert "1 failed, 5 deselected" in done.stdout
    assert re.search(r"^ +3 kHz +69\.49 +69\.55 +-0\.06 .*X", done.stdout, re.MULTILINE)
    assert re.search(r"^ +50 Hz +76\.\d\d +60\.00 +\+16\.\d\d .*\|.*o", done.stdout, re.MULTILINE)
    assert "modepair check sweeps/six.yaml\n" in done.stdout
    assert "modepair netlist sweeps/six.yaml --case 5\n" in done.stdout
    assert "Traceback" not in done.stdout


def test_a_spec_that_cannot_be_read_is_a_collection_error_with_its_line(folder: Path) -> None:
    (folder / "sweeps" / "bad.yaml").write_text(SIX_CASES.replace("R1: 10k", "R1: 10 pF"), encoding="utf-8")
    done = run_pytest(folder, "sweeps/", "--collect-only", "-q")
    assert done.returncode == 2
    assert re.search(
        r"ERROR collecting sweeps/bad\.yaml _+\n"
        r"sweeps/bad\.yaml:4:15: stage\.parts\.R1: 10 pF is a capacitance; R1 takes a resistance, such as 10k\n",
        done.stdout,
    )
    assert "Traceback" not in done.stdout


def test_a_baseline_that_cannot_be_read_is_a_collection_error_too(folder: Path) -> None:
    (folder / "sweeps" / "six.baseline.txt").write_text("[baseline]\nallow\n", encoding="utf-8")
    done = run_pytest(folder, "sweeps/", "--collect-only", "-q")
    assert done.returncode == 2
    assert "six.baseline.txt:2:1: allow is not a name and a value" in done.stdout


def test_a_baseline_gives_a_test_for_each_case_new_and_missing(folder: Path) -> None:
    spec = folder / "sweeps" / "six.yaml"
    text = SIX_CASES[: SIX_CASES.index("limits:")]
    spec.write_text(text, encoding="utf-8")
    check(spec, folder / "run", accept=True, jobs=1)
    spec.write_text(text.replace("9.999k", "9.998k").replace("R3: 10k", "R3: 9.995k"), encoding="utf-8")
    done = run_pytest(folder, "sweeps/", "-rA")
    assert done.returncode == 1
    assert "6 failed, 2 skipped" in done.stdout
    assert "baseline[missing: stage.opamp slow, stage.parts.R4 9.999k]" in done.stdout
    assert "stage.parts.R3: 10k before, 9.995k now" in done.stdout
    assert "modepair check sweeps/six.yaml --accept" in done.stdout


def test_collecting_simulates_nothing(folder: Path) -> None:
    done = run_pytest(folder, "sweeps/", "--collect-only", "-q")
    assert done.returncode == 0
    assert done.stdout.count("six.yaml::cmrr[") == 6
    assert "pipeline" not in done.stdout


def test_without_paths_yaml_files_are_left_alone(folder: Path) -> None:
    (folder / "test_plain.py").write_text("def test_plain():\n    pass\n", encoding="utf-8")
    for more in ((), ("-n", "1")):
        done = run_pytest(folder, "-q", *more)
        assert done.returncode == 0, done.stdout
        assert "1 passed" in done.stdout


def test_testpaths_count_as_paths(folder: Path) -> None:
    (folder / "pytest.ini").write_text("[pytest]\ntestpaths = sweeps\n", encoding="utf-8")
    assert run_pytest(folder, "-q", "--collect-only").stdout.count("six.yaml::cmrr[") == 6


def test_a_sweep_that_cannot_run_fails_each_test_with_the_reason_once_tried(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("NGSPICE_LIBRARY_PATH", str(folder / "nowhere.so"))
    done = run_pytest(folder, "sweeps/", "-q")
    assert done.returncode == 1
    assert "6 failed" in done.stdout
    assert "sweeps/six.yaml: the sweep did not run: the ngspice library" in done.stdout


def test_a_plain_pytest_loads_next_to_nothing(folder: Path) -> None:
    code = (
        "import sys, modepair.runner.pytest_plugin\n"
        "heavy = {'numpy', 'pandas', 'PySpice', 'matplotlib', 'pyarrow', 'yaml', 'pydantic'} & set(sys.modules)\n"
        "assert not heavy, heavy"
    )
    subprocess.run([sys.executable, "-c", code], check=True, cwd=folder)
