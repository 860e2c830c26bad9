"""The command line as its users meet it: output, messages, exit statuses, and what is left on disk."""

from __future__ import annotations

import json
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

from tests.test_malformed_specs import MALFORMED

COMMAND = [sys.executable, "-c", "from modepair.runner.cli.start import main; main()"]
SPEC = """\
title: A difference stage
stage:
  topology: difference
  parts: {R1: 10k, R2: 100k, R3: 10k, R4: 100.1k}
frequency: {start: 1, stop: 100k, points_per_decade: 4, spots: [50, 1k]}
vary: {stage.opamp: [fine, dull]}
opamps:
  fine: {open_loop_gain: 120 dB, gain_bandwidth: 10M, cmrr: 110 dB}
  dull: {open_loop_gain: 90 dB, gain_bandwidth: 300k, cmrr: 70 dB, cmrr_corner: 1k}
"""
TOLERANCE = """\
tolerance:
  draws: 60
  parts:
    - {of: [R1, R2, R3, R4], absolute: 0.1 %}
    - {of: [A1.cmrr]}
limits: {cmrr: [[50, 60 dB], [1k, 60 dB]]}
"""


@pytest.fixture
def here(tmp_path: Path) -> Path:
    (tmp_path / "stage.yaml").write_text(SPEC, encoding="utf-8")
    (tmp_path / "boards.yaml").write_text(SPEC + TOLERANCE, encoding="utf-8")
    return tmp_path


def modepair(here: Path, *arguments: str | Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*COMMAND, *arguments], cwd=here, capture_output=True, text=True, timeout=120, check=False
    )


def test_run_prints_a_table_and_leaves_a_folder(here: Path) -> None:
    done = modepair(here, "run", "stage.yaml")
    assert (done.returncode, done.stderr) == (0, "")
    assert "A difference stage" in done.stdout
    assert re.search(r"1  fine .* 80\.\d", done.stdout)
    assert done.stdout.rstrip().endswith("Run folder: runs/stage")
    assert "\x1b[" not in done.stdout
    assert len(pd.read_csv(here / "runs" / "stage" / "cases.csv")) == 2
    assert [path.name for path in (here / "runs").iterdir()] == ["stage"]


def test_run_as_json_is_what_a_script_reads(here: Path) -> None:
    done = modepair(here, "run", "stage.yaml", "-o", "out", "--jobs", "1", "--json")
    content = json.loads(done.stdout)
    assert content["failed"] == 0
    cases = pd.read_csv(here / "out" / "cases.csv")
    assert [row["cmrr_db_at_50hz"] for row in content["cases"]] == pytest.approx(
        cases["cmrr_db_at_50hz"].tolist()
    )


def test_netlist_prints_one_case_or_writes_each_structure(here: Path) -> None:
    printed = modepair(here, "netlist", "stage.yaml", "--case", "2")
    assert printed.stdout.startswith(".title modepair\n* case 2: stage.opamp dull\n")
    assert printed.stdout.endswith(".end\n")
    written = modepair(here, "netlist", "stage.yaml", "-o", "decks")
    assert written.stdout.split() == ["decks/difference-1.cir", "decks/difference-2.cir"]
    beyond = modepair(here, "netlist", "stage.yaml", "--case", "3")
    assert beyond.returncode == 2
    assert "3 is not a case; the spec has 1 to 2" in beyond.stderr


def test_schema_is_json(here: Path) -> None:
    assert json.loads(modepair(here, "schema").stdout)["type"] == "object"


@pytest.mark.parametrize("malformed", MALFORMED[::24], ids=lambda one: one.name)
def test_a_malformed_spec_is_refused_with_its_place_and_leaves_nothing(
    tmp_path: Path, malformed: object
) -> None:
    (tmp_path / "spec.yaml").write_text(malformed.text, encoding="utf-8")  # type: ignore[attr-defined]
    done = modepair(tmp_path, "run", "spec.yaml")
    assert done.returncode == 2
    assert done.stdout == ""
    assert re.match(r"spec\.yaml(:\d+:\d+)?: ", done.stderr)
    assert "Traceback" not in done.stderr
    assert [path.name for path in tmp_path.iterdir()] == ["spec.yaml"]


