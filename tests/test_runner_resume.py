"""A run that was killed goes on with --resume to the same bytes, and only the same run does."""

from __future__ import annotations

import random
import re
import struct
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from modepair.runner import OutputError, Run, run
from modepair.runner.batches import Solved
from modepair.runner.folder import run_folder
from modepair.runner.journal import Journal

SPEC = """\
title: Boards
stage: {topology: difference, parts: {R1: 10k, R2: 100k, R3: 10k, R4: 100k}, opamp: good}
frequency: {start: 1, stop: 100k, points_per_decade: 5, spots: [50, 1k]}
vary:
  tolerance.parts[0].absolute: [0.1 %, 0.05 %, 0.02 %]
  stage.opamp: [good, poor]
opamps:
  good: {open_loop_gain: 140 dB, gain_bandwidth: 10M, cmrr: 100 dB}
  poor: {open_loop_gain: 100 dB, gain_bandwidth: 1M, cmrr: 80 dB}
tolerance:
  draws: 500
  seed: 7
  parts:
    - {of: [R1, R2, R3, R4], absolute: 0.05 %, distribution: normal}
    - {of: [A1.cmrr], least: 76 dB}
"""
FILES = ("curves.parquet", "cases.csv", "quantiles.parquet")

COMMAND = [sys.executable, "-c", "from modepair.runner.cli.start import main; main()"]

KEY = {"spec": "1", "circuits": "2", "draw": "0", "numpy": "2.0"}


