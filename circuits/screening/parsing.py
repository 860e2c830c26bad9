"""Expressions as text: a tokeniser and a recursive-descent parser of our own.

Where SPICE programs disagree about a form (``-a^b``, ``a^b^c``, ``4k7``, ``a < b < c``) it is refused.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from modepair.circuits.screening.expressions import (
    Call,
    Chain,
    Choice,
    Compare,
    Current,
    Name,
    Node,
    Number,
    Power,
    Unary,
    Voltage,
)
from modepair.circuits.screening.numbers import NumberError, parse_number
from modepair.circuits.screening.places import CardError, Findings
from modepair.circuits.screening.source import Card
from modepair.sweeps.faults import shown

__all__ = ["NAME", "Expression", "parse_expression"]

NAME = re.compile(r"[a-z0-9_.+\-/]+")
"""What the name of a node, an element, a model or a subcircuit may be made of."""

_TOKEN = re.compile(
    r" *(?:(?P<number>(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:e[+-]?[0-9]+)?[a-z_0-9.%]*)"
    r"|(?P<name>[a-z_][a-z0-9_.]*)"
    r"|(?P<sign>\*\*|&&|\|\||==|!=|<>|<=|>=|[-+*/^<>&|!~?:(),{}]))"
)
_PROBE = re.compile(r" *([vi]) *\( *([a-z0-9_.+\-/]+) *(?:, *([a-z0-9_.+\-/]+) *)?\)")
_RANKS = (("||",), ("&&",), ("compare",), ("+", "-"), ("*", "/"))
_SPELLINGS = {"**": "^", "&": "&&", "|": "||", "<>": "!=", "~": "!", "{": "(", "}": ")"}
_COMPARES = ("==", "!=", "<", ">", "<=", ">=")
_LOGICAL = ("&&", "||", "!")


@dataclass(frozen=True)
class Expression:
    """An expression and where it stands.

    Attributes
    ----------
    node : Node
        The tree as written.
    card : Card
        The card it stands on.
    offset : int
        Its first character on that card.
    text : str
        The piece itself.
    """

    node: Node
    card: Card
    offset: int
    text: str = ""

    def refused(self, message: str) -> CardError:
        """Return a fault at the expression's place."""
        return CardError(self.card.place(self.offset), message)


def parse_expression(card: Card, begin: int, end: int, findings: Findings) -> Expression:
    """Parse a piece of a card.

    Parameters
    ----------
    card : Card
        The card.
    begin, end : int
        The piece, without the brackets or quotes around it.
    findings : Findings
        Limits, and where evidence of the dialect goes.

    Returns
    -------
    Expression
        Its tree.

    Raises
    ------
    CardError
        With the place of the first character that does not fit.
    """
    parser = _Parser(card, begin, end, findings)
    node = parser.expression(0)
    if parser.token:
        raise parser.refused(
            f"{shown(parser.token)} does not fit here; check the brackets and operators before it"
        )
    if node.depth > findings.limits.expression_depth:
        raise CardError(
            card.place(begin), "brackets are too deep; split the expression into parameters or elements"
        )
    return Expression(node, card, begin, card.text[begin:end])


