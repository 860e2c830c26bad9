"""Folding: parameters and functions put into an expression, and what is constant worked out.

What comes out holds numbers, node voltages, source currents and functions of ngspice's own. No parameter
and no function of the file is left, so that ngspice's parameter pass, which a bad name kills, has nothing
to do.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
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
    never_negative,
)
from modepair.circuits.screening.frames import Frame, Function
from modepair.circuits.screening.functions import (
    BINARY,
    CONSTANTS,
    NUMERIC,
    REFUSED_FUNCTIONS,
    REFUSED_NAMES,
    REWRITTEN,
    interpolated,
)
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.places import CardError, Findings, KnownError, Place, TooMuchWorkError
from modepair.sweeps.faults import shown

__all__ = ["Folder"]


class Folder:
    """Folds expressions of one file; the work it may do is bounded over all of them.

    Parameters
    ----------
    findings : Findings
        Limits, and where notes and evidence of the dialect go.
    """

    def __init__(self, findings: Findings) -> None:
        self.findings = findings
        self.limits = findings.limits
        self._work = self._level = 0

    def fold(self, expression: Expression, frame: Frame, *, laplace: bool = False) -> Node:
        """Fold an expression in a frame.

        Parameters
        ----------
        expression : Expression
            As written.
        frame : Frame
            What its names mean.
        laplace : bool
            Whether s is the Laplace variable, which stays in as a name.

        Returns
        -------
        Node
            Without other names.

        Raises
        ------
        CardError
            For an unknown name, a recursion, a value without meaning, or too large an expression.
        """
        arguments: dict[str, Node] = {"s": Name("s")} if laplace else {}
        return _Folding(self, expression, frame, frame, arguments, (), 0, laplace).node(expression.node)

    def value(self, expression: Expression, frame: Frame) -> float:
        """Work out an expression that must be a number.

        Raises
        ------
        CardError
            As `fold`, and where it depends on a voltage or a current.
        """
        node = self.fold(expression, frame)
        if not isinstance(node, Number):
            raise expression.refused(
                "this value depends on a voltage or a current; a number belongs here (or write E, G or B "
                "with VALUE)"
            )
        return node.value

    def parameter(self, name: str, frame: Frame, nesting: int = 0) -> tuple[float, Frame] | None:
        """Return the value of a parameter seen from a frame, and the frame that has it; None: unknown."""
        seen: Frame | None = frame
        while seen is not None and not seen.defines(name):
            if name in seen.spoilt:
                raise KnownError
            seen = seen.parent
        if seen is None:
            return None
        if name not in seen.given:
            expression = seen.parameters[name]
            if name in seen.active:
                raise expression.refused(f"parameter {name} depends on itself; give it a value")
            if nesting > self.limits.expression_depth:
                raise expression.refused(
                    f"parameter {name} depends on too many others in turn; write its value"
                )
            seen.active.append(name)
            try:
                node = _Folding(self, expression, seen, seen, {}, (), nesting + 1).node(expression.node)
            finally:
                seen.active.pop()
            if not isinstance(node, Number):
                raise expression.refused(
                    f"parameter {name} depends on a voltage or a current; a parameter is a number"
                )
            seen.given[name] = node.value
        return seen.given[name], seen

    def function(self, name: str, frame: Frame) -> tuple[Function, Frame] | None:
        """Return a function seen from a frame, and the frame it is defined in."""
        seen: Frame | None = frame
        while seen is not None:
            if name in seen.functions:
                return seen.functions[name], seen
            if name in seen.spoilt:
                raise KnownError
            seen = seen.parent
        return None

    def charge(self, place: Place, steps: int = 1) -> None:
        """Count steps of work.

        Raises
        ------
        TooMuchWorkError
            When the work of the whole file is too much.
        """
        self._work += steps
        if self._work > self.limits.work:
            raise TooMuchWorkError(place)

    def enter(self, expression: Expression) -> None:
        """Count a step of work, and how deep it lies inside others, until `leave`.

        Raises
        ------
        CardError
            When it is too deep; Python's own recursion limit is never reached.
        TooMuchWorkError
            When the work of the whole file is too much.
        """
        if self._level >= 3 * self.limits.expression_depth:
            raise expression.refused("parameters and functions depend on each other too deep; write them out")
        self._work += 1
        if self._work > self.limits.work:
            raise TooMuchWorkError(expression.card.place(expression.offset))
        self._level += 1

    def leave(self) -> None:
        """End a step that `enter` began."""
        self._level -= 1


@dataclass
class _Folding:
    """Folding of one expression, or of one function's body with its arguments."""

    folder: Folder
    expression: Expression
    frame: Frame
    caller: Frame
    arguments: Mapping[str, Node]
    calls: tuple[str, ...]
    nesting: int
    laplace: bool = False

    def refused(self, message: str) -> CardError:
        return self.expression.refused(message)

    def node(self, node: Node) -> Node:
        """Fold a term and check what came out."""
        self.folder.enter(self.expression)
        try:
            folded = self._fold(node)
        finally:
            self.folder.leave()
        if folded.size > self.folder.limits.expression_size:
            raise self.refused(
                "this expression is too large once its functions are put in; split it over elements"
            )
        if folded.depth > self.folder.limits.expression_depth:
            raise self.refused(
                "this expression is too deep once its functions are put in; split it over elements"
            )
        return folded

    def _fold(self, node: Node) -> Node:
        match node:
            case Name(name=name):
                return self._name(name)
            case Unary(sign=sign, term=term):
                return self._unary(sign, self.node(term))
            case Chain(first=first, rest=rest):
                return self._chain(
                    self.node(first), tuple((operator, self.node(term)) for operator, term in rest)
                )
            case Compare(operator=operator, left=left, right=right):
                left, right = self.node(left), self.node(right)
                if isinstance(left, Number) and isinstance(right, Number):
                    return Number(BINARY[operator](left.value, right.value))
                return Compare(operator, left, right)
            case Power(base=base, exponent=exponent):
                return self._power(self.node(base), self.node(exponent))
            case Choice(condition=condition, then=then, otherwise=otherwise):
                return self._choice(self.node(condition), then, otherwise)
            case Call(function=function, arguments=arguments):
                return self._call(function, arguments)
            case Number() | Voltage() | Current():
                return node
            case _:
                raise self.refused("this is no expression")

    def _name(self, name: str) -> Node:
        if name in self.arguments:
            return self.arguments[name]
        if name in REFUSED_NAMES:
            raise self.refused(f"{REFUSED_NAMES[name]}; write an expression of node voltages and parameters")
        if found := self.folder.parameter(name, self.frame, self.nesting):
            value, home = found
            if home.parent is None and self.caller.parent is not None:
                self.caller.outer.add(name)
            return Number(value)
        if name in CONSTANTS:
            self.folder.findings.note(
                self.expression.card.place(self.expression.offset), f"{name} is {CONSTANTS[name]:.6g}"
            )
            return Number(CONSTANTS[name])
        raise self.refused(
            f"parameter {shown(name)} is not defined; define it with .param, or correct the name"
        )

    def _numbers(self, function: Callable[..., float], what: str, *values: float) -> Number:
        try:
            result = float(function(*values))
        except ZeroDivisionError:
            raise self.refused("a division by zero; check the parameters") from None
        except OverflowError:
            raise self.refused(f"{what} is beyond the largest number; check the parameters") from None
        except ArithmeticError as error:
            raise self.refused(str(error)) from None
        except ValueError:
            raise self.refused(
                f"{what} has no value for {', '.join(f'{value:g}' for value in values)}; check the parameters"
            ) from None
        if not math.isfinite(result):
            raise self.refused(f"{what} is beyond the largest number; check the parameters")
        return Number(result + 0.0)

    def _unary(self, sign: str, term: Node) -> Node:
        if isinstance(term, Number):
            return Number(0.0 - term.value if sign == "-" else float(not term.value))
        return Unary(sign, term)

    def _chain(self, first: Node, rest: tuple[tuple[str, Node], ...]) -> Node:
        at = 0
        while at < len(rest) and isinstance(first, Number):
            operator, term = rest[at]
            if not isinstance(term, Number):
                break
            first = self._numbers(BINARY[operator], f"a result of {operator}", first.value, term.value)
            at += 1
        for operator, term in rest[at:]:
            if operator == "/" and isinstance(term, Number) and term.value == 0:
                raise self.refused("a division by zero; check the parameters")
        return Chain(first, rest[at:]) if at < len(rest) else first

    def _power(self, base: Node, exponent: Node) -> Node:
        if self.laplace and not (isinstance(base, Number) and isinstance(exponent, Number)):
            return Power(base, exponent)
        if isinstance(exponent, Number):
            if isinstance(base, Number):
                return self._numbers(BINARY["^"], "a power", base.value, exponent.value)
            if exponent.value % 2 == 0:
                return Power(base, exponent)
            if exponent.value == 1:
                return base
            if exponent.value % 1 == 0 and not never_negative(base):
                raise self.refused(
                    f"the power {exponent.value:g} of a value that may be negative: ngspice takes its "
                    f"magnitude, others keep its sign; write x*x*x or abs(x)^3"
                )
        return Power(base if never_negative(base) else Call("abs", (base,)), exponent)

    def _choice(self, condition: Node, then: Node, otherwise: Node) -> Node:
        if isinstance(condition, Number):
            return self.node(then if condition.value else otherwise)
        return Choice(condition, self.node(then), self.node(otherwise))

    def _call(self, function: str, arguments: tuple[Node, ...]) -> Node:
        if found := self.folder.function(function, self.frame):
            return self._own(function, *found, arguments)
        if function in REFUSED_FUNCTIONS:
            raise self.refused(f"{function}() {REFUSED_FUNCTIONS[function]}")
        if function in NUMERIC:
            count, numeric = NUMERIC[function]
            self._count(function, count, len(arguments))
            terms = tuple(self.node(argument) for argument in arguments)
            values = [term.value for term in terms if isinstance(term, Number)]
            return (
                self._numbers(numeric, f"{function}()", *values)
                if len(values) == count
                else Call(function, terms)
            )
        if function in REWRITTEN:
            self._count(function, REWRITTEN[function], len(arguments))
            return self._rewritten(function, arguments)
        if function in ("v", "i"):
            raise self.refused(
                f"{function}() does not name one or two nodes, or a voltage source; write v(a), v(a,b) "
                f"or i(v1)"
            )
        raise self.refused(f"function {shown(function)} is not known; define it with .func, or write it out")

    def _count(self, function: str, count: int, given: int) -> None:
        if function == "limit" and given == 2:
            raise self.refused("limit(nominal, deviation) is a random function; write the nominal value")
        if count >= 0 and given != count:
            raise self.refused(f"{function}() takes {count} argument{'s' * (count != 1)}, not {given}")

    def _own(self, name: str, function: Function, frame: Frame, arguments: tuple[Node, ...]) -> Node:
        self._count(name, len(function.arguments), len(arguments))
        if name in self.calls:
            raise function.body.refused(f"function {name} calls itself; write it out")
        if self.nesting > self.folder.limits.expression_depth:
            raise self.refused("functions call functions too deep; write them out")
        given: dict[str, Node] = {
            argument: self.node(term) for argument, term in zip(function.arguments, arguments, strict=True)
        }
        if self.laplace:
            given.setdefault("s", Name("s"))
        inner = _Folding(
            self.folder,
            function.body,
            frame,
            self.caller,
            given,
            (*self.calls, name),
            self.nesting + 1,
            self.laplace,
        )
        return inner.node(function.body.node)

    def _rewritten(self, function: str, arguments: tuple[Node, ...]) -> Node:
        place = self.expression.card.place(self.expression.offset)
        note = self.folder.findings.note
        if function in ("if", "ternary_fcn"):
            if function == "if":
                note(place, "IF(c,a,b) is written c ? a : b")
            return self._choice(self.node(arguments[0]), *arguments[1:])
        terms = tuple(self.node(argument) for argument in arguments)
        first = terms[0] if terms else Number(0.0)
        match function:
            case "log":
                return self._again("ln", terms)
            case "arctan":
                return self._again("atan", terms)
            case "stp":
                note(place, "STP(x) is written x > 0 ? 1 : 0")
                return self._choice(self._fold(Compare(">", first, Number(0.0))), Number(1.0), Number(0.0))
            case "limit":
                note(place, "LIMIT(x,lo,hi) is written min(max(x,lo),hi)")
                return self._limited(*terms)
            case "pow":
                return self._power(*terms)
            case "pwrs":
                note(place, "PWRS(x,y) is written sgn(x)*abs(x)^y")
                return self._fold(
                    Chain(Call("sgn", (first,)), (("*", Power(Call("abs", (first,)), terms[1])),))
                )
            case "pwr":
                return self._pwr(*terms)
            case "table" | "pwl":
                return self._table(function, terms)
            case _:
                values = [term.value for term in terms if isinstance(term, Number)]
                if len(values) != len(terms):
                    raise self.refused(
                        f"{function}() of a voltage or current is not solved by ngspice; write it out"
                    )
                return self._numbers(
                    math.trunc if function == "int" else math.atan2, f"{function}()", *values
                )

    def _again(self, function: str, terms: tuple[Node, ...]) -> Node:
        return self._fold(Call(function, terms))

    def _limited(self, x: Node, low: Node, high: Node) -> Node:
        if isinstance(low, Number) and isinstance(high, Number) and low.value > high.value:
            raise self.refused(
                f"LIMIT from {low.value:g} to {high.value:g} has its limits in the wrong order; exchange them"
            )
        return self._again("min", (self._again("max", (x, low)), high))

    def _pwr(self, x: Node, y: Node) -> Node:
        if not never_negative(x) and self.folder.findings.psa_evidence is None:
            raise self.refused(
                "PWR(x,y) is abs(x)^y in PSpice and keeps the sign of x in ngspice; write abs(x)^y, or "
                "sgn(x)*abs(x)^y"
            )
        self.folder.findings.note(
            self.expression.card.place(self.expression.offset),
            "PWR(x,y) is written abs(x)^y, as PSpice has it",
        )
        return self._power(x if never_negative(x) else self._again("abs", (x,)), y)

    def _table(self, function: str, terms: tuple[Node, ...]) -> Node:
        points = [term.value for term in terms[1:] if isinstance(term, Number)]
        if len(points) != len(terms) - 1 or len(points) < 4 or len(points) % 2:
            raise self.refused(f"{function}() takes an input and two or more points x,y of plain numbers")
        if any(right <= left for left, right in zip(points[::2], points[2::2], strict=False)):
            raise self.refused(
                f"the x of a {function}() do not rise from point to point; sort them, each only once"
            )
        x = terms[0]
        if function == "table":
            self.folder.findings.note(
                self.expression.card.place(self.expression.offset),
                "TABLE is written as pwl() of its input held within the first and the last x",
            )
            x = self._limited(x, Number(points[0]), Number(points[-2]))
        if isinstance(x, Number):
            return Number(interpolated(x.value, points[::2], points[1::2]))
        return Call("pwl", (x, *(Number(point) for point in points)))
