"""A run survives what its cases do, and what is done to it: plain messages, nothing half-written, no process left."""

from __future__ import annotations

import csv
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from modepair.runner import run
from modepair.runner.allowances import solve_within
from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved
from modepair.runner.errors import EngineDeadError
from modepair.runner.pool import DIED, NO_MEMORY, NOT_TRIED
from tests.sabotage import CRASHING, EATING, HANGING

CANDIDATES = [f"candidate-{number}" for number in range(1, 9)]
OPAMPS = "".join(
    f"  {name}: {{open_loop_gain: 10{number} dB, gain_bandwidth: {number + 1}M, cmrr: 9{number} dB}}\n"
    for number, name in enumerate(CANDIDATES)
)
SPEC = f"""\
title: Eight candidates
stage: {{topology: difference, parts: {{R1: 10k, R2: 10k, R3: 10k, R4: 10.01k}}}}
source: {{resistance: 350, cable_capacitance: 3n}}
frequency: {{start: 1, stop: 100k, points_per_decade: 5, spots: [50, 1k]}}
vary:
  stage.opamp: [{", ".join(CANDIDATES)}]
  source.imbalance: [10, 20, 30]
opamps:
{OPAMPS}"""

TIME_LIMIT_S = 4.0

COMMAND = "from modepair.runner.cli.start import main; main()"
PATCHED = "import modepair.runner.pool as pool, tests.sabotage as s; pool.solve_batch = s.{}; "


def start(*arguments: object, before: str = "") -> subprocess.Popen[str]:
    """Start the command in a session of its own, so that whatever it leaves behind can be found."""
    command = [sys.executable, "-c", before + COMMAND, *map(str, arguments)]
    return subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
    )


def ended(process: subprocess.Popen[str]) -> tuple[int, str, str]:
    """Wait for the command; make sure that it left no process behind and no traceback."""
    output, error = process.communicate(timeout=120)
    deadline = time.monotonic() + 10
    while (left := session(process.pid)) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert left == []
    assert "Traceback" not in error
    return process.returncode, output, error


