"""The run folder: it appears whole or not at all."""

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
from typing import IO, Any

from modepair.runner.errors import OutputError

__all__ = ["RunFolder", "run_folder"]

RUN_FILE = "run.json"
LOCK_FILE = ".lock"


class RunFolder:
    """A run folder being written, under a hidden name beside the place where it will appear.

    Parameters
    ----------
    target : Path
        Where it will appear.
    building : Path
        Where it is written.
    """

    def __init__(self, target: Path, building: Path) -> None:
        self.target = target
        self.building = building

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
        (self.building / LOCK_FILE).unlink(missing_ok=True)
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


def _remove_leftovers(target: Path) -> None:
    """Remove what runs that were killed left behind; a living run holds a lock on its own."""
    for leftover in target.parent.glob(f"{_hidden_prefix(target)}*"):
        with contextlib.suppress(OSError), _lock(leftover):
            shutil.rmtree(leftover, ignore_errors=True)


@contextmanager
def _lock(building: Path) -> Iterator[IO[str]]:
    with (building / LOCK_FILE).open("w", encoding="ascii") as file:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        yield file


@contextmanager
def run_folder(target: Path) -> Iterator[RunFolder]:
    """Write a run folder.

    Parameters
    ----------
    target : Path
        Where it appears when `RunFolder.publish` is called. If the block ends without that, nothing is left.

    Yields
    ------
    RunFolder
        The folder, to write to.

    Raises
    ------
    OutputError
        If the place is taken by something that is not a run folder, or cannot be written.
    """
    target = Path(os.path.abspath(target))
    if target.exists() and not (target / RUN_FILE).is_file() and not _is_empty_folder(target):
        raise OutputError(
            f"{target}: exists and is not a run folder (it holds no {RUN_FILE}); "
            "name another folder with -o, or remove it"
        )
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        _remove_leftovers(target)
        building = Path(tempfile.mkdtemp(prefix=_hidden_prefix(target), dir=target.parent))
    except OSError as error:
        raise OutputError(f"{target}: cannot be written: {error.strerror}; name another with -o") from error
    try:
        with _lock(building):
            yield RunFolder(target, building)
    except OSError as error:
        if isinstance(error, OutputError) or error.errno is None:
            raise
        raise OutputError(f"{target}: cannot be written: {error.strerror}") from error
    finally:
        shutil.rmtree(building, ignore_errors=True)


def _is_empty_folder(target: Path) -> bool:
    return target.is_dir() and not any(target.iterdir())