def test_usage_errors_are_told(here: Path) -> None:
    for arguments, told in (
        (("run",), "Missing argument"),
        (("run", "stage.yaml", "--jobs", "0"), "--jobs"),
        (("walk",), "No such command"),
    ):
        done = modepair(here, *arguments)
        assert done.returncode == 2
        assert told in done.stderr
    missing = modepair(here, "run", "nowhere.yaml")
    assert (missing.returncode, missing.stderr) == (2, "nowhere.yaml: no such file\n")


def test_a_place_that_is_taken_is_told(here: Path) -> None:
    (here / "out").mkdir()
    (here / "out" / "thesis.txt").write_text("x", encoding="utf-8")
    done = modepair(here, "run", "stage.yaml", "-o", "out")
    assert done.returncode == 2
    assert "is not a run folder" in done.stderr
    assert [path.name for path in (here / "out").iterdir()] == ["thesis.txt"]


def test_a_missing_library_is_told(here: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NGSPICE_LIBRARY_PATH", "/nowhere/libngspice.so")
    done = modepair(here, "run", "stage.yaml")
    assert done.returncode == 3
    assert done.stderr.startswith("modepair: the ngspice library was not found (")
    assert "Traceback" not in done.stderr
    assert not (here / "runs" / "stage").exists()


def test_one_board_again(here: Path) -> None:
    done = modepair(here, "run", "boards.yaml", "--draw", "3")
    assert done.returncode == 0
    board = pd.read_csv(here / "runs" / "boards-draw-3" / "board.csv")
    assert set(board["part"]) >= {"R1", "R2", "R3", "R4", "A1.cmrr"}
    beyond = modepair(here, "run", "boards.yaml", "--draw", "61")
    assert (beyond.returncode, beyond.stderr) == (2, "modepair: draw must be 1 to 60, not 61\n")
    without = modepair(here, "run", "stage.yaml", "--draw", "1")
    assert without.stderr == "modepair: the spec has no tolerance section, so it has no draws\n"


def test_budget_prints_and_writes(here: Path) -> None:
    done = modepair(here, "budget", "boards.yaml", "--case", "1")
    assert done.returncode == 0
    assert "Case 1: stage.opamp fine" in done.stdout
    assert "extreme value" in done.stdout
    budget = pd.read_csv(here / "runs" / "boards-budget" / "budget.csv")
    assert set(budget["cause"]) >= {"R1", "R2", "R3", "R4", "A1.cmrr"}
    beyond = modepair(here, "budget", "boards.yaml", "--case", "9")
    assert (beyond.returncode, beyond.stderr) == (2, "modepair: case must be 1 to 2, not 9\n")


def test_tighten_finds_a_grade_or_says_what_limits(here: Path) -> None:
    done = modepair(here, "tighten", "boards.yaml", "--set", "0", "--yield", "90 %", "--json")
    content = json.loads(done.stdout)
    fine, dull = content["cases"]
    assert content["key"] == "absolute"
    assert fine["widest"] is not None
    assert fine["grades"][-1]["passed"] >= 0.9 * 60
    assert all(grade["passed"] < 0.9 * 60 for grade in fine["grades"][:-1])
    if dull["widest"] is None:
        assert dull["limited_by"][0] == "A1.cmrr"
        assert done.returncode == 1
    for arguments, told in (
        (("boards.yaml", "--set", "2"), "set must be 0 to 1"),
        (("boards.yaml", "--set", "1"), "which has no grades"),
        (("stage.yaml", "--set", "0"), "no tolerance section"),
    ):
        refused = modepair(here, "tighten", *arguments)
        assert refused.returncode == 2
        assert told in refused.stderr


@pytest.mark.parametrize("closed", [">&-", "2>&-"])
def test_a_closed_stream_costs_nothing_but_what_it_would_say(here: Path, closed: str) -> None:
    command = " ".join([shlex.join(COMMAND), "run", "stage.yaml", closed])
    done = subprocess.run(
        ["sh", "-c", command], cwd=here, capture_output=True, text=True, check=False, timeout=60
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert (here / "runs" / "stage" / "run.json").is_file()


def test_a_reader_that_leaves_is_no_judgement(here: Path) -> None:
    command = f"{{ {shlex.join(COMMAND)} schema; echo $? >&2; }} | true"
    done = subprocess.run(
        ["sh", "-c", command], cwd=here, capture_output=True, text=True, check=False, timeout=60
    )
    assert done.stderr in ("141\n", "0\n")