def session(leader: int) -> list[str]:
    """Living processes of a session."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        try:
            state, _, _, number = (
                stat.read_text(encoding="utf-8", errors="replace").rpartition(")")[2].split()[:4]
            )
            if int(number) == leader and state != "Z":
                found.append(stat.parent.joinpath("cmdline").read_text(encoding="utf-8", errors="replace"))
        except OSError:
            continue
    return found


needs_proc = pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="looks for processes in /proc")
pytestmark = needs_proc


@pytest.fixture(scope="module")
def spec(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("specs") / "eight.yaml"
    path.write_text(SPEC, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def clean(spec: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return run(spec, tmp_path_factory.mktemp("runs") / "clean", jobs=1).folder


def test_a_crash_a_hang_and_a_glutton_cost_three_cases_and_no_others(
    spec: Path, clean: Path, tmp_path: Path
) -> None:
    target = tmp_path / "run"
    options = ("--time-limit", TIME_LIMIT_S, "--jobs", 2)
    status, output, error = ended(
        start("run", spec, "-o", target, *options, before=PATCHED.format("sabotaged"))
    )
    assert error == ""
    assert status == 3
    reasons = {
        CRASHING + 1: DIED,
        HANGING + 1: "the simulator did not come back within 4 s",
        EATING + 1: NO_MEMORY,
    }
    cases = pd.read_csv(target / "cases.csv").set_index("case")
    assert cases["state"][cases["state"] != "done"].to_dict() == {
        case: f"failed: {reason}" for case, reason in reasons.items()
    }
    table = re.sub(r"\s+", " ", output)
    for reason in reasons.values():
        assert reason in table
    untouched = [
        case for case in range(1, 25) if (case - 1) // 3 not in {(other - 1) // 3 for other in reasons}
    ]
    assert len(untouched) == 15
    with (target / "cases.csv").open() as found, (clean / "cases.csv").open() as expected:
        rows, wanted = list(csv.reader(found)), list(csv.reader(expected))
    assert rows[0] == wanted[0]
    assert [rows[case] for case in untouched] == [wanted[case] for case in untouched]
    curves, before = (
        pd.read_parquet(folder / "curves.parquet").set_index(["case", "draw", "frequency_hz"])
        for folder in (target, clean)
    )
    pd.testing.assert_frame_equal(curves.loc[untouched], before.loc[untouched], check_exact=True)
    mates = [case for case in range(1, 25) if case not in untouched and case not in reasons]
    # Solved one by one, from fresh decks: the same but for round-off.
    np.testing.assert_allclose(curves.loc[mates, "cmrr_db"], before.loc[mates, "cmrr_db"], atol=1e-5)
    assert set(curves.index.unique("case")) == set(untouched) | set(mates)


def test_a_candidate_none_of_whose_cases_can_be_solved_is_given_up_after_three(tmp_path: Path) -> None:
    spec = tmp_path / "two.yaml"
    text = SPEC.replace(", ".join(CANDIDATES), ", ".join(CANDIDATES[:2]))
    spec.write_text(text.replace("[10, 20, 30]", f"[{', '.join(map(str, range(1, 9)))}]"), encoding="utf-8")
    patched = PATCHED.format("hopeless")
    status, _, _ = ended(start("run", spec, "-o", tmp_path / "run", "--jobs", 1, before=patched))
    assert status == 3
    states = pd.read_csv(tmp_path / "run" / "cases.csv")["state"].tolist()
    assert states == ["done"] * 8 + [f"failed: {DIED}"] * 3 + [f"failed: {NOT_TRIED}"] * 5


@pytest.mark.parametrize(
    ("reason", "error"),
    [
        (
            "realloc: Internal Error: can't allocate 156827648 bytes.; Error: ngspice.dll cannot recover",
            MemoryError,
        ),
        ("Error: ngspice.dll cannot recover and awaits to be detached", EngineDeadError),
    ],
)
def test_results_after_the_simulator_lost_its_footing_do_not_count(
    reason: str, error: type[Exception]
) -> None:
    """What ngspice 39 said when its address space was limited to 300 MB more than it had."""

    def solve(batch: Batch, analyses: Analyses) -> Solved:
        return Solved(np.array([0, 1]), np.zeros((2, 2, 1), np.complex128), {0: reason})

    with pytest.raises(error, match="allocate|recover"):
        solve_within(None, solve, None, None)  # type: ignore[arg-type]  # not in a worker: nothing is limited


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_run_that_is_stopped_says_so_and_can_go_on(
    spec: Path, clean: Path, tmp_path: Path, number: int
) -> None:
    target = tmp_path / "run"
    process = start("run", spec, "-o", target, "--jobs", 1, before=PATCHED.format("hanging"))
    wait_for_journal(process, target)
    if number == signal.SIGINT:
        os.killpg(process.pid, number)  # Ctrl-C reaches the workers too.
    else:
        process.send_signal(number)
    stopped = time.monotonic()
    status, output, error = ended(process)
    assert time.monotonic() - stopped < 10
    assert output == ""
    assert status == 128 + number
    assert error.count("\n") == 1
    assert f"what was solved is kept: modepair run SPEC -o {target} --resume goes on from there" in error
    assert not target.exists()
    (left,) = tmp_path.iterdir()
    assert sorted(os.listdir(left)) == [".lock", "solved.journal"]
    resumed = run(spec, target, jobs=1, resume=True)
    assert sorted(os.listdir(tmp_path)) == ["run"]
    for name in ("curves.parquet", "cases.csv"):
        assert (resumed.folder / name).read_bytes() == (clean / name).read_bytes()


def wait_for_journal(process: subprocess.Popen[str], target: Path) -> None:
    """Wait until some batches are in the journal."""
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and process.poll() is None:
        if any(path.stat().st_size > 8000 for path in target.parent.glob(f".{target.name}*/solved.journal")):
            return
        time.sleep(0.01)
    raise AssertionError(f"no journal grew; status {process.poll()}")


def test_ctrl_c_while_it_starts_says_so_too(spec: Path, tmp_path: Path) -> None:
    """How far a run has come by then depends on the machine; what it says must fit what it leaves."""
    said = set()
    for number, delay_s in enumerate((0.02, 0.1, 0.3, 0.6)):
        target = tmp_path / str(number) / "run"
        process = start(
            "run", spec, "-o", target, before=PATCHED.format("hanging") + "print('up', flush=True); "
        )
        assert process.stdout is not None
        assert process.stdout.readline() == "up\n"
        time.sleep(delay_s)
        os.killpg(process.pid, signal.SIGINT)
        status, _, error = ended(process)
        assert status == 130
        assert error.count("\n") == 1
        assert not target.exists()
        left = [path.name for path in target.parent.iterdir()] if target.parent.exists() else []
        if error == "modepair: interrupted; nothing was written\n":
            assert left == []
        else:
            assert error.startswith("modepair: interrupted; what was solved is kept: modepair run SPEC ")
            assert len(left) == 1
            assert left[0].startswith(".run.")
        said.add(error.split(";")[1][:8])
    assert " nothing" in said


def test_workers_of_a_killed_run_end_with_it(spec: Path, tmp_path: Path) -> None:
    process = start("run", spec, "-o", tmp_path / "run", "--jobs", 2, before=PATCHED.format("hanging"))
    wait_for_journal(process, tmp_path / "run")
    process.kill()
    assert ended(process)[0] == -signal.SIGKILL


def test_two_runs_into_one_folder_at_once(spec: Path, clean: Path, tmp_path: Path) -> None:
    target = tmp_path / "run"
    first = start("run", spec, "-o", target, before=PATCHED.format("hanging"))
    wait_for_journal(first, target)
    for more in ((), ("--resume",)):
        status, _, error = ended(start("run", spec, "-o", target, *more))
        assert status == 2
        assert (
            error
            == f"modepair: {target}: another run is writing it; wait for that, or name another with -o\n"
        )
    first.terminate()
    assert ended(first)[0] == 128 + signal.SIGTERM
    resumed = run(spec, target, jobs=1, resume=True)
    assert (resumed.folder / "cases.csv").read_bytes() == (clean / "cases.csv").read_bytes()


def test_a_spec_or_a_file_of_candidates_that_is_gone_is_named(tmp_path: Path) -> None:
    status, _, error = ended(start("run", tmp_path / "gone.yaml", "-o", tmp_path / "run"))
    assert status == 2
    assert error.count("\n") == 1
    assert "gone.yaml" in error
    spec = tmp_path / "spec.yaml"
    spec.write_text(SPEC + "opamp_files: [vanished.yaml]\n", encoding="utf-8")
    status, _, error = ended(start("run", spec, "-o", tmp_path / "run"))
    assert status == 2
    assert error.count("\n") == 1
    assert "vanished.yaml" in error
    assert sorted(os.listdir(tmp_path)) == ["spec.yaml"]


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    place = tmp_path / "disk"
    place.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=128k", "tmpfs", place]
    if shutil.which("mount") is None or subprocess.run(mount, capture_output=True, check=False).returncode:
        pytest.skip("mounting a small disk is not permitted here")
    yield place
    subprocess.run(["umount", place], check=True)


def test_a_full_disk_is_said_plainly_and_leaves_no_half_folder(spec: Path, small_disk: Path) -> None:
    target = small_disk / "run"
    status, _, error = ended(start("run", spec, "-o", target, "--jobs", 1))
    assert status == 2
    assert error.count("\n") == 1
    assert error.startswith(f"modepair: {target}: cannot be written: No space left on device")
    assert not target.exists()
    left = [name for path in small_disk.iterdir() for name in os.listdir(path)]
    assert set(left) <= {".lock", "solved.journal"}


def test_a_read_only_folder_is_said_plainly(spec: Path, small_disk: Path) -> None:
    subprocess.run(["mount", "-o", "remount,ro", small_disk], check=True)
    target = small_disk / "run"
    status, _, error = ended(start("run", spec, "-o", target))
    assert status == 2
    assert error == f"modepair: {target}: cannot be written: Read-only file system; name another with -o\n"


def test_a_journal_that_cannot_grow_gives_way_to_the_results(
    spec: Path, clean: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from modepair.runner.journal import Journal

    append = Journal._append
    written = []

    def full(self: Journal, *parts: bytes) -> None:
        if len(written) == 3:
            raise OSError(28, "No space left on device")
        written.append(parts)
        append(self, *parts)

    monkeypatch.setattr(Journal, "_append", full)
    result = run(spec, tmp_path / "run", jobs=1)
    assert len(written) == 3
    assert (result.folder / "curves.parquet").read_bytes() == (clean / "curves.parquet").read_bytes()
