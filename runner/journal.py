"""The journal of a run: what was solved, batch by batch, so that a run that was stopped can go on.

Records are appended and handed to the system batch by batch, so they outlive the process; each has a checksum, and
reading ends at the first one that is torn. A run that resumes is given the same results bit by bit, so its files are
the same bytes. The first record tells what the run was made of; only a run made of the same goes on.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import struct
import zlib
from collections.abc import Iterable, Iterator, Mapping
from types import TracebackType
from typing import BinaryIO

import numpy as np

from modepair.runner.analyses import Analyses
from modepair.runner.batches import Batch, Solved
from modepair.runner.errors import OutputError
from modepair.runner.folder import JOURNAL_FILE, RunFolder
from modepair.runner.plans import BatchPlan, Plan
from modepair.runner.record import versions
from modepair.sweeps import Sweep

__all__ = ["JOURNAL_BYTES", "Journal", "run_key"]

JOURNAL_BYTES = 4 << 30
"""Size at which a journal stops growing; what is solved after that is solved again when the run resumes."""

FRAME = struct.Struct("<QI")
"""Length and CRC-32 of what follows."""

LENGTHS = struct.Struct("<III")
"""Bytes of the note, results, frequencies."""

CHANGED = {
    "spec": "the spec has changed since it was begun",
    "stage": "the stage's circuit file has changed since it was begun",
    "circuits": "the op-amp data have changed since it was begun",
    "draw": "it was begun with another --draw",
}


def run_key(
    sweep: Sweep, plans: Iterable[BatchPlan], analyses: Analyses, draws: int, draw: int
) -> dict[str, str]:
    """Tell what decides every bit of a run's results.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    plans : iterable of BatchPlan
        Its nominal batches.
    analyses : Analyses
        What is run on each case.
    draws : int
        Draws of each case.
    draw : int
        The draw that stands in for the nominal run, or 0.

    Returns
    -------
    dict of str to str
        Digests of the spec, of the stage's own circuit if it has one, and of all circuits with their values and
        tolerances; the draw; versions.
    """
    circuits = hashlib.sha256()
    for deck in dict.fromkeys(plan.deck.text for plan in plans):
        circuits.update(deck.encode())
    for block in sweep.blocks:
        circuits.update(f"{block.topology} {block.opamps}".encode())
        for values in (block.parts, block.tolerances):
            for name, value in sorted(values.items()):
                circuits.update(name.encode() + np.asarray(value, np.float64).tobytes())
    circuits.update(repr([command for command, _, _ in analyses.commands]).encode())
    circuits.update(repr((draws, sweep.spec.tolerance)).encode())
    own = sweep.spec.circuit
    return {
        "spec": sweep.spec.digest,
        "stage": own.digest if own else "",
        "draw": str(draw),
        "circuits": circuits.hexdigest(),
        **versions(""),
    }


class Journal:
    """The journal of a run; use it as a context manager.

    Parameters
    ----------
    folder : RunFolder
        Holds it. One that was taken up from a run that was stopped holds that run's.
    key : mapping of str to str
        What the run is made of, from `run_key`.

    Raises
    ------
    OutputError
        If the run that was stopped was made of something else.
    """

    def __init__(self, folder: RunFolder, key: Mapping[str, str]) -> None:
        self._folder = folder
        self._path = folder.path(JOURNAL_FILE)
        self._found = 0
        self._engine = ""
        self._end = 0
        self._file: BinaryIO | None = self._path.open("r+b" if self._path.exists() else "w+b")
        try:
            self._begin(self._file, key)
        except BaseException:
            self._file.close()
            raise

    def __enter__(self) -> Journal:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._file is not None:
            self._file.close()

    def _begin(self, file: BinaryIO, key: Mapping[str, str]) -> None:
        header = _frame(file)
        if header is None:
            # New, or of a run that was killed before it had written as much as this.
            file.seek(0)
            file.truncate()
            self._append(json.dumps(dict(key)).encode())
        else:
            self._refuse_other(json.loads(header), key)
            self._folder.resumable = True
        self._end = file.tell()

    def _refuse_other(self, begun: Mapping[str, str], key: Mapping[str, str]) -> None:
        for name in key:
            if begun.get(name) != key[name]:
                why = CHANGED.get(name, f"it was begun with {name} {begun.get(name)}, this is {key[name]}")
                raise self._refusal(why)

    def _refusal(self, why: str) -> OutputError:
        return OutputError(
            f"{self._folder.target}: the unfinished run cannot be resumed: {why}; run without --resume to begin anew"
        )

    def batches(self, plans: Iterable[Plan]) -> Iterator[Batch | Solved]:
        """Work out a run's batches, and give what the journal holds in the place of those that it holds.

        Parameters
        ----------
        plans : iterable of Plan
            All batches of the run, in order.

        Yields
        ------
        Batch or Solved
            For each plan.
        """
        reading = self._file is not None
        for plan in plans:
            # Worked out in any case, since a deck holds the values of the first batch that asks for it, and the last
            # digits of all that are solved on it depend on these.
            batch = plan.batch()
            solved = self._next(batch) if reading else None
            if solved is not None:
                self._found += 1
                self._engine = self._engine or solved.engine
                yield solved
                continue
            reading = False
            yield batch

    def _next(self, batch: Batch) -> Solved | None:
        """Read the next record if it is whole and of this batch; behind the last such one records are appended."""
        if self._file is None:
            return None
        self._file.seek(self._end)
        payload = _frame(self._file)
        solved = None if payload is None else _unpacked(payload)
        if solved is None or not np.array_equal(solved.position, batch.position):
            return None
        self._end = self._file.tell()
        return solved

    def recorded(self, solved: Iterable[Solved]) -> Iterator[Solved]:
        """Write down batches as they are solved.

        Parameters
        ----------
        solved : iterable of Solved
            What became of `batches`, in the same order.

        Yields
        ------
        Solved
            The same.

        Raises
        ------
        OutputError
            If the run that was stopped used another version of ngspice.
        """
        for index, one in enumerate(solved):
            if index >= self._found:
                if self._engine and one.engine and one.engine != self._engine:
                    raise self._refusal(f"it was begun with ngspice {self._engine}, this is {one.engine}")
                self._engine = self._engine or one.engine
                self._record(one)
            yield one

    def _record(self, solved: Solved) -> None:
        if self._file is None or self._end > JOURNAL_BYTES:
            return
        try:
            self._file.seek(self._end)
            self._file.truncate()
            self._append(*_packed(solved))
            self._end = self._file.tell()
            self._folder.resumable = True
        except OSError:
            # Results matter more than a journal: give its room to them.
            self._folder.resumable = False
            self._drop()

    def _append(self, *parts: bytes) -> None:
        if self._file is None:
            return
        checksum = 0
        for part in parts:
            checksum = zlib.crc32(part, checksum)
        self._file.write(FRAME.pack(sum(len(part) for part in parts), checksum))
        for part in parts:
            self._file.write(part)
        self._file.flush()

    def _drop(self) -> None:
        if self._file is None:
            return
        # What it could not write is still in its buffer, and closing tries again.
        with contextlib.suppress(OSError):
            self._file.close()
        self._file = None
        self._path.unlink(missing_ok=True)


def _frame(file: BinaryIO) -> bytes | None:
    """Read a record; None where the file ends or the record is torn."""
    head = file.read(FRAME.size)
    if len(head) < FRAME.size:
        return None
    length, checksum = FRAME.unpack(head)
    if length > os.fstat(file.fileno()).st_size - file.tell():
        return None
    payload = file.read(length)
    return payload if len(payload) == length and zlib.crc32(payload) == checksum else None


def _packed(solved: Solved) -> tuple[bytes, ...]:
    failures = {str(position): reason for position, reason in solved.failures.items()}
    note = json.dumps({"failures": failures, "engine": solved.engine, "lost": solved.lost}).encode()
    count, _, points = solved.gains.shape
    return (
        LENGTHS.pack(len(note), count, points),
        note,
        solved.position.astype("<i8").tobytes(),
        np.ascontiguousarray(solved.gains, "<c16").tobytes(),
    )


def _unpacked(payload: bytes) -> Solved:
    note_length, count, points = LENGTHS.unpack_from(payload)
    start = LENGTHS.size + note_length
    note = json.loads(payload[LENGTHS.size : start])
    position = np.frombuffer(payload, "<i8", count, start).astype(np.int64)
    gains = np.frombuffer(payload, "<c16", count * 2 * points, start + 8 * count)
    return Solved(
        position,
        gains.reshape(count, 2, points).astype(np.complex128),
        {int(place): reason for place, reason in note["failures"].items()},
        note["engine"],
        note["lost"],
    )
