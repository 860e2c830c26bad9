"""The run folder: it appears whole or not at all, and what a stopped run solved can be kept for the next."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from modepair.runner.errors import OutputError

__all__ = ["JOURNAL_FILE", "RunFolder", "run_folder"]

RUN_FILE = "run.json"
LOCK_FILE = ".lock"
JOURNAL_FILE = "solved.journal"

RESUMABLE = "what was solved is kept: modepair run SPEC -o {target} --resume goes on from there"


class RunFolder:
    """A run folder being written, under a hidden name beside the place where it will appear.

    Parameters
    ----------
    target : Path
        Where it will appear.
    building : Path
        Where it is written.

    Attributes
    ----------
    resumable : bool
        Whether its journal holds what a later run can go on from.
    """

    def __init__(self, target: Path, building: Path) -> None:
        self.target = target
        self.building = building
        self.resumable = False

    def path(self, name: str) -> Path:
        """Path of a file of the folder, to write to; its parent is made."""
        path = self.building / name
        path.parent.mkdir(parents=True, exist_ok=True)
        return path

    def write_text(self, name: str, text: str) -> None:
        """Write a text file of the folder."""
        self.path(name).write_text(text, encoding="utf-8")

    def publish(self, record: dict[str, Any]) -> None:
        """Write the record of the run and put the folder in its place, instead of an older run's.

        Parameters
        ----------
        record : dict
            What `run.json` holds.
        """
        self.write_text(RUN_FILE, json.dumps(record, indent=2, ensure_ascii=False) + "\n")
        with _turn(self.target.parent):
            for name in (JOURNAL_FILE, LOCK_FILE):
                (self.building / name).unlink(missing_ok=True)
            self.resumable = False
            self.building.chmod(0o755)
            if self.target.exists():
                retired = Path(tempfile.mkdtemp(prefix=_hidden_prefix(self.target), dir=self.target.parent))
                os.replace(self.target, retired / self.target.name)
                os.replace(self.building, self.target)
                shutil.rmtree(retired, ignore_errors=True)
            else:
                os.replace(self.building, self.target)


def _hidden_prefix(target: Path) -> str:
    return f".{target.name}.unfinished-"


@contextmanager
def _turn(parent: Path) -> Iterator[None]:
    """Let one process at a time begin or publish in a directory; some network drives cannot, and go without."""
    descriptor = os.open(parent, os.O_RDONLY)
    try:
        with contextlib.suppress(OSError):
            fcntl.flock(descriptor, fcntl.LOCK_EX)
        yield
    finally:
        os.close(descriptor)


def _locked(building: Path) -> int | None:
    """Take the lock of an unfinished folder; None if a living run has it."""
    descriptor = os.open(building / LOCK_FILE, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        os.close(descriptor)
        return None
    return descriptor


def _journal_size(building: Path) -> int:
    journal = building / JOURNAL_FILE
    return journal.stat().st_size if journal.is_file() else 0


def _begin(target: Path, resume: bool) -> tuple[Path, int, bool]:
    """Make a folder to write in, or take up the one of a stopped run: the folder, its lock, and which it is.

    Of several left behind that with the most in its journal is taken, by name where they tie; the others go.
    """
    prefix = _hidden_prefix(target)
    left = [path for path in target.parent.iterdir() if path.name.startswith(prefix) and path.is_dir()]
    left.sort(key=lambda path: (-_journal_size(path), path.name))
    locks: dict[Path, int] = {}
    try:
        for path in left:
            lock = _locked(path)
            if lock is None:
                raise OutputError(
                    f"{target}: another run is writing it; wait for that, or name another with -o"
                )
            locks[path] = lock
        for path in left[1 if resume and left and _journal_size(left[0]) else 0 :]:
            shutil.rmtree(path, ignore_errors=True)
            os.close(locks.pop(path))
        if locks:
            ((path, lock),) = locks.items()
            _clear(path)
            locks.clear()
            return path, lock, True
    finally:
        for lock in locks.values():
            os.close(lock)
    building = Path(tempfile.mkdtemp(prefix=prefix, dir=target.parent))
    lock = _locked(building)
    if lock is None:
        raise OutputError(f"{target}: cannot be locked; name another with -o")
    return building, lock, False


def _clear(building: Path) -> None:
    """Remove all but the journal and the lock."""
    for path in building.iterdir():
        if path.is_dir():
            shutil.rmtree(path, ignore_errors=True)
        elif path.name not in (JOURNAL_FILE, LOCK_FILE):
            path.unlink(missing_ok=True)


@contextmanager
def run_folder(target: Path, *, resume: bool = False) -> Iterator[RunFolder]:
    """Write a run folder.

    Parameters
    ----------
    target : Path
        Where it appears when `RunFolder.publish` is called. If the block ends without that, nothing is left, save the
        journal of a run that was stopped, or could not write on, with `RunFolder.resumable` set.
    resume : bool
        Take up the journal of a run that was stopped or killed, where there is one. Otherwise it is removed.

    Yields
    ------
    RunFolder
        The folder, to write to.

    Raises
    ------
    OutputError
        If the place is taken by something that is not a run folder or by a living run, or cannot be written.
    """
    target = Path(os.path.abspath(target))
    if target.exists() and not (target / RUN_FILE).is_file() and not _is_empty_folder(target):
        raise OutputError(
            f"{target}: exists and is not a run folder (it holds no {RUN_FILE}); "
            "name another folder with -o, or remove it"
        )
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        with _turn(target.parent):
            building, lock, taken_up = _begin(target, resume)
    except OSError as error:
        if isinstance(error, OutputError):
            raise
        raise OutputError(f"{target}: cannot be written: {error.strerror}; name another with -o") from error
    folder = RunFolder(target, building)
    folder.resumable = taken_up
    try:
        yield folder
    except BaseException as error:
        failure = _as_output_error(target, error)
        if folder.resumable and (isinstance(failure, OutputError) or not isinstance(failure, Exception)):
            if not isinstance(error, OutputError):
                # A refusal to resume is one; it has its own advice.
                failure.add_note(RESUMABLE.format(target=target))
        else:
            folder.resumable = False
        if failure is error:
            raise
        raise failure from error
    finally:
        if folder.resumable:
            _clear(building)
        else:
            shutil.rmtree(building, ignore_errors=True)
        os.close(lock)


def _as_output_error(target: Path, error: BaseException) -> BaseException:
    """Tell that the folder could not be written, if that is what a system error says."""
    if not isinstance(error, OSError) or isinstance(error, OutputError):
        return error
    # Some writers give no number; then their text must do.
    return OutputError(f"{target}: cannot be written: {error.strerror or error}")


def _is_empty_folder(target: Path) -> bool:
    return target.is_dir() and not any(target.iterdir())
