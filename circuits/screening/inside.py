"""The inside of one subcircuit being written: what its names mean and how they are spelt."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from typing import Protocol

from modepair.circuits.screening.expressions import (
    Call,
    Chain,
    Choice,
    Compare,
    Current,
    Node,
    Number,
    Power,
    Unary,
    Voltage,
    show,
)
from modepair.circuits.screening.folding import Folder
from modepair.circuits.screening.frames import Frame
from modepair.circuits.screening.numbers import show_number
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.places import CardError, Findings, Place
from modepair.circuits.screening.source import Card

__all__ = ["Element", "Inside", "ModelUse", "Spellings", "plain_names"]

GROUND = "0"
_SPELLINGS = {"+": "_p", "-": "_n", ".": "_", "/": "_"}
_AWKWARD = frozenset(
    (
        "all",
        "allv",
        "alli",
        "ally",
        "frequency",
        "time",
        "gnd",
        "value",
        "poly",
        "table",
        "ac",
        "off",
        "temper",
        "on",
    )
)
"""Names that ngspice reads as something else, on some card or in a list of vectors."""

_INNER = re.compile(r".*_int[0-9]+")


class HasPorts(Protocol):
    """A subcircuit's first card."""

    ports: tuple[str, ...]
    card: Card


class Element(Protocol):
    """An element as it was read, with its parameters not yet put in.

    Attributes
    ----------
    card : Card
        The card it stands on.
    name : str
        With its letter, as written, in lower case.
    nodes : tuple of str
        Nodes it connects to, as written.
    """

    @property
    def card(self) -> Card:
        """The card it stands on."""

    @property
    def name(self) -> str:
        """Name with its letter."""

    @property
    def nodes(self) -> tuple[str, ...]:
        """Nodes it connects to."""

    def lines(self, inside: Inside) -> Iterable[str]:
        """Yield canonical cards."""


@dataclass(frozen=True)
class ModelUse:
    """A model with its parameters put in.

    Attributes
    ----------
    kind : str
        Its type: ``d``, ``npn``, ``r``, ``sw``, ...
    name : str
        Its name in canonical text.
    values : dict of str to float
        Parameters.
    """

    kind: str
    name: str
    values: dict[str, float]


def plain_names(names: Iterable[str], first: str = "") -> dict[str, str]:
    """Spell names with letters, digits and _ only, no two alike.

    Parameters
    ----------
    names : iterable of str
        Names of nodes or elements as written, each once.
    first : str
        Put before a name that would begin with a digit; empty leaves it.

    Returns
    -------
    dict of str to str
        Name as written to name in canonical text; a name that is plain already is kept.
    """
    ordered = list(dict.fromkeys(names))
    plain = {name: _plain(name, first) for name in ordered}
    spellings = Spellings(name for name in ordered if plain[name] == name)
    return {name: name if plain[name] == name else spellings.free(plain[name]) for name in ordered}


class Spellings:
    """Names that are taken, and free ones for others.

    Parameters
    ----------
    taken : iterable of str
        Names that are not free.
    """

    def __init__(self, taken: Iterable[str] = ()) -> None:
        self._taken = set(taken)
        self._next: dict[str, int] = {}

    def free(self, hint: str) -> str:
        """Take `hint`, or the first of ``hint_2``, ``hint_3``, ... that is free."""
        name, count = hint, self._next.get(hint, 2)
        while name in self._taken:
            name, count = f"{hint}_{count}", count + 1
        self._next[hint] = count
        self._taken.add(name)
        return name


def _plain(name: str, first: str) -> str:
    spelling = "".join(_SPELLINGS.get(character, character) for character in name)
    if spelling in _AWKWARD:
        spelling += "_"
    return first + spelling if first and spelling[0].isdigit() else spelling


FindModel = Callable[[str, Place, tuple[str, ...], str, "Inside"], ModelUse]
"""Finds a model: ``find(name, place, kinds, what, inside)``."""


