"""Files of a model: the first one and those it includes, none from outside the spec's folder."""

from __future__ import annotations

import os
import re
import stat
from collections.abc import Iterator
from pathlib import Path

from modepair.circuits.screening.places import CardError, Findings, Place
from modepair.circuits.screening.source import Card, cards_of, decode
from modepair.sweeps.faults import shown

__all__ = ["Files"]

_NAME = re.compile(r"[A-Za-z0-9_.+\-][A-Za-z0-9_.+\-/ ]*")
_INCLUDE = re.compile(r"(\.\S+)\s*(.*)", re.DOTALL)
_INCLUDES = (".include", ".inc", ".lib")


class Files:
    """Reads a model file and inlines what it includes.

    Parameters
    ----------
    root : Path
        Folder that every file must lie in, links followed.
    findings : Findings
        Gets the faults; its limits bound what is read.

    Attributes
    ----------
    paths : list of Path
        Files read, in order.
    """

    def __init__(self, root: Path, findings: Findings) -> None:
        self.root = Path(os.path.realpath(root))
        self._written_root = Path(os.path.abspath(root))
        self.findings = findings
        self.paths: list[Path] = []
        self._total = 0

    def name(self, path: Path) -> str:
        """Return a file's name as the user would give it: relative to the root."""
        if "\0" in str(path):
            return shown(str(path))
        written = Path(os.path.abspath(path))
        for inner, root in ((written, self._written_root), (Path(os.path.realpath(path)), self.root)):
            if inner.is_relative_to(root):
                return inner.relative_to(root).as_posix()
        return path.name

    def cards(self, path: Path, depth: int = 1) -> Iterator[Card]:
        """Yield the cards of a file, with those of the files it includes in their place.

        Parameters
        ----------
        path : Path
            The file; must lie in the root.
        depth : int
            1 for the first file.

        Yields
        ------
        Card
            Without ``.include``, ``.lib`` and ``.end``.

        Raises
        ------
        CardError
            When the file cannot be read or may not be.
        """
        real, data = self._read(path, Place(self.name(path)))
        self.paths.append(real)
        file = self.name(path)
        ended: Place | None = None
        inside = 0
        for card in cards_of(decode(data, file), file, self.findings):
            first = card.text.split(" ", 1)[0]
            if ended is not None:
                self.findings.refuse(
                    CardError(
                        card.place(), f"this card follows .end (line {ended.line}); remove it, or the .end"
                    )
                )
                return
            if first == ".end" and card.text == ".end":
                ended = card.place()
            elif first in _INCLUDES:
                try:
                    target = self._target(card, path, inside > 0)
                    if target is not None:
                        if depth >= self.findings.limits.include_depth:
                            raise CardError(
                                card.place(),
                                f"files are included more than {depth} deep; put the models in fewer files",
                            )
                        yield from self._included(card, target, depth)
                except CardError as refused:
                    self.findings.refuse(refused, first)
            else:
                inside += (first == ".subckt") - (first == ".ends")
                yield card

    def _included(self, card: Card, target: Path, depth: int) -> Iterator[Card]:
        try:
            yield from self.cards(target, depth + 1)
        except CardError as refused:
            if refused.place.line:
                raise
            raise CardError(card.place(), refused.message) from None

    def _target(self, card: Card, includer: Path, inside: bool) -> Path | None:
        """Return the file that an include card names, or None where it is in already."""
        match = _INCLUDE.fullmatch(card.written)
        written = match[2].strip(" ") if match else ""
        for quote in "\"'":
            if len(written) >= 2 and written[0] == written[-1] == quote:
                written = written[1:-1]
                break
        else:
            if " " in written:
                raise CardError(
                    card.place(),
                    "a library section cannot be chosen; put the subcircuits you need in a file and "
                    "include that, with one name",
                )
        if not written:
            raise CardError(card.place(), "no file is named; write the file's name after it")
        if not _NAME.fullmatch(written):
            raise CardError(
                card.place(),
                f"{shown(written)} is not a relative file name of letters, digits, _ . + - and /; copy "
                f"the file into the spec's folder and name it so",
            )
        if inside:
            raise CardError(
                card.place(), "a file is included inside a subcircuit; include it before the .subckt"
            )
        target = includer.parent / written
        real = Path(os.path.realpath(target))
        self._check_inside(real, card.place(), written)
        if real in self.paths:
            self.findings.note(card.place(), f"{written} is in already and not read again")
            return None
        if len(self.paths) >= self.findings.limits.files:
            raise CardError(
                card.place(), f"more than {self.findings.limits.files} files; put the models in fewer files"
            )
        return real

    def _check_inside(self, real: Path, place: Place, written: str) -> None:
        if not real.is_relative_to(self.root):
            raise CardError(
                place, f"{shown(written)} lies outside the spec's folder; copy it into that folder"
            )

    def _read(self, path: Path, place: Place) -> tuple[Path, bytes]:
        """Return the real path and the bytes of a plain file inside the root."""
        name = self.name(path)
        if "\0" in str(path):
            raise CardError(place, "a file name holds a NUL character; rename the file")
        real = Path(os.path.realpath(path))
        self._check_inside(real, place, name)
        limit = self.findings.limits.file_bytes
        try:
            # Not blocking: opening a FIFO would wait for a writer.
            descriptor = os.open(
                real, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_NOFOLLOW", 0)
            )
        except (OSError, ValueError) as error:
            reason = error.strerror if isinstance(error, OSError) and error.strerror else "no such file"
            raise CardError(
                place, f"{shown(name)} cannot be read: {reason}; check the name and its permissions"
            ) from None
        try:
            if not stat.S_ISREG(os.fstat(descriptor).st_mode):
                raise CardError(
                    place, f"{shown(name)} is no plain file (a folder, a pipe or a device); name a plain file"
                )
            data = bytearray()
            while len(data) <= limit and (piece := os.read(descriptor, limit + 1 - len(data))):
                data += piece
        finally:
            os.close(descriptor)
        self._total += len(data)
        if len(data) > limit:
            raise CardError(
                place, f"{shown(name)} is larger than {limit} bytes; keep only the models you need in it"
            )
        if self._total > self.findings.limits.total_bytes:
            raise CardError(
                place,
                f"the files together are larger than {self.findings.limits.total_bytes} bytes; keep only "
                f"the models you need",
            )
        return real, bytes(data)
