"""LAPLACE sources rewritten as networks of linear elements, exact in AC and at DC.

A transfer function N(s)/D(s) with orders up to two is split by polynomial division into q0 + q1 s + q2 s^2
and a proper rest (m0 + m1 s)/D(s) with D(0) = 1. With u the input, t a time constant and g a conductance,

- t s u is the voltage of an inductor t/g that a transconductance g of u drives;
- u/(1 + t s) is the voltage of a resistor 1/g parallel to a capacitor t g that a transconductance g of u
  drives;
- for D = 1 + d1 s + d2 s^2 and t = sqrt(d2), w = u/D and x = t s w obey t s w = x and t s x = u - w - (d1/t)
  x: two capacitors t g, driven by transconductances g, the second one with a resistor t/(d1 g) across it.

The source is then the sum of gains times such voltages: sources in series (E) or in parallel (G).
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.expressions import (
    Call,
    Chain,
    Name,
    Node,
    Number,
    Power,
    Unary,
    Voltage,
    show,
)
from modepair.circuits.screening.inside import Inside
from modepair.circuits.screening.numbers import show_number
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.source import Card

__all__ = ["Laplace", "Transfer", "transfer_of"]

CONDUCTANCE = 1e-3
"""Siemens of the networks: far above ngspice's GMIN of 1e-12, which then shifts nothing by more than 1e-9."""

_GLUED = re.compile(r"\b[0-9.]+(?:e[+-]?[0-9]+)?(?:meg|[tgkmunpf])s\b")
_ORDER = 2
_HIGHEST = 8
Polynomial = tuple[float, ...]


@dataclass(frozen=True)
class Transfer:
    """A rational function of s.

    Attributes
    ----------
    numerator, denominator : tuple of float
        Coefficients, the constant first; the highest is not 0.
    """

    numerator: Polynomial
    denominator: Polynomial


class RationalError(ValueError):
    """A transfer function that is no ratio of two polynomials in s; its text says why."""


def _trimmed(polynomial: list[float]) -> Polynomial:
    while len(polynomial) > 1 and polynomial[-1] == 0:
        polynomial.pop()
    if len(polynomial) > _HIGHEST + 1:
        raise RationalError("its order is far above two")
    if not all(math.isfinite(value) for value in polynomial):
        raise RationalError("its coefficients are beyond the largest number")
    return tuple(polynomial)


def _product(a: Polynomial, b: Polynomial) -> Polynomial:
    result = [0.0] * (len(a) + len(b) - 1)
    for i, left in enumerate(a):
        for j, right in enumerate(b):
            result[i + j] += left * right
    return _trimmed(result)


def _sum(a: Polynomial, b: Polynomial, sign: float = 1.0) -> Polynomial:
    length = max(len(a), len(b))
    return _trimmed(
        [(a[i] if i < len(a) else 0.0) + sign * (b[i] if i < len(b) else 0.0) for i in range(length)]
    )


def transfer_of(node: Node) -> Transfer:
    """Read a folded tree, in which s is a name, as a rational function.

    Parameters
    ----------
    node : Node
        Numbers, s, and + - * / and whole powers of them.

    Returns
    -------
    Transfer
        With common factors of s taken out.

    Raises
    ------
    RationalError
        For anything else.
    """
    numerator, denominator = _ratio(node)
    while len(numerator) > 1 and len(denominator) > 1 and numerator[0] == denominator[0] == 0:
        numerator, denominator = numerator[1:], denominator[1:]
    return Transfer(numerator, denominator)