class Inside:
    """One subcircuit with its parameters, being written.

    Parameters
    ----------
    subcircuit : HasPorts
        Its ports as written, and its first card.
    elements : list of Element
        Its elements.
    frame : Frame
        Its parameters.
    folder : Folder
        Puts parameters in.
    model : FindModel
        Finds a model by its name.

    Attributes
    ----------
    mentioned : dict of str to None
        Nodes that were written, in canonical text, ground left out; whoever wants to know clears it first.
    """

    def __init__(
        self,
        subcircuit: HasPorts,
        elements: list[Element],
        frame: Frame,
        folder: Folder,
        model: FindModel,
    ) -> None:
        ports = subcircuit.ports
        self.frame, self.folder, self._model = frame, folder, model
        self.findings: Findings = folder.findings
        self.elements = {element.name: element for element in elements}
        names: dict[str, None] = dict.fromkeys(ports)
        for element in elements:
            names.update(dict.fromkeys(element.nodes))
        self._grounds = {GROUND} | ({"gnd"} if "gnd" not in ports else set())
        self._nodes = plain_names(name for name in names if name not in self._grounds)
        self._names = plain_names(self.elements)
        for name, spelling in (*self._nodes.items(), *self._names.items()):
            if name != spelling:
                self.findings.note(subcircuit.card.place(), f"{name} is spelt {spelling}")
        self.mentioned: dict[str, None] = {}
        self._used_nodes = Spellings(self._nodes.values())
        self._used_names = Spellings(self._names.values())

    def node(self, name: str, place: Place) -> str:
        """Return a node's name in canonical text."""
        if name in self._grounds:
            if name != GROUND:
                self.findings.note(place, f"node {name} is ground, as in ngspice")
            return GROUND
        if name not in self._nodes:
            raise CardError(place, f"node {name} is connected to nothing; correct its name")
        if _INNER.fullmatch(name):
            raise CardError(place, f"node {name} has the name of a node that ngspice makes itself; rename it")
        self.mentioned[self._nodes[name]] = None
        return self._nodes[name]

    def nodes(self, element: Element) -> str:
        """Return the name of an element and its nodes, as the begin of its card."""
        place = element.card.place()
        return " ".join((self.name(element), *(self.node(name, place) for name in element.nodes)))

    def name(self, element: Element) -> str:
        """Return an element's name in canonical text."""
        return self._names[element.name]

    def element(self, name: str, letters: str, place: Place, what: str) -> str:
        """Return the canonical name of another element that a card refers to."""
        if name not in self.elements or name[0] not in letters:
            raise CardError(place, f"{name} is not {what} of this subcircuit; correct its name, or add it")
        return self._names[name]

    def fresh_node(self, hint: str) -> str:
        """Return a node name that nothing has yet."""
        return self._used_nodes.free(hint)

    def fresh_name(self, hint: str) -> str:
        """Return an element name that nothing has yet."""
        return self._used_names.free(hint)

    def model(self, name: str, place: Place, kinds: tuple[str, ...], what: str) -> ModelUse:
        """Return a model by its name as written."""
        return self._model(name, place, kinds, what, self)

    def value(self, expression: Expression) -> float:
        """Work out a number."""
        return self.folder.value(expression, self.frame)

    def number(self, expression: Expression) -> str:
        """Work out a number and write it."""
        return show_number(self.value(expression))

    def positive(self, expression: Expression, what: str) -> float:
        """Work out a number that must be above zero."""
        value = self.value(expression)
        if value <= 0:
            raise expression.refused(f"{what} is {value:g}; it must be above zero")
        return value

    def fold(self, expression: Expression) -> Node:
        """Fold an expression and spell its nodes and sources canonically."""
        return self._spelt(self.folder.fold(expression, self.frame), expression)

    def text(self, expression: Expression) -> str:
        """Fold an expression and write it in braces."""
        return f"{{{show(self.fold(expression))}}}"

    def _spelt(self, node: Node, expression: Expression) -> Node:
        place = expression.card.place(expression.offset)

        def spelt(term: Node) -> Node:
            match term:
                case Voltage(plus=plus, minus=minus):
                    return Voltage(self.node(plus, place), None if minus is None else self.node(minus, place))
                case Current(source=source):
                    return Current(self.element(source, "v", place, "a voltage source"))
                case Unary():
                    return replace(term, term=spelt(term.term))
                case Chain():
                    return Chain(
                        spelt(term.first), tuple((operator, spelt(other)) for operator, other in term.rest)
                    )
                case Compare():
                    return Compare(term.operator, spelt(term.left), spelt(term.right))
                case Power():
                    return Power(spelt(term.base), spelt(term.exponent))
                case Choice():
                    return Choice(spelt(term.condition), spelt(term.then), spelt(term.otherwise))
                case Call():
                    return Call(term.function, tuple(spelt(argument) for argument in term.arguments))
                case Number():
                    return term
                case _:
                    raise expression.refused("this is no expression")

        return spelt(node)