@pytest.fixture(scope="module")
def spec(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("specs") / "boards.yaml"
    path.write_text(SPEC, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def unbroken(spec: Path, tmp_path_factory: pytest.TempPathFactory) -> Run:
    """The run that the others must equal."""
    return run(spec, tmp_path_factory.mktemp("runs") / "unbroken", jobs=2)


def names(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def leave_out_plots(monkeypatch: pytest.MonkeyPatch) -> None:
    """They take most of the time and are not what is looked at here; the runs that are killed do make them."""
    monkeypatch.setattr("modepair.runner.pages.write_pages", lambda *_, **__: None)


@pytest.fixture
def without_plots(monkeypatch: pytest.MonkeyPatch) -> None:
    leave_out_plots(monkeypatch)


def journal_bytes(target: Path) -> int:
    return sum(
        path.stat().st_size for path in target.parent.glob(f".{target.name}.unfinished-*/solved.journal")
    )


def kill_when(spec: Path, target: Path, size: int, delay_s: float, *options: str) -> None:
    """Start a run and kill it, with SIGKILL, some moment after its journal has grown so far."""
    victim = subprocess.Popen([*COMMAND, "run", spec, "-o", target, *options], stdout=subprocess.DEVNULL)
    deadline = time.monotonic() + 60
    while journal_bytes(target) < size and victim.poll() is None and time.monotonic() < deadline:
        time.sleep(0.001)
    time.sleep(delay_s)
    assert victim.poll() is None, "the run ended before it could be killed"
    victim.kill()
    victim.wait()
    assert not target.exists()


def test_killed_at_ten_random_moments_it_goes_on_to_the_same_bytes(
    spec: Path, unbroken: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    moments = random.Random(20260117)
    # 6 cases and 3000 draws at 27 frequencies, two complex gains: what a whole journal holds at least.
    whole = 3006 * 27 * 2 * 16
    grown = []
    for number in range(10):
        target = tmp_path / f"run-{number}"
        # The first is killed before anything is solved, the last while it writes its pages.
        share = 0.0 if number == 0 else 1.0 if number == 9 else moments.random()
        jobs = str(moments.choice((1, 2)))
        kill_when(spec, target, int(share * whole), moments.uniform(0, 0.02), "--jobs", jobs)
        grown.append(journal_bytes(target))
        if number == 4:
            # Killed a second time, as it goes on.
            kill_when(spec, target, grown[-1] + 1, 0.0, "--jobs", jobs, "--resume")
            assert journal_bytes(target) > grown[-1]
        resumed = run(spec, target, jobs=2, resume=True)
        for name in FILES:
            assert (resumed.folder / name).read_bytes() == (unbroken.folder / name).read_bytes(), (
                number,
                name,
            )
        if number == 0:
            assert names(resumed.folder) == names(unbroken.folder)
            leave_out_plots(monkeypatch)
    assert names(tmp_path) == [f"run-{number}" for number in range(10)]
    assert len(set(grown)) > 5
    assert grown[9] >= whole


@pytest.mark.usefixtures("without_plots")
def test_a_torn_journal_goes_on_from_its_last_whole_batch(spec: Path, unbroken: Run, tmp_path: Path) -> None:
    target = tmp_path / "run"
    kill_when(spec, target, 2_000_000, 0.0, "--jobs", "1")
    (journal,) = target.parent.glob(".run.unfinished-*/solved.journal")
    content = bytearray(journal.read_bytes())
    del content[-5:]
    content[len(content) // 2] ^= 1
    journal.write_bytes(content)
    resumed = run(spec, target, jobs=1, resume=True)
    for name in FILES:
        assert (resumed.folder / name).read_bytes() == (unbroken.folder / name).read_bytes(), name


@pytest.mark.usefixtures("without_plots")
def test_only_the_same_run_goes_on(
    spec: Path, unbroken: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    changed = tmp_path / "changed.yaml"
    changed.write_text(SPEC, encoding="utf-8")
    target = tmp_path / "run"
    kill_when(changed, target, 1_000_000, 0.0)
    changed.write_text(SPEC.replace("seed: 7", "seed: 8"), encoding="utf-8")
    size = journal_bytes(target)
    with pytest.raises(OutputError, match="the spec has changed since it was begun; run without --resume"):
        run(changed, target, resume=True)
    changed.write_text(SPEC, encoding="utf-8")
    with monkeypatch.context() as patch:
        patch.setattr("modepair.runner.record.platform.python_version", lambda: "9.9")
        with pytest.raises(OutputError, match=r"it was begun with Python 3\S+, this is 9\.9"):
            run(changed, target, resume=True)
    with pytest.raises(OutputError, match="it was begun with another --draw"):
        run(changed, target, resume=True, draw=3)
    # What was refused is still there, and the same spec, wherever it lies, goes on with it.
    assert journal_bytes(target) == size
    assert (run(spec, target, resume=True).folder / "cases.csv").read_bytes() == (
        unbroken.folder / "cases.csv"
    ).read_bytes()


def test_a_candidate_in_a_file_that_changed_is_noticed(tmp_path: Path) -> None:
    spec, candidates = tmp_path / "spec.yaml", tmp_path / "mine.yaml"
    start, poor = SPEC[: SPEC.index("  poor:")], re.search("  poor: .*\n", SPEC)
    assert poor is not None
    spec.write_text(start + SPEC[poor.end() :] + "opamp_files: [mine.yaml]\n", encoding="utf-8")
    candidates.write_text("opamps:\n" + poor[0], encoding="utf-8")
    kill_when(spec, tmp_path / "run", 1_000_000, 0.0)
    candidates.write_text("opamps:\n" + poor[0].replace("80 dB", "81 dB"), encoding="utf-8")
    with pytest.raises(OutputError, match="the op-amp data have changed since it was begun"):
        run(spec, tmp_path / "run", resume=True)


@pytest.mark.usefixtures("without_plots")
def test_without_resume_it_begins_anew_and_with_nothing_to_resume_too(
    spec: Path, unbroken: Run, tmp_path: Path
) -> None:
    target = tmp_path / "run"
    kill_when(spec, target, 1_000_000, 0.0)
    for resume in (False, True):
        found = run(spec, target, resume=resume)
        assert (found.folder / "cases.csv").read_bytes() == (unbroken.folder / "cases.csv").read_bytes()
        assert names(tmp_path) == ["run"]


def solved(start: int, count: int, engine: str = "39") -> Solved:
    numbers = np.random.default_rng(start)
    gains = numbers.standard_normal((count, 2, 5)) + 1j * numbers.standard_normal((count, 2, 5))
    gains[1] = np.nan
    return Solved(np.arange(start, start + count), gains, {start + 1: "no convergence: μ"}, engine, 1)


class Planned:
    """A plan whose batch is not to be had."""

    def __init__(self, one: Solved) -> None:
        self.position = one.position

    def batch(self) -> Solved:  # type: ignore[override]
        return replace(solved(0, 2), position=self.position, engine="")


@pytest.fixture
def written(tmp_path: Path) -> tuple[Path, list[Solved]]:
    """A journal of three batches, left by a run that was stopped."""
    batches = [solved(0, 3), solved(3, 4), solved(7, 2)]

    def stopped() -> None:
        with run_folder(tmp_path / "run") as folder, Journal(folder, KEY) as journal:
            assert list(journal.recorded(batches)) == batches
            raise KeyboardInterrupt("enough")

    with pytest.raises(KeyboardInterrupt, match="enough"):
        stopped()
    (path,) = tmp_path.glob(".run.unfinished-*/solved.journal")
    return path, batches


def found_in(path: Path, batches: list[Solved]) -> list[Solved]:
    with run_folder(path.parents[1] / "run", resume=True) as folder, Journal(folder, KEY) as journal:
        given = list(journal.batches(map(Planned, batches)))  # type: ignore[arg-type]
        folder.resumable = False
    return [one for one in given if isinstance(one, Solved) and one.engine]


def test_a_journal_gives_back_every_bit(written: tuple[Path, list[Solved]]) -> None:
    path, batches = written
    for found, kept in zip(found_in(path, batches), batches, strict=True):
        assert found.gains.tobytes() == kept.gains.tobytes()
        assert found.position.tolist() == kept.position.tolist()
        assert (found.failures, found.engine, found.lost) == (kept.failures, kept.engine, kept.lost)


@pytest.mark.parametrize("cut", [1, 11, 12, 13, 200])
def test_a_torn_tail_is_dropped(written: tuple[Path, list[Solved]], cut: int) -> None:
    path, batches = written
    content = path.read_bytes()
    header, first, _, _ = records(content)
    path.write_bytes(content[: header + first + cut])
    assert len(found_in(path, batches)) == 1


def records(content: bytes) -> list[int]:
    """Length of each record."""
    lengths, place = [], 0
    while place < len(content):
        lengths.append(12 + struct.unpack_from("<Q", content, place)[0])
        place += lengths[-1]
    return lengths


def test_another_ngspice_is_refused(written: tuple[Path, list[Solved]]) -> None:
    path, batches = written

    def resumed() -> None:
        with run_folder(path.parents[1] / "run", resume=True) as folder, Journal(folder, KEY) as journal:
            replayed = list(journal.batches(map(Planned, batches)))  # type: ignore[arg-type]
            list(journal.recorded([*replayed, solved(9, 2, "44")]))  # type: ignore[list-item]

    with pytest.raises(OutputError, match="it was begun with ngspice 39, this is 44"):
        resumed()