class _Parser:
    """The state of parsing one piece: the next token and where it stands."""

    def __init__(self, card: Card, begin: int, end: int, findings: Findings) -> None:
        self.card, self.end, self.findings = card, end, findings
        self.text = card.text[:end]
        self.next = self.at = begin
        self.kind = self.token = self.written = ""
        self._closing: list[str] = []
        self._advance()

    def refused(self, message: str, offset: int | None = None) -> CardError:
        return CardError(self.card.place(self.at if offset is None else offset), message)

    def _advance(self) -> None:
        match = _TOKEN.match(self.text, self.next)
        if match is None:
            rest = self.text[self.next :].lstrip(" ")
            self.at = len(self.text) - len(rest)
            if rest:
                raise self.refused(f"{shown(rest[0])} is not taken in an expression")
            self.kind = self.token = self.written = ""
            return
        self.kind = match.lastgroup or ""
        self.written = match[self.kind]
        self.token = _SPELLINGS.get(self.written, self.written)
        self.at, self.next = match.start(self.kind), match.end()

    def _take(self, token: str, why: str) -> None:
        if self.token != token or self.kind != "sign":
            found = shown(self.token) if self.token else "the end of the expression"
            raise self.refused(f"{found} stands where {token!r} {why}")
        self._advance()

    def expression(self, depth: int) -> Node:
        # A bracket costs 2 and a choice 1: a tree of the allowed depth can be read back as it is written,
        # with all its brackets, and the parser's own recursion stays far below Python's limit.
        if depth > 3 * self.findings.limits.expression_depth:
            raise self.refused("brackets are too deep; split the expression into parameters or elements")
        condition = self._binary(0, depth)
        if self.kind != "sign" or self.token != "?":
            return condition
        self._advance()
        then = self.expression(depth + 1)
        self._take(":", "of a choice c ? a : b belongs")
        return Choice(condition, then, self.expression(depth + 1))

    def _binary(self, rank: int, depth: int) -> Node:
        if rank == len(_RANKS):
            return self._unary(depth)
        if _RANKS[rank] == ("compare",):
            return self._compare(rank, depth)
        first = self._binary(rank + 1, depth)
        rest: list[tuple[str, Node]] = []
        while self.kind == "sign" and self.token in _RANKS[rank]:
            operator = self.token
            self._advance()
            rest.append((operator, self._binary(rank + 1, depth)))
        return Chain(first, tuple(rest)) if rest else first

    def _compare(self, rank: int, depth: int) -> Node:
        left = self._binary(rank + 1, depth)
        if self.kind != "sign" or self.token not in _COMPARES:
            return left
        operator = self.token
        self._advance()
        right = self._binary(rank + 1, depth)
        if self.kind == "sign" and self.token in _COMPARES:
            raise self.refused(
                "two comparisons in a row mean different things in different programs; write brackets"
            )
        return Compare(operator, left, right)

    def _unary(self, depth: int) -> Node:
        signs: list[str] = []
        while self.kind == "sign" and self.token in ("+", "-", "!"):
            signs.append(self.token)
            self._advance()
            if len(signs) > 3:
                raise self.refused("too many signs in a row; write one")
        term = self._primary(depth)
        if self.kind == "sign" and self.token == "^":
            term = self._power(term, signs, depth)
        for sign in reversed(signs):
            term = Unary(sign, term) if sign != "+" else term
        return term

    def _power(self, base: Node, signs: list[str], depth: int) -> Node:
        at = self.at
        if signs:
            raise self.refused("a sign before a power is read in two ways; write -(a^b) or (-a)^b")
        if isinstance(base, Compare) or (isinstance(base, Unary) and base.sign == "!") or _is_logical(base):
            raise self.refused(
                "^ between conditions is exclusive-or in one dialect and a power in another; write && and ||"
            )
        self._advance()
        negative = self.kind == "sign" and self.token == "-"
        if negative or (self.kind == "sign" and self.token == "+"):
            self._advance()
        exponent = self._primary(depth)
        if self.kind == "sign" and self.token == "^":
            raise self.refused("a^b^c is read in two ways; write brackets", at)
        return Power(base, Unary("-", exponent) if negative else exponent)

    def _primary(self, depth: int) -> Node:
        at, token = self.at, self.token
        if self.kind == "number":
            try:
                value = parse_number(token)
            except NumberError as error:
                raise self.refused(str(error)) from None
            self._advance()
            return Number(value)
        if self.kind == "name":
            if token in ("v", "i") and (probe := _PROBE.match(self.text, at)):
                return self._probe(probe)
            self._advance()
            if self.kind == "sign" and self.token == "(" and self.written == "(":
                return Call(token, self._arguments(depth, at))
            if "." in token:
                raise self.refused(
                    f"{shown(token)} is not the name of a parameter; write letters, digits and _", at
                )
            return Name(token)
        if self.kind == "sign" and token == "(":
            closing = ")" if self.written == "(" else "}"
            self._advance()
            node = self.expression(depth + 2)
            if self.written != closing:
                raise self.refused(f"a bracket is not closed; write {closing}", at)
            self._advance()
            return node
        found = shown(self.written) if token else "the end of the expression"
        raise self.refused(f"{found} stands where a number, a name or a bracket belongs")

    def _probe(self, probe: re.Match[str]) -> Node:
        self.next = probe.end()
        letter, first, second = probe.groups()
        if letter == "i" and second is not None:
            raise self.refused("i() takes the name of one voltage source")
        self._advance()
        return Voltage(first, second) if letter == "v" else Current(first)

    def _arguments(self, depth: int, at: int) -> tuple[Node, ...]:
        self._advance()
        arguments: list[Node] = []
        if self.written == ")":
            self._advance()
            return ()
        while True:
            arguments.append(self.expression(depth + 2))
            if self.kind == "sign" and self.written == ",":
                self._advance()
                continue
            if self.kind == "sign" and self.written == ")":
                self._advance()
                return tuple(arguments)
            raise self.refused("the bracket of a function is not closed; write )", at)


def _is_logical(node: Node) -> bool:
    return isinstance(node, Chain) and node.rest[0][0] in _LOGICAL
