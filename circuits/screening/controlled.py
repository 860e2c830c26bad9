"""Controlled sources E, G, F, H and B: linear, POLY, VALUE, TABLE and LAPLACE."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.expressions import Call, show
from modepair.circuits.screening.inside import Element, Inside
from modepair.circuits.screening.laplace import Laplace
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.reading import Reader
from modepair.circuits.screening.source import Card

__all__ = ["Behavioural", "Controlled", "read_behavioural", "read_controlled"]

_MOST_INPUTS = 50
_MOST_COEFFICIENTS = 1000
_REFUSED = {
    "freq": "FREQ is a table over frequency that ngspice does not solve; write LAPLACE or R and C",
    "chebyshev": "CHEBYSHEV is a filter that ngspice does not solve; write LAPLACE or R and C",
    "error": "ERROR is not an element that is taken; remove it",
    "delay": "DELAY is not solved in an AC sweep; remove it",
    "pwl": "PWL is another dialect's table; write TABLE {V(a,b)} = (x,y) (x,y)",
    "opto": "OPTO is not taken; write F with a gain",
    **dict.fromkeys(("and", "nand", "or", "nor"), "a logic gate is not linear in an AC sweep; write VALUE"),
    **dict.fromkeys(
        ("vcvs", "vccs", "cccs", "ccvs"), "this keyword is another dialect's; write the nodes and the gain"
    ),
}


@dataclass(frozen=True)
class Controlled:
    """A source controlled by node voltages or source currents, as a gain or a polynomial.

    Attributes
    ----------
    controls : tuple of str
        Controlling nodes in pairs (E, G), or voltage sources (F, H).
    inputs : int
        Inputs of a POLY; 0 for a plain gain.
    coefficients : tuple of Expression
        The gain, or the coefficients in SPICE2's order.
    """

    card: Card
    name: str
    outputs: tuple[str, ...]
    controls: tuple[str, ...]
    inputs: int
    coefficients: tuple[Expression, ...]

    @property
    def nodes(self) -> tuple[str, ...]:
        """Outputs, then controlling nodes."""
        return self.outputs + (self.controls if self.name[0] in "eg" else ())

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the element."""
        place = self.card.place()
        outputs = " ".join(inside.node(node, place) for node in self.outputs)
        if self.name[0] in "eg":
            controls = " ".join(inside.node(node, place) for node in self.controls)
        else:
            controls = " ".join(
                inside.element(source, "v", place, "a voltage source") for source in self.controls
            )
        numbers = " ".join(inside.number(coefficient) for coefficient in self.coefficients)
        poly = f"poly({self.inputs}) " if self.inputs else ""
        yield f"{inside.name(self)} {outputs} {poly}{controls} {numbers}"


@dataclass(frozen=True)
class Behavioural:
    """A source with the value of an expression.

    Attributes
    ----------
    quantity : str
        ``value`` for E and G; ``v`` or ``i`` for B.
    """

    card: Card
    name: str
    nodes: tuple[str, ...]
    quantity: str
    expression: Expression

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the element."""
        if self.quantity == "value":
            if f"b{self.name}" in inside.elements:
                raise self.expression.refused(
                    f"ngspice makes an element b{self.name} of {self.name}, and there is one; rename it"
                )
            yield f"{inside.nodes(self)} value={inside.text(self.expression)}"
        else:
            yield f"{inside.nodes(self)} {self.quantity}={show(inside.fold(self.expression))}"


def read_controlled(reader: Reader) -> Element:
    """Read an E, G, F or H card in any of its forms."""
    name = reader.name("an element")
    outputs = reader.nodes(2)
    token = reader.peek()
    letter = name[0]
    if token is None:
        raise reader.refused(f"{name} has no gain; write what controls it, and its gain")
    if token.kind == "word" and token.text in _REFUSED:
        raise reader.refused(_REFUSED[token.text], token)
    if reader.take_word("poly"):
        return _polynomial(reader, name, outputs)
    if letter in "eg":
        if reader.take_word("value", "vol" if letter == "e" else "cur"):
            expression = reader.expression("the expression after VALUE")
            reader.end()
            return Behavioural(reader.card, name, outputs, "value", expression)
        if reader.take_word("table"):
            return _table(reader, name, outputs)
        if reader.take_word("laplace"):
            source = reader.expression("the input of LAPLACE")
            transfer = reader.expression("the transfer function of LAPLACE")
            reader.end()
            return Laplace(reader.card, name, outputs, source, transfer)
        controls = reader.nodes(2)
    else:
        if reader.at_word("value", "table", "laplace"):
            raise reader.refused(
                f"{name[0].upper()} takes a source and a gain, or POLY; write E or G with "
                f"VALUE={{... I(V1) ...}}",
                token,
            )
        controls = (reader.name("a voltage source"),)
    gain = reader.value(f"the gain of {name}")
    reader.end()
    return Controlled(reader.card, name, outputs, controls, 0, (gain,))


def _polynomial(reader: Reader, name: str, outputs: tuple[str, ...]) -> Controlled:
    token = reader.peek()
    if (
        token is None
        or not re.fullmatch("[0-9]{1,3}", token.text)
        or not 1 <= int(token.text) <= _MOST_INPUTS
    ):
        raise reader.refused(f"POLY takes a number of inputs from 1 to {_MOST_INPUTS}: POLY(2)", token)
    reader.take()
    inputs = int(token.text)
    controls = (
        reader.nodes(2 * inputs)
        if name[0] in "eg"
        else tuple(reader.name("a voltage source") for _ in range(inputs))
    )
    begin = reader.peek()
    coefficients: list[Expression] = []
    while reader.peek() is not None:
        coefficients.append(reader.value("a coefficient"))
        if len(coefficients) > _MOST_COEFFICIENTS:
            raise reader.refused(f"more than {_MOST_COEFFICIENTS} coefficients; check the card")
    if begin is not None and re.search(r"[0-9],[0-9]{3}(?![0-9.])", reader.card.text[begin.begin :]):
        raise reader.refused(
            "a comma between digits could part thousands or coefficients; write spaces between coefficients",
            begin,
        )
    if not coefficients:
        raise reader.refused("POLY has no coefficients; write them, the constant first")
    if inputs == 1 and len(coefficients) == 1:
        raise reader.refused(
            "POLY(1) with one coefficient is a gain in SPICE2 and a constant in ngspice; write 0 before "
            "it for a gain, or VALUE for a constant",
            begin,
        )
    return Controlled(reader.card, name, outputs, controls, inputs, tuple(coefficients))


def _table(reader: Reader, name: str, outputs: tuple[str, ...]) -> Behavioural:
    source = reader.expression("the input of TABLE")
    reader.take_sign("=")
    points: list[Expression] = []
    while reader.peek() is not None:
        points.append(reader.value("a point of TABLE"))
    if len(points) < 4 or len(points) % 2:
        raise reader.refused("TABLE takes two or more points: TABLE {V(a,b)} = (x,y) (x,y)")
    call = Call("table", (source.node, *(point.node for point in points)))
    return Behavioural(reader.card, name, outputs, "value", Expression(call, source.card, source.offset))


def read_behavioural(reader: Reader) -> Behavioural:
    """Read a B card: ``B1 a b V={...}`` or ``B1 a b I={...}``."""
    name = reader.name("an element")
    nodes = reader.nodes(2)
    token = reader.peek()
    if not reader.take_word("v", "i") or token is None or not reader.take_sign("="):
        raise reader.refused(f"{name} has no value; write V={{...}} or I={{...}}", token)
    return Behavioural(reader.card, name, nodes, token.text, reader.rest("the expression"))
