"""Expressions as trees: the terms they are made of, and how a tree is written as canonical text."""

from __future__ import annotations

from dataclasses import dataclass, field

from modepair.circuits.screening.numbers import show_number

__all__ = [
    "Call",
    "Chain",
    "Choice",
    "Compare",
    "Current",
    "Name",
    "Node",
    "Number",
    "Power",
    "Unary",
    "Voltage",
    "never_negative",
    "show",
]


@dataclass(frozen=True, slots=True)
class Node:
    """A term of an expression.

    Attributes
    ----------
    size : int
        Terms in it, itself counted.
    depth : int
        Terms inside terms.
    """

    size: int = field(default=1, init=False, repr=False, compare=False)
    depth: int = field(default=1, init=False, repr=False, compare=False)

    def _measure(self, *terms: Node) -> None:
        object.__setattr__(self, "size", 1 + sum(term.size for term in terms))
        object.__setattr__(self, "depth", 1 + max((term.depth for term in terms), default=0))


@dataclass(frozen=True, slots=True)
class Number(Node):
    """A number."""

    value: float


@dataclass(frozen=True, slots=True)
class Name(Node):
    """A parameter, or a function's argument."""

    name: str


@dataclass(frozen=True, slots=True)
class Voltage(Node):
    """The voltage of a node, or between two: ``v(a)``, ``v(a,b)``."""

    plus: str
    minus: str | None


@dataclass(frozen=True, slots=True)
class Current(Node):
    """The current through a voltage source: ``i(v1)``."""

    source: str


@dataclass(frozen=True, slots=True)
class Unary(Node):
    """A sign or a negation: ``-x``, ``!x``."""

    sign: str
    term: Node

    def __post_init__(self) -> None:
        self._measure(self.term)


@dataclass(frozen=True, slots=True)
class Chain(Node):
    """Terms joined from left to right by operators of one rank: ``+ -``, ``* /``, ``&&`` or ``||``."""

    first: Node
    rest: tuple[tuple[str, Node], ...]

    def __post_init__(self) -> None:
        self._measure(self.first, *(term for _, term in self.rest))


@dataclass(frozen=True, slots=True)
class Compare(Node):
    """A comparison: 1 where it holds, else 0."""

    operator: str
    left: Node
    right: Node

    def __post_init__(self) -> None:
        self._measure(self.left, self.right)


@dataclass(frozen=True, slots=True)
class Power(Node):
    """A base and an exponent."""

    base: Node
    exponent: Node

    def __post_init__(self) -> None:
        self._measure(self.base, self.exponent)


@dataclass(frozen=True, slots=True)
class Choice(Node):
    """One of two values: ``c ? a : b``."""

    condition: Node
    then: Node
    otherwise: Node

    def __post_init__(self) -> None:
        self._measure(self.condition, self.then, self.otherwise)


@dataclass(frozen=True, slots=True)
class Call(Node):
    """A function and its arguments."""

    function: str
    arguments: tuple[Node, ...]

    def __post_init__(self) -> None:
        self._measure(*self.arguments)


def show(node: Node) -> str:
    """Write a tree; every term that is not a single one stands in brackets.

    Parameters
    ----------
    node : Node
        A tree without names of parameters.

    Returns
    -------
    str
        ngspice's expression syntax.
    """
    match node:
        case Number(value=value):
            return show_number(value)
        case Name(name=name):
            return name
        case Voltage(plus=plus, minus=None):
            return f"v({plus})"
        case Voltage(plus=plus, minus=minus):
            return f"v({plus},{minus})"
        case Current(source=source):
            return f"i({source})"
        case Unary(sign=sign, term=term):
            return f"{sign}{_single(term)}"
        case Chain(first=first, rest=rest):
            return _single(first) + "".join(f"{operator}{_single(term)}" for operator, term in rest)
        case Compare(operator=operator, left=left, right=right):
            return f"{_single(left)}{operator}{_single(right)}"
        case Power(base=base, exponent=exponent):
            return f"{_single(base)}^{_single(exponent)}"
        case Choice(condition=condition, then=then, otherwise=otherwise):
            return f"{_single(condition)} ? {_single(then)} : {_single(otherwise)}"
        case Call(function=function, arguments=arguments):
            return f"{function}({','.join(_argument(argument) for argument in arguments)})"
        case _:
            raise TypeError(f"{type(node).__name__} is no term of an expression")


def _argument(node: Node) -> str:
    return f"({show(node)})" if isinstance(node, Choice) else show(node)


def _single(node: Node) -> str:
    text = show(node)
    plain = isinstance(node, Name | Voltage | Current | Call) or (
        isinstance(node, Number) and not text.startswith("-")
    )
    return text if plain else f"({text})"


def never_negative(node: Node) -> bool:
    """Tell whether a term's form shows that it is 0 or more."""
    match node:
        case Number(value=value):
            return value >= 0
        case Call(function="abs" | "sqrt" | "exp" | "uramp" | "u" | "cosh" | "acosh"):
            return True
        case Power(base=base, exponent=Number(value=value)):
            return value % 2 == 0 or never_negative(base)
        case Power():
            return True
        case _:
            return False
