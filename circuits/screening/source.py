"""The text of a model file as cards: decoded, comments gone, continuation lines joined.

Only what `cards_of` returns is ever looked at again; a comment does not survive it.
"""

from __future__ import annotations

import bisect
import re
from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.places import CardError, Findings, Place
from modepair.sweeps.faults import shown

__all__ = ["Card", "cards_of", "decode"]

_SEPARATORS = {
    "\r": "a carriage return inside a line",
    "\v": "a vertical tab",
    "\f": "a form feed",
    "\x85": "the line separator U+0085",
    "\u2028": "the line separator U+2028",
    "\u2029": "the paragraph separator U+2029",
}
_UNPRINTED = re.compile("[^\t\x20-\x7e\xa0-\u2027\u202a-\U0010ffff]")
_STRANGE = re.compile("[^\t\x20-\x7e]")
_TAKEN = re.compile(r"[`\\@#]")
_TAIL = re.compile(r";|//|(?:(?<=[ \t,])|^)\$")
_ENCRYPTED = re.compile(
    r"\$cdnenc|\$encrypted|\$begin_encrypt"
    r"|^[.*]* ?\.?(?:un)?prot(?:ect)?$|^\*? ?\$?encrypt(?:ed)?_?(?:lib|begin|start)"
)
_COMMANDS = re.compile(r"\*\s*(?:#|ng_script)")


@dataclass(frozen=True)
class Card:
    """One card: a line with its continuation lines.

    Attributes
    ----------
    text : str
        ASCII, lower case but for `written`; tabs are spaces.
    written : str
        The same text in the case of the file, for file names.
    starts : tuple of (int, Place)
        Where each joined piece of the text stands in the file.
    """

    text: str
    written: str
    starts: tuple[tuple[int, Place], ...]

    def place(self, offset: int = 0) -> Place:
        """Return the place of the character at `offset`."""
        index = max(0, bisect.bisect_right(self.starts, offset, key=lambda start: start[0]) - 1)
        begin, place = self.starts[index]
        return Place(place.file, place.line, place.column + offset - begin)


def decode(data: bytes, file: str) -> str:
    """Decode a file: UTF-8, else Windows code page 1252.

    Parameters
    ----------
    data : bytes
        The file's bytes.
    file : str
        Its name, for the message.

    Returns
    -------
    str
        The text, with line ends as ``\\n`` and both micro signs as u.

    Raises
    ------
    CardError
        When the bytes are no such text.
    """
    if data.startswith((b"\xff\xfe", b"\xfe\xff")) or b"\x00" in data:
        raise CardError(Place(file), "this file is not plain text (UTF-16 or binary); save it as UTF-8")
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError:
        try:
            text = data.decode("cp1252")
        except UnicodeDecodeError as error:
            line = data.count(b"\n", 0, error.start) + 1
            raise CardError(
                Place(file, line, 1),
                f"byte {data[error.start]:#04x} is no character of UTF-8 or code page 1252; save the "
                f"file as UTF-8",
            ) from None
    return (
        text.rstrip("\x1a")
        .replace("\r\n", "\n")
        .replace("\N{MICRO SIGN}", "u")
        .replace("\N{GREEK SMALL LETTER MU}", "u")
    )


def cards_of(text: str, file: str, findings: Findings) -> Iterator[Card]:
    """Yield the cards of a text; what is wrong with a line goes to `findings`.

    Parameters
    ----------
    text : str
        As `decode` returns it.
    file : str
        The file's name.
    findings : Findings
        Gets the faults.

    Yields
    ------
    Card
        In file order, never empty.
    """
    pieces: list[tuple[str, Place]] = []
    spoilt = False
    for number, raw in enumerate(text.split("\n"), start=1):
        place = Place(file, number, 1)
        try:
            line = _without_comment(raw, place)
        except CardError as refused:
            findings.refuse(refused)
            # The rest of the card this line belongs to would be read wrongly.
            spoilt = spoilt or raw.lstrip(" \t").startswith("+")
            if not raw.lstrip(" \t").startswith(("+", "*")):
                yield from _card(pieces, findings, spoilt)
                pieces, spoilt = [], True
            continue
        stripped = line.strip(" ")
        if not stripped:
            continue
        column = len(line) - len(line.lstrip(" ")) + 1
        if stripped.startswith("+"):
            if not pieces:
                if not spoilt:
                    findings.refuse(
                        CardError(
                            Place(file, number, column),
                            "this continuation line continues nothing; remove the + or the line",
                        )
                    )
                continue
            pieces.append((stripped[1:], Place(file, number, column + 1)))
            continue
        yield from _card(pieces, findings, spoilt)
        pieces, spoilt = [(stripped, Place(file, number, column))], False
    yield from _card(pieces, findings, spoilt)


def _card(pieces: list[tuple[str, Place]], findings: Findings, spoilt: bool) -> Iterator[Card]:
    if not pieces or spoilt:
        return
    starts, length = [], 0
    for piece, place in pieces:
        starts.append((length, place))
        length += len(piece) + 1
    if length > findings.limits.card_length:
        findings.refuse(
            CardError(
                pieces[0][1],
                f"this card is {length} characters long; at most {findings.limits.card_length} are read",
            )
        )
        return
    written = " ".join(piece for piece, _ in pieces)
    yield Card(written.lower(), written, tuple(starts))


def _without_comment(raw: str, place: Place) -> str:
    """Return a line without its comment, tabs as spaces."""
    if strange := _UNPRINTED.search(raw):
        character = strange[0]
        name = _SEPARATORS.get(character, f"the control character U+{ord(character):04X}")
        raise CardError(
            Place(place.file, place.line, strange.start() + 1),
            f"{name} is in this line; a hidden line end can carry a command; write plain lines",
        )
    lower = raw.lower()
    if _ENCRYPTED.search(lower.strip()):
        raise CardError(
            place,
            "this file has an encrypted block, which cannot be checked; ask its maker for a readable model",
        )
    if _COMMANDS.match(lower.strip()):
        raise CardError(
            place, f"ngspice runs this comment as a command ({shown(raw.strip())}); remove the line"
        )
    line = raw.replace("\t", " ")
    if line.lstrip(" ").startswith("*"):
        return ""
    if tail := _TAIL.search(line):
        after = line[tail.end() : tail.end() + 1]
        if tail[0] == "$" and after not in ("", " ", "$"):
            raise CardError(
                Place(place.file, place.line, tail.start() + 1),
                f"{shown(line[tail.start() :].split(' ')[0])} is a name in one SPICE dialect and a "
                f"comment in another; write ; before a comment, and no $ in names",
            )
        line = line[: tail.start()]
    if strange := _STRANGE.search(line):
        raise CardError(
            Place(place.file, place.line, strange.start() + 1),
            f"the character {strange[0]!r} U+{ord(strange[0]):04X} stands outside a comment; write plain "
            f"ASCII",
        )
    if taken := _TAKEN.search(line):
        what = (
            "a back-quote runs a shell command in ngspice"
            if taken[0] == "`"
            else f"the character {taken[0]} is not taken"
        )
        raise CardError(Place(place.file, place.line, taken.start() + 1), f"{what}; remove it")
    return line