def _ratio(node: Node) -> tuple[Polynomial, Polynomial]:
    match node:
        case Number(value=value):
            return (value,), (1.0,)
        case Name(name="s"):
            return (0.0, 1.0), (1.0,)
        case Unary(sign="-", term=term):
            numerator, denominator = _ratio(term)
            return tuple(-value for value in numerator), denominator
        case Chain(first=first, rest=rest):
            result = _ratio(first)
            for operator, term in rest:
                result = _joined(operator, result, _ratio(term))
            return result
        case Power(base=base, exponent=Number(value=value)) if value % 1 == 0 and 0 <= value <= _HIGHEST:
            whole = _ratio(base)
            result = ((1.0,), (1.0,))
            for _ in range(int(value)):
                result = _joined("*", result, whole)
            return result
        case Call(function=function):
            raise RationalError(f"{function}() of s is in it")
        case _:
            raise RationalError("something else than + - * / and whole powers of s is in it")


def _joined(
    operator: str, a: tuple[Polynomial, Polynomial], b: tuple[Polynomial, Polynomial]
) -> tuple[Polynomial, Polynomial]:
    match operator:
        case "*":
            return _product(a[0], b[0]), _product(a[1], b[1])
        case "/":
            if b[0] == (0.0,):
                raise RationalError("it divides by zero")
            return _product(a[0], b[1]), _product(a[1], b[0])
        case "+" | "-":
            sign = 1.0 if operator == "+" else -1.0
            if a[1] == b[1]:
                return _sum(a[0], b[0], sign), a[1]
            return _sum(_product(a[0], b[1]), _product(b[0], a[1]), sign), _product(a[1], b[1])
        case _:
            raise RationalError("a condition is in it")


def _divided(transfer: Transfer) -> tuple[list[float], list[float]]:
    """Return quotient and remainder of numerator by denominator, constants first."""
    remainder, divisor = list(transfer.numerator), transfer.denominator
    quotient = [0.0] * max(1, len(remainder) - len(divisor) + 1)
    while len(remainder) >= len(divisor):
        factor = remainder[-1] / divisor[-1]
        shift = len(remainder) - len(divisor)
        quotient[shift] = factor
        for i, value in enumerate(divisor):
            remainder[shift + i] -= factor * value
        remainder.pop()
    return quotient, remainder or [0.0]


