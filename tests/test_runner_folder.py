"""A run folder appears whole or not at all."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from modepair.runner.errors import OutputError
from modepair.runner.folder import run_folder


def names(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def test_it_appears_when_published(tmp_path: Path) -> None:
    target = tmp_path / "runs" / "one"
    with run_folder(target) as folder:
        folder.write_text("decks/a.cir", "deck")
        assert not target.exists()
        folder.publish({"title": "Ω"})
    assert json.loads((target / "run.json").read_text(encoding="utf-8")) == {"title": "Ω"}
    assert names(target) == ["decks", "run.json"]
    assert names(target.parent) == ["one"]


def test_nothing_is_left_of_one_that_fails(tmp_path: Path) -> None:
    def fail() -> None:
        with run_folder(tmp_path / "one") as folder:
            folder.write_text("summary.md", "text")
            raise RuntimeError("half-way")

    with pytest.raises(RuntimeError, match="half-way"):
        fail()
    assert names(tmp_path) == []


def test_a_new_run_takes_the_place_of_an_old_one_and_keeps_nothing_of_it(tmp_path: Path) -> None:
    target = tmp_path / "one"
    for content in ("old.txt", "new.txt"):
        with run_folder(target) as folder:
            folder.write_text(content, "x")
            folder.publish({})
    assert names(target) == ["new.txt", "run.json"]
    assert names(tmp_path) == ["one"]


def test_an_old_run_stays_when_a_new_one_fails(tmp_path: Path) -> None:
    target = tmp_path / "one"
    with run_folder(target) as folder:
        folder.publish({"run": 1})
    with pytest.raises(RuntimeError, match="half-way"), run_folder(target):
        raise RuntimeError("half-way")
    assert json.loads((target / "run.json").read_text(encoding="utf-8")) == {"run": 1}


def test_a_folder_that_is_no_run_is_not_touched(tmp_path: Path) -> None:
    target = tmp_path / "thesis"
    target.mkdir()
    (target / "chapter.txt").write_text("years of work", encoding="utf-8")
    with pytest.raises(OutputError, match="not a run folder.*-o"), run_folder(target):
        pass
    assert names(target) == ["chapter.txt"]


def test_a_file_in_the_place_is_not_touched(tmp_path: Path) -> None:
    (tmp_path / "one").write_text("x", encoding="utf-8")
    with pytest.raises(OutputError, match="not a run folder"), run_folder(tmp_path / "one"):
        pass


def test_a_place_that_cannot_be_made_is_said_plainly(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x", encoding="utf-8")
    with pytest.raises(OutputError, match="cannot be written"), run_folder(tmp_path / "file" / "one"):
        pass


def test_what_a_killed_run_left_goes_with_the_next(tmp_path: Path) -> None:
    left = tmp_path / ".one.unfinished-dead"
    left.mkdir()
    (left / "curves.parquet").write_text("half", encoding="utf-8")
    (left / "solved.journal").write_text("some", encoding="utf-8")
    with run_folder(tmp_path / "one") as folder:
        assert not left.exists()
        folder.publish({"run": 1})
    assert names(tmp_path) == ["one"]


def test_a_second_run_into_the_same_folder_is_refused_and_the_first_goes_on(tmp_path: Path) -> None:
    for resume in (False, True):
        with run_folder(tmp_path / "one") as living:
            with (
                pytest.raises(OutputError, match="another run is writing it; wait for that, or name another"),
                run_folder(tmp_path / "one", resume=resume),
            ):
                pass
            living.publish({"run": 1})
        assert json.loads((tmp_path / "one" / "run.json").read_text(encoding="utf-8")) == {"run": 1}
        assert names(tmp_path) == ["one"]


def test_a_name_with_brackets_is_taken_as_it_is(tmp_path: Path) -> None:
    left = tmp_path / ".one[1].unfinished-dead"
    other = tmp_path / ".one1.unfinished-dead"
    left.mkdir()
    other.mkdir()
    with run_folder(tmp_path / "one[1]") as folder:
        folder.publish({})
    assert names(tmp_path) == [".one1.unfinished-dead", "one[1]"]


def stop_half_way(target: Path, error: BaseException) -> None:
    with run_folder(target) as folder:
        folder.write_text("solved.journal", "some")
        folder.write_text("decks/a.cir", "deck")
        folder.resumable = True
        raise error


def test_of_a_run_that_was_stopped_the_journal_alone_is_kept_until_it_is_taken_up(tmp_path: Path) -> None:
    for number, error in enumerate((KeyboardInterrupt("half-way"), OSError(28, "No space left on device"))):
        target = tmp_path / str(number) / "one"
        with pytest.raises((KeyboardInterrupt, OutputError), match="half-way|No space left") as caught:
            stop_half_way(target, error)
        assert "--resume goes on from there" in caught.value.__notes__[0]
        (left,) = target.parent.iterdir()
        assert names(left) == [".lock", "solved.journal"]
        with run_folder(target, resume=True) as again:
            assert again.building == left
            assert names(left) == [".lock", "solved.journal"]
            again.publish({})
        assert names(target) == ["run.json"]
        assert names(target.parent) == ["one"]


def test_of_a_run_that_failed_otherwise_nothing_is_kept(tmp_path: Path) -> None:
    with pytest.raises(RuntimeError, match="half-way"):
        stop_half_way(tmp_path / "one", RuntimeError("half-way"))
    assert names(tmp_path) == []
