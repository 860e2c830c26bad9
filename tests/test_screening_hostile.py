"""Hostile model files: each is refused with file, line and reason, and nothing is run, read or written.

Kind of truth: behaviour. The canary test is shown to be able to fail: the same files, given to ngspice
unscreened, do write the canary.
"""

from __future__ import annotations

import contextlib
import csv
import os
import shutil
import subprocess
import time
from pathlib import Path

import pytest

from modepair.circuits.screening import Limits, ScreenedModel, screen
from modepair.sweeps.faults import SpecError
from tests.spice_process import NGSPICE, needs_ngspice

FOLDER = Path(__file__).parent / "hostile"
MODELS = FOLDER / "models"
SECRET = "correct horse battery staple"

with (FOLDER / "expected.csv").open(newline="") as file:
    EXPECTED = {row["file"]: (int(row["line"]), row["reason"]) for row in csv.DictReader(file)}

RUN_COMMANDS = ("control_block", "control_upper_indented", "control_inside_subckt", "control_with_suffix",
                "comment_shell", "comment_shell_capitals", "script_title", "control_without_end")  # fmt: skip


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A spec's folder with a secret inside the working directory and one above it."""
    root = tmp_path / "spec"
    root.mkdir()
    for place in (tmp_path, root):
        (place / "secret.txt").write_text(SECRET)
    monkeypatch.chdir(root)
    return root


def refusal(path: Path, root: Path, limits: Limits | None = None) -> SpecError:
    with pytest.raises(SpecError, match=r"\S") as caught:
        screen(path, root, limits=limits or Limits())
    return caught.value


def test_corpus_is_complete() -> None:
    assert sorted(EXPECTED) == sorted(path.name for path in MODELS.iterdir())
    assert len(EXPECTED) >= 50
    readme = (FOLDER / "README.md").read_text()
    assert all(f"| {Path(name).stem} |" in readme for name in EXPECTED)


@pytest.mark.parametrize("name", sorted(EXPECTED))
def test_hostile_file_is_refused_and_touches_nothing(name: str, folder: Path) -> None:
    shutil.copy(MODELS / name, folder / name)
    before = {path: path.stat().st_atime_ns for path in folder.parent.rglob("*")}
    begun = time.process_time()
    error = refusal(folder / name, folder)
    assert time.process_time() - begun < 5
    line, reason = EXPECTED[name]
    text = str(error)
    assert any(
        fault.file == name and fault.line == line and reason in fault.message for fault in error.faults
    ), text
    assert text.isprintable() or all(part.isprintable() for part in text.split("\n"))
    assert SECRET not in text
    assert set(folder.parent.rglob("*")) == set(before), "a file appeared"
    assert (folder / "secret.txt").stat().st_atime_ns == before[folder / "secret.txt"]
    assert (folder.parent / "secret.txt").stat().st_atime_ns == before[folder.parent / "secret.txt"]
    assert Path.cwd() == folder


@needs_ngspice
@pytest.mark.parametrize("name", RUN_COMMANDS)
def test_the_canary_can_die(name: str, folder: Path) -> None:
    """Unscreened, in a child process, these files do run their command."""
    text = (MODELS / f"{name}.lib").read_text()
    title = "" if name == "script_title" else "title\n"
    (folder / "deck.cir").write_text(f"{title}{text}v1 p 0 1\nx1 p 0 o amp\n.op\n.end\n")
    subprocess.run(
        [NGSPICE or "", "-b", "deck.cir"], cwd=folder, capture_output=True, timeout=20, check=False
    )
    assert (folder / "canary.txt").exists()


GOOD = "* a model\n.subckt amp p n o\ne1 o 0 p n 1e5\nr1 p n 1meg\n.ends\n"


def write(folder: Path, text: str, name: str = "model.lib") -> Path:
    path = folder / name
    path.write_text(text)
    return path


def test_symbolic_links_out_of_the_folder_are_refused(folder: Path) -> None:
    (folder / "link.lib").symlink_to(folder.parent / "secret.txt")
    (folder / "away").symlink_to(folder.parent)
    text = str(refusal(write(folder, GOOD + ".include link.lib\n.include away/secret.txt\n"), folder))
    assert "model.lib:6:1: .include: link.lib lies outside the spec's folder" in text
    assert "model.lib:7:1: .include: away/secret.txt lies outside the spec's folder" in text
    assert "lies outside the spec's folder" in str(refusal(folder / "link.lib", folder))
    assert SECRET not in text


def test_symbolic_links_inside_the_folder_are_followed(folder: Path) -> None:
    write(folder, ".model dx d(is=1f)\n", "real.inc")
    (folder / "link.inc").symlink_to("real.inc")
    model = screen(write(folder, ".include link.inc\n.subckt a p n\nd1 p n dx\n.ends\n"), folder)
    assert ".model dx d(is=1e-15)" in model.text
    assert model.files == (folder / "model.lib", folder / "real.inc")


def test_pipes_devices_and_folders_are_refused_at_once(folder: Path) -> None:
    os.mkfifo(folder / "pipe.lib")
    (folder / "sub").mkdir()
    begun = time.process_time()
    text = str(refusal(write(folder, GOOD + ".include pipe.lib\n.include sub\n"), folder))
    assert "model.lib:6:1: .include: pipe.lib is no plain file" in text
    assert "model.lib:7:1: .include: sub is no plain file" in text
    assert "no plain file" in str(refusal(folder / "pipe.lib", folder))
    assert "no plain file" in str(refusal(Path("/dev/zero"), Path("/dev")))
    assert "cannot be read" in str(refusal(folder / "nothing.lib", folder))
    assert time.process_time() - begun < 2


