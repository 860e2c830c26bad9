"""Words as they are written in a spec: names, choices and free text."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, ClassVar

from modepair.sweeps.faults import RefusedError, form_of, shown


def nearest(word: str, known: Iterable[str]) -> str:
    """Return the known word nearest to `word`, or an empty text if none is near.

    Parameters
    ----------
    word
        A word as written.
    known
        The words that are taken.

    Returns
    -------
    str
        One of `known`, or empty.
    """
    by_lower = {item.lower(): item for item in known if item.isprintable()}
    found = difflib.get_close_matches(word[:200].lower(), by_lower, n=1, cutoff=0.6)
    return by_lower[found[0]] if found else ""


def suggestion(word: str, known: Iterable[str]) -> str:
    """Return ``; did you mean X?`` for the nearest known word, or an empty text."""
    near = nearest(word, known)
    return f"; did you mean {near}?" if near else ""


def listed(words: Iterable[str]) -> str:
    """Return words as a list in prose: ``A1, A2 and A3``."""
    items = list(words)
    return " and ".join([", ".join(items[:-1]), items[-1]]) if len(items) > 1 else "".join(items)


def _as_text(written: object, takes: str) -> str:
    if isinstance(written, str):
        return written
    raise RefusedError(form_of(written), takes)


@dataclass(frozen=True)
class Choice:
    """One word out of a fixed set.

    Parameters
    ----------
    noun
        With its article: ``a topology``.
    words
        The words taken.
    """

    noun: str
    words: tuple[str, ...]

    @property
    def takes(self) -> str:
        """The words that are taken."""
        return f"{', '.join(self.words[:-1])} or {self.words[-1]}"

    def parse(self, written: object) -> str:
        """Return the word; raise `RefusedError` with the nearest known one for any other."""
        text = _as_text(written, self.takes).strip()
        if not text:
            raise RefusedError("no value is given", self.takes)
        if text not in self.words:
            near = suggestion(text, self.words)
            raise RefusedError(f"{shown(text)} is not {self.noun}{near}", self.takes)
        return text

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the word."""
        return {"enum": list(self.words)}


@dataclass(frozen=True)
class Name:
    """A name in lower case, such as an op-amp candidate's; safe in file names, paths and tables.

    Parameters
    ----------
    noun
        With its article: ``an op-amp name``.
    example
        A name as a user would write it.
    longest
        Characters allowed.
    """

    noun: str
    example: str
    longest: int = 64
    pattern: ClassVar[re.Pattern[str]] = re.compile("[a-z0-9][a-z0-9_-]*")

    @property
    def takes(self) -> str:
        """The characters that are taken."""
        return (
            f"{self.noun} of at most {self.longest} lower-case letters a-z, digits, - and _, "
            f"starting with a letter or digit, such as {self.example}"
        )

    def parse(self, written: object) -> str:
        """Return the name; raise `RefusedError` where it holds anything else than its plain characters."""
        text = _as_text(written, self.takes)
        if not text:
            raise RefusedError("no value is given", self.takes)
        if not self.pattern.fullmatch(text) or len(text) > self.longest:
            raise RefusedError(f"{shown(text)} is not a name", self.takes)
        return text

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the name."""
        return {
            "type": "string",
            "pattern": f"^{self.pattern.pattern}$",
            "maxLength": self.longest,
            "examples": [self.example],
        }


@dataclass(frozen=True)
class Text:
    """Free text in one line.

    Parameters
    ----------
    longest
        Characters allowed.
    """

    longest: int

    @property
    def takes(self) -> str:
        """What is taken."""
        return f"printable text in one line, at most {self.longest} characters"

    def parse(self, written: object) -> str:
        """Return the text without blanks around it; raise `RefusedError` for line breaks and controls."""
        text = _as_text(written, self.takes).strip()
        if len(text) > self.longest:
            raise RefusedError(f"{shown(text)} has {len(text)} characters", self.takes)
        for character in text:
            if not character.isprintable() and character != "\u00a0":
                raise RefusedError(f"{shown(text)} holds the character U+{ord(character):04X}", self.takes)
        return text

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the text."""
        return {"type": "string", "maxLength": self.longest}
