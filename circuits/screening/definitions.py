"""Definitions of a file: subcircuits, models, functions and parameters, each in the scope it stands in."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable

from modepair.circuits.screening.controlled import read_behavioural, read_controlled
from modepair.circuits.screening.devices import read_device
from modepair.circuits.screening.frames import Function
from modepair.circuits.screening.functions import (
    CONSTANTS,
    NUMERIC,
    REFUSED_FUNCTIONS,
    REFUSED_NAMES,
    REWRITTEN,
)
from modepair.circuits.screening.inside import Element
from modepair.circuits.screening.models import read_model
from modepair.circuits.screening.passives import read_coupling, read_passive, read_source
from modepair.circuits.screening.places import CardError, Findings, Place
from modepair.circuits.screening.reading import Reader
from modepair.circuits.screening.scopes import Instance, Scope, Subcircuit
from modepair.circuits.screening.source import Card
from modepair.circuits.screening.switches import read_switch
from modepair.sweeps.faults import shown

__all__ = ["read_definitions"]

_READERS: dict[str, Callable[[Reader], Element]] = {
    **dict.fromkeys("rcl", read_passive),
    "k": read_coupling,
    **dict.fromkeys("vi", read_source),
    **dict.fromkeys("egfh", read_controlled),
    "b": read_behavioural,
    **dict.fromkeys("dqjm", read_device),
    **dict.fromkeys("sw", read_switch),
}

_REFUSED_LETTERS = {
    "a": "an A element (XSPICE) can read and write files",
    "u": "a U element (distributed line or digital) is not taken",
    "n": "an N element loads compiled code",
    "o": "an O element (lossy line) is not taken",
    "p": "a P element (coupled lines) is not taken",
    "t": "a T element (transmission line) is not taken; put the line in the source network",
    "y": "a Y element (lossy line) is not taken",
    "z": "a Z element (MESFET) is not taken",
}

_REFUSED_CARDS = {
    **dict.fromkeys((".control", ".endc"), "it runs commands in ngspice"),
    **dict.fromkeys(
        (".save", ".probe", ".print", ".plot", ".four", ".meas", ".measure"),
        "it would change what is written",
    ),
    **dict.fromkeys(
        (".ac", ".tran", ".op", ".dc", ".noise", ".tf", ".pz", ".sens", ".disto", ".step"),
        "the sweep makes its own analysis",
    ),
    **dict.fromkeys(
        (".option", ".options", ".opt", ".temp", ".ic", ".nodeset", ".global"),
        "it would change the whole run",
    ),
    **dict.fromkeys(
        (".if", ".else", ".elseif", ".endif"),
        "the choice between circuits is not made here; keep the one you need",
    ),
    **dict.fromkeys(
        (".prot", ".unprot", ".protect", ".unprotect"),
        "a protected block cannot be checked; ask its maker for a readable model",
    ),
    ".endl": "library sections are not taken; put the subcircuits you need in a file of their own",
}
_TAKEN_CARDS = ".subckt, .ends, .model, .param, .func, .include and .lib"


def read_definitions(cards: Iterable[Card], findings: Findings) -> Scope:
    """Read all cards.

    Parameters
    ----------
    cards : iterable of Card
        The cards of the file and of those it includes.
    findings : Findings
        Gets every fault; a faulty card is left out.

    Returns
    -------
    Scope
        The file's scope.
    """
    return _Definitions(findings).read(cards)


class _Definitions:
    def __init__(self, findings: Findings) -> None:
        self.findings = findings
        self.top = Scope()
        self.scope: Scope = self.top

    def read(self, cards: Iterable[Card]) -> Scope:
        for count, card in enumerate(cards, start=1):
            if count > self.findings.limits.cards:
                self.findings.refuse(
                    CardError(
                        card.place(),
                        f"more than {self.findings.limits.cards} cards; keep only the models you need",
                    )
                )
                break
            first = card.text.split(" ", 1)[0]
            try:
                self._card(card, first)
            except CardError as refused:
                self.findings.refuse(refused, first.split("=")[0][:40] if re.match(r"[.a-z]", first) else "")
                self._spoil(card, first)
        while isinstance(self.scope, Subcircuit):
            self.findings.refuse(
                CardError(self.scope.card.place(), f"subcircuit {self.scope.name} has no .ends; write it"),
                ".subckt",
            )
            self.scope = self.scope.parent or self.top
        return self.top

    def _spoil(self, card: Card, first: str) -> None:
        words = re.split(r"[ =(){},]+", card.text)
        if first.startswith(".") and len(words) > 1:
            self.scope.spoilt.update(words[1:] if first.startswith(".param") else words[1:2])
            if first == ".subckt" and self.scope.parent is not None:
                self.scope.parent.spoilt.add(words[1])
        else:
            self.scope.spoilt.add(words[0])
        scope: Scope | None = self.scope
        while isinstance(scope, Subcircuit):
            scope.faulty = True
            scope = scope.parent

    def _card(self, card: Card, first: str) -> None:
        if not first.startswith("."):
            self._element(card)
            return
        if first == ".subckt":
            self._subcircuit(card)
            return
        if first == ".ends":
            self._ends(card)
            return
        if first in (".model", ".param", ".params", ".func"):
            reader = Reader(card, self.findings)
            reader.take()
            if first == ".model":
                model = read_model(reader)
                self.scope.claim("model", model.name, card)
                self.scope.models[model.name] = model
            elif first == ".func":
                self._function(reader)
            else:
                self._parameters(reader)
            return
        if first == ".end":
            raise CardError(card.place(), "something follows .end on its line; remove it")
        if first.startswith(".control") or first.startswith(".endc"):
            first = ".control"
        reason = _REFUSED_CARDS.get(first, f"taken are {_TAKEN_CARDS}")
        raise CardError(
            card.place(), f"{shown(first)} is not taken in a model or circuit file: {reason}; remove the line"
        )

    def _element(self, card: Card) -> None:
        letter = card.text[0]
        if letter in _REFUSED_LETTERS:
            raise CardError(
                card.place(),
                f"{_REFUSED_LETTERS[letter]}; write R C L K V I E F G H B D Q M J X (a first line that "
                f"is a title must begin with *)",
            )
        if letter != "x" and letter not in _READERS:
            raise CardError(
                card.place(),
                f"{shown(card.text.split(' ')[0])} begins no card of a model or circuit file; a comment begins with "
                f"*, elements with R C L K V I E F G H B D Q M J X",
            )
        reader = Reader(card, self.findings)
        token = reader.peek()
        if token is None or token.kind != "word" or len(token.text) < 2:
            raise CardError(card.place(), "an element without a name; write a letter and a name, such as R1")
        element = _instance(reader) if letter == "x" else _READERS[letter](reader)
        if not isinstance(self.scope, Subcircuit):
            raise CardError(
                card.place(),
                f"element {shown(element.name)} stands outside a subcircuit; such a file holds "
                f"subcircuits and models only (a first line that is a title must begin with *)",
            )
        self.scope.claim("element", element.name, card)
        self.scope.elements[element.name] = element

    def _subcircuit(self, card: Card) -> None:
        """Open a subcircuit; a faulty first card opens one as well, so that .ends fits."""
        place = card.place()
        parent = self.scope
        inner = Subcircuit(parent=parent, card=card)
        depth, scope = 1, parent
        while scope.parent is not None:
            depth, scope = depth + 1, scope.parent
        self.scope = inner
        if depth > self.findings.limits.subcircuit_depth:
            # Closed again by as many .ends; deeper ones are all refused.
            raise CardError(
                place, "subcircuits are defined too deep inside each other; define them side by side"
            )
        reader = Reader(card, self.findings)
        reader.take()
        inner.name = reader.name("the name of a subcircuit")
        ports: list[str] = []
        while (token := reader.peek()) is not None:
            following = reader.peek(1)
            if token.text in ("params:", "param:"):
                reader.take()
                break
            if following is not None and following.kind == "sign" and following.text == "=":
                break
            if token.text in ("optional:", "text:"):
                raise reader.refused(
                    f"{token.text.upper()} is not taken; give these nodes or texts directly", token
                )
            port = reader.node()
            if port == "0":
                raise reader.refused("0 is ground and cannot be a port; rename the port", token)
            if port in ports:
                raise reader.refused(f"port {port} is named twice; rename one", token)
            ports.append(port)
            if len(ports) > self.findings.limits.ports:
                raise reader.refused(
                    f"more than {self.findings.limits.ports} ports; split the subcircuit", token
                )
        if not ports:
            raise reader.refused("the subcircuit has no ports; write their names after its name")
        inner.ports = tuple(ports)
        for token, value in reader.pairs(free=True):
            _check_parameter(token.text, card.place(token.begin))
            inner.claim("parameter", token.text, card)
            inner.parameters[token.text] = value
        inner.defaults = tuple(inner.parameters)
        try:
            parent.claim("subcircuit", inner.name, card)
        except CardError as refused:
            self.findings.refuse(refused, ".subckt")
            return
        parent.subcircuits[inner.name] = inner

    def _ends(self, card: Card) -> None:
        if not isinstance(self.scope, Subcircuit):
            raise CardError(card.place(), ".ends closes no subcircuit; remove it, or write the .subckt")
        closed, self.scope = self.scope, self.scope.parent or self.top
        reader = Reader(card, self.findings)
        reader.take()
        if reader.peek() is not None:
            name = reader.name("the name of the subcircuit")
            if closed.name and name != closed.name:
                raise CardError(
                    card.place(),
                    f".ends {shown(name)} closes subcircuit {closed.name}; check that each .subckt has "
                    f"its .ends",
                )
        reader.end()

    def _parameters(self, reader: Reader) -> None:
        found = False
        for token, value in reader.pairs(free=True):
            found = True
            place = reader.card.place(token.begin)
            _check_parameter(token.text, place)
            first = self.scope.places.setdefault(("parameter", token.text), place)
            if first != place:
                raise CardError(
                    place,
                    f"parameter {token.text} is defined at {first} already; programs take the first or "
                    f"the last; keep one",
                )
            self.scope.parameters[token.text] = value
        if not found:
            raise reader.refused("no parameter follows; write .param name=value")

    def _function(self, reader: Reader) -> None:
        card = reader.card
        name = reader.name("the name of a function")
        if not re.fullmatch("[a-z_][a-z0-9_]*", name):
            raise reader.refused(f"{shown(name)} is not a name for a function; write letters, digits and _")
        if name in NUMERIC or name in REWRITTEN or name in REFUSED_FUNCTIONS or name in ("v", "i"):
            raise reader.refused(f"function {name} has a meaning of its own in SPICE; rename it")
        arguments: list[str] = []
        if reader.at >= len(reader.tokens) or reader.tokens[reader.at].text != "(":
            raise reader.refused(f"function {name} has no arguments in brackets; write {name}(x) {{...}}")
        reader.at += 1
        while reader.at < len(reader.tokens) and reader.tokens[reader.at].text != ")":
            token = reader.tokens[reader.at]
            reader.at += 1
            if token.text == "," and token.kind == "sign":
                continue
            if (
                token.kind != "word"
                or not re.fullmatch("[a-z_][a-z0-9_]*", token.text)
                or token.text in arguments
            ):
                raise reader.refused(
                    f"{shown(token.text)} is not an argument of a function; write different names", token
                )
            arguments.append(token.text)
        reader.at += 1
        if (
            reader.at < len(reader.tokens)
            and reader.tokens[reader.at].text == "="
            and reader.tokens[reader.at].kind == "sign"
        ):
            reader.at += 1
        token_ = reader.tokens[reader.at] if reader.at < len(reader.tokens) else None
        if token_ is not None and token_.kind == "expression" and reader.at + 1 == len(reader.tokens):
            body = reader.expression("the body of the function")
        else:
            body = reader.rest("the body of the function")
        self.scope.claim("function", name, card)
        self.scope.functions[name] = Function(tuple(arguments), body)


def _check_parameter(name: str, place: Place) -> None:
    if name in CONSTANTS and name != "pi":
        raise CardError(
            place,
            f"{name} has a value of its own in SPICE, and one program takes that, another this; rename "
            f"the parameter",
        )
    if name in REFUSED_NAMES:
        raise CardError(place, f"a parameter cannot be named {name}: {REFUSED_NAMES[name]}; rename it")


def _instance(reader: Reader) -> Instance:
    """Read an X card: ``X1 a b c NAME PARAMS: A=1``."""
    name = reader.name("an element")
    words: list[str] = []
    while (token := reader.peek()) is not None:
        following = reader.peek(1)
        if token.text in ("params:", "param:"):
            reader.take()
            break
        if following is not None and following.kind == "sign" and following.text == "=":
            break
        if token.text == "text:":
            raise reader.refused("TEXT: is not taken; write the text into the subcircuit", token)
        words.append(reader.node())
    if len(words) < 2:
        raise reader.refused(f"{name} takes nodes and then the name of a subcircuit")
    arguments = {token.text: value for token, value in reader.pairs(free=True)}
    return Instance(reader.card, name, tuple(words[:-1]), words[-1], arguments)