@dataclass(frozen=True)
class Laplace:
    """An E or G element with a LAPLACE transfer function."""

    card: Card
    name: str
    nodes: tuple[str, ...]
    source: Expression
    transfer: Expression

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the network."""
        transfer = self._checked(inside)
        place = self.card.place()
        first, last = (inside.node(node, place) for node in self.nodes)
        name = inside.name(self)
        inside.findings.note(
            place, f"LAPLACE of {name} is written as a network of order {len(transfer.denominator) - 1}"
        )
        yield from self._network(inside, transfer, name, first, last)

    def _checked(self, inside: Inside) -> Transfer:
        """Return the transfer function, once it is known to be one that can be built."""
        if glued := _GLUED.search(self.transfer.text):
            raise self.transfer.refused(
                f"{glued[0]} in LAPLACE could be a time or a product with s; write *s"
            )
        node = inside.folder.fold(self.transfer, inside.frame, laplace=True)
        try:
            transfer = transfer_of(node)
        except RationalError as error:
            raise self.transfer.refused(
                f"the transfer function of LAPLACE is not a ratio of polynomials in s: {error}; write "
                f"(n0 + n1*s + n2*s^2)/(d0 + d1*s + d2*s^2)"
            ) from None
        order = max(len(transfer.numerator), len(transfer.denominator)) - 1
        if order > _ORDER:
            raise self.transfer.refused(
                f"LAPLACE of order {order}; orders one and two are built; split it into elements in series"
            )
        first, last = transfer.denominator[0], transfer.denominator[-1]
        if first == 0:
            raise self.transfer.refused(
                "LAPLACE with a pole at zero frequency has no DC value; write 1/(s + w) with a small w"
            )
        if any(value / last < 0 for value in transfer.denominator):
            raise self.transfer.refused(
                "LAPLACE with a pole in the right half plane is unstable; check the signs of its denominator"
            )
        scaled = [value / first for value in (*transfer.numerator, *transfer.denominator)]
        if not all(math.isfinite(value) for value in scaled):
            raise self.transfer.refused("the coefficients of LAPLACE are too far apart; scale s")
        return Transfer(
            tuple(value / first for value in transfer.numerator),
            tuple(value / first for value in transfer.denominator),
        )

    def _network(self, inside: Inside, transfer: Transfer, name: str, first: str, last: str) -> Iterator[str]:
        own = name[1:]
        node = inside.fold(self.source)
        if isinstance(node, Voltage):
            drive = f"{node.plus} {node.minus or '0'}"
        else:
            drive_node = inside.fresh_node(f"{name}_u")
            drive = f"{drive_node} 0"
            yield f"{inside.fresh_name(f'e{own}_u')} {drive} value={{{show(node)}}}"
        quotient, remainder = _divided(transfer)
        terms: list[tuple[float, str]] = [(quotient[0], drive)]
        below, scale = drive, 1.0
        for power, factor in enumerate(quotient[1:], start=1):
            step = _step(factor, quotient[power - 1])
            here = inside.fresh_node(f"{name}_s{power}")
            yield f"{inside.fresh_name(f'g{own}_s{power}')} 0 {here} {below} {show_number(CONDUCTANCE)}"
            yield f"{inside.fresh_name(f'l{own}_s{power}')} {here} 0 {show_number(step / CONDUCTANCE)}"
            scale *= step
            terms.append((factor / scale, f"{here} 0"))
            below = f"{here} 0"
        denominator = transfer.denominator
        if len(denominator) == 2:
            w = inside.fresh_node(f"{name}_w")
            yield f"{inside.fresh_name(f'g{own}_w')} 0 {w} {drive} {show_number(CONDUCTANCE)}"
            yield f"{inside.fresh_name(f'r{own}_w')} {w} 0 {show_number(1 / CONDUCTANCE)}"
            yield f"{inside.fresh_name(f'c{own}_w')} {w} 0 {show_number(denominator[1] * CONDUCTANCE)}"
            terms.append((remainder[0], f"{w} 0"))
        elif len(denominator) == 3:
            tau = math.sqrt(denominator[2])
            w, x = inside.fresh_node(f"{name}_w"), inside.fresh_node(f"{name}_x")
            unit, capacitance = show_number(CONDUCTANCE), show_number(tau * CONDUCTANCE)
            yield f"{inside.fresh_name(f'g{own}_w')} 0 {w} {x} 0 {unit}"
            yield f"{inside.fresh_name(f'c{own}_w')} {w} 0 {capacitance}"
            yield f"{inside.fresh_name(f'g{own}_x')} 0 {x} {drive} {unit}"
            yield f"{inside.fresh_name(f'g{own}_y')} {x} 0 {w} 0 {unit}"
            if denominator[1]:
                resistance = show_number(tau / denominator[1] / CONDUCTANCE)
                yield f"{inside.fresh_name(f'r{own}_x')} {x} 0 {resistance}"
            yield f"{inside.fresh_name(f'c{own}_x')} {x} 0 {capacitance}"
            terms.append((remainder[0], f"{w} 0"))
            terms.append(((remainder[1] if len(remainder) > 1 else 0.0) / tau, f"{x} 0"))
        yield from self._output(inside, terms, name, first, last)

    def _output(
        self, inside: Inside, terms: list[tuple[float, str]], name: str, first: str, last: str
    ) -> Iterator[str]:
        used = [term for term in terms if term[0] != 0] or terms[:1]
        above = first
        for index, (gain, control) in enumerate(used):
            own = name if index == 0 else inside.fresh_name(f"{name}_{index + 1}")
            below = last
            if name[0] == "e" and index + 1 < len(used):
                below = inside.fresh_node(f"{name}_o{index + 1}")
            yield f"{own} {above} {below} {control} {show_number(gain)}"
            if name[0] == "e":
                above = below


def _step(factor: float, below: float) -> float:
    """Return the time constant of a differentiator: where its term is as large as the one below it."""
    ratio = abs(factor / below) if factor and below else 0.0
    return ratio if 1e-18 < ratio < 1e3 else 1e-6
