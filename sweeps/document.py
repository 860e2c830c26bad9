"""The YAML reader: plain text, mappings and lists, each with the line and column where it stands.

Every scalar stays the text that was written: YAML's own guesses (``no`` as a truth value, ``1:30`` as ninety,
``010`` as eight) never happen. What a spec has no use for is refused: keys given twice, tags, anchors and
aliases, merge keys, directives, more than one document, deep nesting, control characters.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NoReturn

import yaml

from modepair.sweeps.faults import Fault, SpecError, shown

LARGEST_FILE = 1_000_000
"""Bytes that a spec may have."""

DEEPEST = 12
"""Levels of nesting that a spec may have; a spec needs five."""

Location = tuple[str | int, ...]
"""Keys and list indexes from the top of a document."""

_CONTROLS = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u2028\u2029\u200e\u200f\u202a-\u202e\u2066-\u2069\ufeff\ufffe\uffff]"
)


@dataclass(frozen=True, slots=True, order=True)
class Place:
    """A place in a file: line and column from 1, in characters."""

    line: int
    column: int


@dataclass(slots=True)
class Node:
    """A value of the document.

    Parameters
    ----------
    place
        Where the value starts.
    text
        The text of a scalar; None for mappings and lists.
    entries
        Values by key of a mapping; None otherwise.
    keys
        Place of each key of a mapping.
    items
        Values of a list; None otherwise.
    """

    place: Place
    text: str | None = None
    entries: dict[str, Node] | None = None
    keys: dict[str, Place] = field(default_factory=dict)
    items: list[Node] | None = None

    @property
    def raw(self) -> object:
        """The value as text, dict and list."""
        if self.entries is not None:
            return {key: node.raw for key, node in self.entries.items()}
        if self.items is not None:
            return [node.raw for node in self.items]
        return self.text


def split_path(path: str) -> Location:
    """Split a dotted path with list indexes, such as ``tolerance.parts[0].matching``, into its tokens."""
    tokens: list[str | int] = []
    for piece in path.split("."):
        match = re.fullmatch(r"([^\[\]]*)((?:\[[0-9]{1,9}\])*)", piece)
        if match is None:
            tokens.append(piece)
            continue
        if match[1]:
            tokens.append(match[1])
        tokens.extend(int(index) for index in re.findall(r"[0-9]+", match[2]))
    return tuple(tokens)


def join_path(location: Sequence[str | int]) -> str:
    """Write a location as a dotted path, indexes in brackets."""
    path = ""
    for token in location:
        path += f"[{token}]" if isinstance(token, int) else f".{token}" if path else token
    return path


@dataclass(frozen=True)
class Document:
    """A file that was read, its values and their places.

    Parameters
    ----------
    file
        The file's name as given.
    text
        Its text, without a byte-order mark.
    root
        The mapping at its top.
    faults
        What the reader refused, in file order.
    unread
        Places of values that were refused and about which nothing more is to be said.
    """

    file: str
    text: str
    root: Node
    faults: tuple[Fault, ...]
    unread: frozenset[Place]

    def node(self, location: Sequence[str | int]) -> Node | None:
        """Return the value at a location, or None."""
        return _walk(self.root, tuple(location))[0]

    def key_place(self, location: Sequence[str | int]) -> Place:
        """Return where the key or list item at `location` stands, or the nearest one above that exists."""
        return _walk(self.root, tuple(location))[1]

    def value_place(self, location: Sequence[str | int]) -> Place:
        """Return where the value at `location` starts, or the nearest key above it that exists."""
        node, key = _walk(self.root, tuple(location))
        return key if node is None else node.place

    def has(self, location: Sequence[str | int]) -> bool:
        """Return whether the document has a value at `location`."""
        return self.node(location) is not None

    def fault(self, location: Sequence[str | int], message: str, *, at_key: bool = False) -> Fault:
        """Return a fault at the value (or at the key) of `location`."""
        place = self.key_place(location) if at_key else self.value_place(location)
        return Fault(self.file, place.line, place.column, join_path(location), message)


def _walk(root: Node, location: Location) -> tuple[Node | None, Place]:
    """Follow keys and indexes; keys that hold dots are matched as wholes."""
    node, place = root, root.place
    index = 0
    while index < len(location):
        token = location[index]
        if isinstance(token, int):
            if node.items is None or not 0 <= token < len(node.items):
                return None, place
            node = node.items[token]
            place = node.place
            index += 1
            continue
        entries = node.entries or {}
        length = next(
            (
                length
                for length in range(1, len(location) - index + 1)
                if ".".join(map(str, location[index : index + length])) in entries
            ),
            0,
        )
        if not length:
            return None, place
        key = ".".join(map(str, location[index : index + length]))
        node, place = entries[key], node.keys[key]
        index += length
    return node, place


def read_document(path: str | Path) -> Document:
    """Read a YAML file.

    Parameters
    ----------
    path
        A regular file of at most `LARGEST_FILE` bytes of UTF-8.

    Returns
    -------
    Document
        With the faults that leave the rest of the file readable.

    Raises
    ------
    SpecError
        When the file cannot be read at all.
    """
    return parse_document(_read_text(path), str(path))


def _read_text(path: str | Path) -> str:
    file = str(path)
    data = b""
    try:
        # A pipe or a device is not opened: it could block for ever, or never end.
        where = Path(path)
        if not where.exists():
            problem = "no such file"
        elif where.is_dir():
            problem = "this is a directory; a YAML file is needed"
        elif not where.is_file():
            problem = "this is not a regular file; a YAML file is needed"
        else:
            problem = ""
            with where.open("rb") as stream:
                data = stream.read(LARGEST_FILE + 1)
    except OSError as error:
        problem = f"the file cannot be read: {(error.strerror or 'unknown reason').lower()}"
    except ValueError:
        problem = "this is not a file name"
    if problem:
        raise SpecError([Fault(file, 0, 0, "", problem)])
    if len(data) > LARGEST_FILE:
        raise SpecError(
            [Fault(file, 0, 0, "", f"the file is larger than {LARGEST_FILE:,} bytes, the most allowed")]
        )
    try:
        return data.decode("utf-8").removeprefix("\ufeff")
    except UnicodeDecodeError as error:
        good = data[: error.start].decode("utf-8").removeprefix("\ufeff")
        place = _place_after(good)
        message = f"byte 0x{data[error.start]:02x} is not UTF-8; save the file as UTF-8"
        raise SpecError([Fault(file, place.line, place.column, "", message)]) from error


def _place_after(text: str) -> Place:
    lines = re.split("\r\n|\n|\r", text)
    return Place(len(lines), len(lines[-1]) + 1)


def parse_document(text: str, file: str) -> Document:
    """Read YAML text; `file` names it in messages. Raises `SpecError` as `read_document` does."""
    if match := _CONTROLS.search(text):
        place = _place_after(text[: match.start()])
        message = f"the character U+{ord(match[0]):04X} is not taken in a spec; remove it"
        raise SpecError([Fault(file, place.line, place.column, "", message)])
    return _Builder(text, file).document()


class _Builder:
    """Builds the tree from PyYAML's events, with a stack of its own: nesting cannot exhaust Python's."""

    def __init__(self, text: str, file: str) -> None:
        self.text = text
        self.file = file
        self.faults: list[Fault] = []
        self.unread: set[Place] = set()
        self.stack: list[tuple[Node, list[tuple[str | None, Place]]]] = []
        self.path: list[str | int] = []
        self.root: Node | None = None
        self.last = Place(1, 1)

    def document(self) -> Document:
        documents = 0
        for event in self._events():
            self.last = _place(event.start_mark)
            if isinstance(event, yaml.DocumentStartEvent):
                documents += 1
                if event.version or event.tags:
                    self._fault(self.last, "YAML directives (%) are not taken; remove them")
                if documents > 1:
                    self._fault(
                        self.last, "a second document begins here; a file holds one, so remove this ---"
                    )
                    break
            elif isinstance(event, yaml.ScalarEvent):
                self._refuse_extras(event, event.tag)
                self._add(Node(self.last, text=event.value), self.last)
            elif isinstance(event, yaml.MappingStartEvent):
                self._open(event, Node(self.last, entries={}))
            elif isinstance(event, yaml.SequenceStartEvent):
                self._open(event, Node(self.last, items=[]))
            elif isinstance(event, yaml.MappingEndEvent | yaml.SequenceEndEvent):
                self._close()
            elif isinstance(event, yaml.AliasEvent):
                self._fault(
                    self.last, f"the alias *{shown(event.anchor or '')} is not taken; write the value out"
                )
                self.unread.add(self.last)
                self._add(Node(self.last, text=""), self.last)
        if self.root is None or (self.root.text is not None and not self.root.text.strip()):
            self._stop(Place(1, 1), "the file is empty; it takes a mapping of keys")
        elif self.root.entries is None:
            form = "a list" if self.root.items is not None else f"the text {shown(self.root.text or '')}"
            self._stop(
                self.root.place,
                f"the top of the file is {form}; it takes a mapping of keys, such as title: ...",
            )
        return Document(self.file, self.text, self.root, self._in_order(), frozenset(self.unread))

    def _events(self) -> Iterator[yaml.Event]:
        try:
            yield from yaml.parse(self.text, Loader=yaml.SafeLoader)
        except yaml.MarkedYAMLError as error:
            mark = error.problem_mark or error.context_mark
            place = _place(mark) if mark else self.last
            self._stop(place, _syntax(error, self.text, place))
        except (yaml.YAMLError, ValueError, OverflowError, LookupError):
            self._stop(self.last, "what begins here is not YAML: a number or an escape in it is out of range")

    def _in_order(self) -> tuple[Fault, ...]:
        """Return the faults in file order: a key given twice is noticed only after its value."""
        return tuple(sorted(self.faults, key=lambda fault: (fault.line, fault.column)))

    def _stop(self, place: Place, message: str) -> NoReturn:
        self._fault(place, message)
        raise SpecError(self._in_order()) from None

    def _fault(self, place: Place, message: str, key: str = "") -> None:
        self.faults.append(Fault(self.file, place.line, place.column, key, message))

    def _refuse_extras(self, event: yaml.NodeEvent, tag: str | None) -> None:
        place = _place(event.start_mark)
        if event.anchor is not None:
            self._fault(
                place, f"the anchor &{shown(event.anchor)} is not taken; remove it and write values out"
            )
        if tag is not None:
            self._fault(place, f"the tag {shown(tag)} is not taken; write the plain value")

    def _open(self, event: yaml.CollectionStartEvent, node: Node) -> None:
        self._refuse_extras(event, event.tag)
        if len(self.stack) >= DEEPEST:
            self._stop(self.last, f"nested more than {DEEPEST} levels deep")
        self._add(node, self.last)
        self.stack.append((node, []))

    def _close(self) -> None:
        self.stack.pop()
        if self.path:
            self.path.pop()

    def _add(self, node: Node, place: Place) -> None:
        """Put a node into the collection that is open; in a mapping, keys and values come in turn."""
        opens = node.text is None
        if not self.stack:
            self.root = node
            return
        parent, pending = self.stack[-1]
        if parent.items is not None:
            parent.items.append(node)
            if opens:
                self.path.append(len(parent.items) - 1)
            return
        entries = parent.entries if parent.entries is not None else {}
        if not pending:
            key = self._key(node, place)
            pending.append((key, place))
            if opens:
                self.path.append("?")
            return
        key, key_place = pending.pop()
        if opens:
            self.path.append("?" if key is None else key)
        if key is None:
            return
        if key in entries:
            first = parent.keys[key]
            message = f"this key is given twice, first at {first.line}:{first.column}; remove one of them"
            here = [*self.path[:-1], key] if opens else [*self.path, key]
            self._fault(key_place, message, join_path(here))
            return
        entries[key] = node
        parent.keys[key] = key_place

    def _key(self, node: Node, place: Place) -> str | None:
        if node.text is None:
            self._fault(place, "a mapping or list stands as a key; keys are plain text")
            return None
        if place in self.unread:
            return None
        if not node.text:
            self._fault(place, "a key without a name; write its name before the colon")
            return None
        if node.text == "<<":
            self._fault(place, "the merge key << is not taken; write the keys out")
            return None
        return node.text


def _place(mark: Any) -> Place:
    return Place(mark.line + 1, mark.column + 1) if mark else Place(1, 1)


def _syntax(error: yaml.MarkedYAMLError, text: str, place: Place) -> str:
    lines = re.split("\r\n|\n|\r", text)
    line = lines[place.line - 1] if place.line <= len(lines) else ""
    if line[place.column - 1 : place.column] == "\t" or "'\\t'" in (error.problem or ""):
        return "a tab is not taken here; indent with spaces"
    if error.problem == "mapping values are not allowed here":
        return "not YAML: a second colon in one line; put the value in quotes, or check the indentation"
    if line[place.column - 1 : place.column] == "[" and re.search(r"[\w.]$", line[: place.column - 1]):
        return "not YAML: a bracket inside a name in braces; put the name in quotes, or one key on a line of its own"
    since = error.context_mark
    began = f" (in what begins at {since.line + 1}:{since.column + 1})" if since else ""
    return f"not YAML: {shown((error.problem or 'it cannot be read').replace(chr(10), ' '))}{began}"
