"""Faults of a spec: what is wrong, where it stands, and how to put it right."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

SHOWN_LENGTH = 60
"""Characters of a written value that a message repeats before it cuts the rest."""

LONGEST_PATH = 4096
"""Characters that a message shows of a file's path: as many as a path may have."""

SHOWN_FAULTS = 50
"""Faults that the text of a `SpecError` lists; `SpecError.faults` holds all of them."""


class ModepairError(Exception):
    """Base class of the errors that modepair raises."""


def shown(text: str, longest: int = SHOWN_LENGTH) -> str:
    """Return `text` safe to print in one line: control characters escaped, long text cut.

    Parameters
    ----------
    text
        Any text, as it stood in a file.
    longest
        Characters shown.

    Returns
    -------
    str
        The same text where it is short and printable.
    """
    cut = text if len(text) <= longest else text[:longest] + "..."
    return "".join(
        character
        if character.isprintable()
        else character.encode("unicode_escape", "replace").decode("ascii")
        for character in cut
    )


def form_of(written: object) -> str:
    """Say what form a value has that is of the wrong form: a mapping, a list, a single value, or none."""
    if isinstance(written, Mapping):
        return "this is a mapping"
    if isinstance(written, list | tuple):
        return "this is a list"
    text = "" if written is None else str(written).strip()
    return f"{shown(text)} is a single value" if text else "no value is given"


class RefusedError(ModepairError, ValueError):
    """A value that a key does not take; it does not know yet where the value stands.

    Parameters
    ----------
    what
        The value and what is wrong with it: ``10 pF is a capacitance``.
    takes
        What the key takes instead: ``a resistance, such as 10k``. Empty where `what` says all.
    """

    def __init__(self, what: str, takes: str = "") -> None:
        super().__init__(what, takes)
        self.what = what
        self.takes = takes

    def message(self, name: str) -> str:
        """Return the wording for the key called `name`."""
        if not self.takes:
            return self.what
        return f"{self.what}{'' if self.what.endswith('?') else ';'} {name} takes {self.takes}"

    def __str__(self) -> str:
        return self.message("this key")


class SeveralRefusedError(ModepairError, ValueError):
    """Several refusals inside one mapping or list, each with its place relative to it.

    Parameters
    ----------
    refusals
        Pairs of a relative location (keys and list indexes) and the refusal there.
    """

    def __init__(self, refusals: Iterable[tuple[tuple[str | int, ...], RefusedError]]) -> None:
        self.refusals = tuple(refusals)
        super().__init__(self.refusals)

    def __str__(self) -> str:
        return "; ".join(str(refusal) for _, refusal in self.refusals)


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong in a file.

    Parameters
    ----------
    file
        The file's name as the user gave it.
    line, column
        Place, counted from 1 in lines and characters; 0 where the whole file is meant.
    key
        Dotted path of the key, such as ``stage.parts.R1``; empty where no key is meant.
    message
        What is wrong, the value, what is allowed, the remedy.
    """

    file: str
    line: int
    column: int
    key: str
    message: str

    @property
    def where(self) -> str:
        """``file:line:column``, or the file alone."""
        file = shown(self.file, LONGEST_PATH)
        return f"{file}:{self.line}:{self.column}" if self.line else file

    def __str__(self) -> str:
        key = f"{shown(self.key)}: " if self.key else ""
        return f"{self.where}: {key}{self.message}"


class SpecError(ModepairError, ValueError):
    """A spec, or a file of candidates, that cannot be used; it lists every fault.

    Parameters
    ----------
    faults
        The faults in file order; at least one.
    """

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults: tuple[Fault, ...] = tuple(faults)
        super().__init__(self.faults)

    def __str__(self) -> str:
        lines = [str(fault) for fault in self.faults[:SHOWN_FAULTS]]
        more = len(self.faults) - len(lines)
        if more:
            lines.append(f"... and {more} more faults")
        return "\n".join(lines)