def test_sizes_and_depths_are_bounded(folder: Path) -> None:
    assert "larger than 1000000 bytes" in str(refusal(write(folder, GOOD + "*" * 1_000_001), folder))
    assert "characters long; at most" in str(refusal(write(folder, GOOD + "+ 1\n" * 30_000), folder))
    for index in range(12):
        write(folder, f".include deep{index + 1}.inc\n", f"deep{index}.inc")
    write(folder, "* end\n", "deep12.inc")
    assert "more than 8 deep" in str(refusal(write(folder, GOOD + ".include deep0.inc\n"), folder))
    for index in range(40):
        write(folder, "* nothing\n", f"wide{index}.inc")
    wide = GOOD + "".join(f".include wide{index}.inc\n" for index in range(40))
    assert "more than 32 files" in str(refusal(write(folder, wide), folder))
    small = Limits(total_bytes=200)
    write(folder, "* " + "x" * 150 + "\n", "big.inc")
    assert "together are larger than 200" in str(
        refusal(write(folder, GOOD + ".include big.inc\n"), folder, small)
    )
    assert "more than 3 cards" in str(refusal(write(folder, GOOD), folder, Limits(cards=3)))


def test_a_circle_of_includes_is_read_once(folder: Path) -> None:
    write(folder, ".include model.lib\n.model dx d(is=1f)\n", "other.inc")
    model = screen(write(folder, ".include other.inc\n.subckt a p n\nd1 p n dx\n.ends\n"), folder)
    assert "other.inc:1: model.lib is in already and not read again" in model.rewrites


def test_faults_of_a_huge_file_are_bounded(folder: Path) -> None:
    error = refusal(write(folder, ".bogus\n" * 20_000), folder)
    assert len(error.faults) == Limits().faults


def test_all_faults_come_at_once_in_file_order(folder: Path) -> None:
    text = ".subckt a p n\nr1 p n 0\nc1 p n\nq1 p n p qq\n.bogus\n.ends\n"
    text += ".subckt b p n\nx1 p a\nr1 p n {y}\n.ends\n"
    error = refusal(write(folder, text), folder)
    assert [(fault.line, fault.key) for fault in error.faults] == [
        (2, "r1"), (3, "c1"), (4, "q1"), (5, ".bogus"), (8, "x1"), (9, "r1"),
    ]  # fmt: skip
    assert str(error).startswith("model.lib:2:8: r1: a resistance is 0; it must be above zero")


def test_nothing_of_a_comment_or_a_name_of_a_file_is_left(folder: Path) -> None:
    write(folder, ".model dx d(is=1f) ; marker\n", "marker.inc")
    text = "* marker\n.include marker.inc\n.subckt a p n ; marker\nd1 p n dx // marker\n"
    text += "* marker $ marker\n.ends $ marker\n"
    model = screen(write(folder, text), folder)
    assert isinstance(model, ScreenedModel)
    assert "marker" not in model.text
    assert model.text == ".model dx d(is=1e-15)\n.subckt a p n\nd1 p n dx\n.ends a\n"


SLOW = {
    "spaces": " " * 900_000,
    "stars": "*" * 900_000,
    "dots": "." * 50_000,
    "blank comment": "*" + " " * 900_000 + "x",
    "brackets": "r2 p n " + "(" * 25_000 + ")" * 25_000,
    "open brackets": "r2 p n " + "(" * 50_000,
    "open probes": "e2 o 0 value={" + "v(" * 20_000 + "}",
    "long probe": "e2 o 0 value={v(" + "p" * 50_000 + "}",
    "long sum": "r2 p n {" + "+".join(["1"] * 25_000) + "}",
    "long product": "e2 o 0 value={" + "*".join(["v(p)"] * 9_000) + "}",
    "long list": "e2 o 0 poly(1) p n " + "1 " * 25_000,
    "many equals": ".param " + "a= " * 15_000,
    "many parameters": ".param " + " ".join(f"a{i}={{a{i + 1}}}" for i in range(5_000)) + " a5000=1",
    "alike names": "\n".join(
        f"r{i} {format(i, '014b').replace('0', '.').replace('1', '/')} n 1" for i in range(12_000)
    ),
    "many sets": "\n".join(f"d{i} p n dx" for i in range(5_000))
    + "\n.ends\n.model dx d\n.subckt top p n o\n"
    + "\n".join(f"x{i} p n o amp k={i + 1}" for i in range(1_500)),
}


@pytest.mark.parametrize("name", list(SLOW))
def test_no_text_takes_long(name: str, folder: Path) -> None:
    """Each is short work, or refused; 10 s is far above what any takes and far below what a square law
    would."""
    parameters = " params: k=1" if name == "many sets" else ""
    path = write(folder, f".subckt amp p n o{parameters}\nr1 p n 1k\nr3 o 0 1k\n{SLOW[name]}\n.ends\n")
    begun = time.process_time()
    with contextlib.suppress(SpecError):
        screen(path, folder)
    assert time.process_time() - begun < 10


def test_names_of_files_cannot_carry_lines_into_messages(folder: Path) -> None:
    path = folder / "a\n.control\x1b.lib"
    path.write_text(GOOD + ".bogus\n" + GOOD)
    text = str(refusal(path, folder))
    assert len(text.splitlines()) == 2
    assert r"a\n.control\x1b.lib:6:1: .bogus" in text
    assert "NUL" in str(refusal(folder / "a\0.lib", folder))
