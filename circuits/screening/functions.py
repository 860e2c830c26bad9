"""Functions of expressions: the allow-list, their values for numbers, and why others are refused."""

from __future__ import annotations

import math
from collections.abc import Callable

__all__ = [
    "BINARY",
    "CONSTANTS",
    "KELVIN",
    "NUMERIC",
    "REFUSED_FUNCTIONS",
    "REFUSED_NAMES",
    "REWRITTEN",
    "interpolated",
    "power",
]

KELVIN = 273.15
TEMPERATURE_CELSIUS = 27.0
"""ngspice's default temperature, which the tool never changes."""

_BOLTZMANN = 1.380649e-23
_CHARGE = 1.602176634e-19

CONSTANTS = {
    "pi": math.pi,
    "temp": TEMPERATURE_CELSIUS,
    "temper": TEMPERATURE_CELSIUS,
    "vt": _BOLTZMANN * (TEMPERATURE_CELSIUS + KELVIN) / _CHARGE,
    "gmin": 1e-12,
}
"""Names with a value of their own: temperature in degrees Celsius, thermal voltage in volt, GMIN in siemens.

The elementary charge and Boltzmann's constant are those of the SI; GMIN is ngspice's default."""

REFUSED_NAMES = {
    "time": "TIME has no meaning in an AC sweep",
    "hertz": "a frequency in an expression is not an operating-point quantity",
    "freq": "a frequency in an expression is not an operating-point quantity",
    "omega": "a frequency in an expression is not an operating-point quantity",
    "s": "s is the Laplace variable and stands in a LAPLACE transfer function only",
}
"""Names that cannot be parameters, with the reason."""

_RANDOM = "is a random function: every load would give another circuit; write the nominal value"

REFUSED_FUNCTIONS = {
    **dict.fromkeys(
        ("agauss", "gauss", "aunif", "unif", "random", "rand", "rnd", "mc", "flat", "white"), _RANDOM
    ),
    "ddt": "is silently 0 in ngspice's AC analysis; write a capacitor or an inductor",
    "sdt": "fails in ngspice; write a current source into a capacitor",
    "idt": "fails in ngspice; write a current source into a capacitor",
    "idtmod": "fails in ngspice; write a current source into a capacitor",
    "delay": "is not taken in an AC sweep by ngspice; write a transmission line outside the model",
    "absdelay": "is not taken in an AC sweep by ngspice; write a transmission line outside the model",
    "laplace": "is taken as the whole of an E or G element only: E1 a b LAPLACE {V(c,d)} = {1/(1+s)}",
    "freq": "is a table over frequency that ngspice does not solve; write LAPLACE or R and C",
    "chebyshev": "is a filter that ngspice does not solve; write LAPLACE or R and C",
    "m": "is the magnitude of a complex value, which an operating point does not have",
    "img": "is the imaginary part of a complex value, which an operating point does not have",
    "file": "reads a file; write the values as TABLE",
    "spice": "is not an expression; write the value",
    "schedule": "depends on time; write the value for the operating point",
}
"""Functions that are refused, with the reason and the remedy."""


def _sign(x: float) -> float:
    return float((x > 0) - (x < 0))


NUMERIC: dict[str, tuple[int, Callable[..., float]]] = {
    "abs": (1, abs),
    "sqrt": (1, math.sqrt),
    "exp": (1, math.exp),
    "ln": (1, math.log),
    "log10": (1, math.log10),
    "sin": (1, math.sin),
    "cos": (1, math.cos),
    "tan": (1, math.tan),
    "asin": (1, math.asin),
    "acos": (1, math.acos),
    "atan": (1, math.atan),
    "sinh": (1, math.sinh),
    "cosh": (1, math.cosh),
    "tanh": (1, math.tanh),
    "asinh": (1, math.asinh),
    "acosh": (1, math.acosh),
    "atanh": (1, math.atanh),
    "floor": (1, math.floor),
    "ceil": (1, math.ceil),
    "sgn": (1, _sign),
    "min": (2, min),
    "max": (2, max),
    "u": (1, lambda x: 0.5 * (1.0 + _sign(x))),
    "uramp": (1, lambda x: max(x, 0.0)),
}
"""Functions that ngspice knows by the same name: number of arguments and value."""

REWRITTEN = {
    "log": 1, "arctan": 1, "stp": 1, "int": 1, "pow": 2, "pwr": 2, "pwrs": 2, "atan2": 2,
    "limit": 3, "if": 3, "ternary_fcn": 3, "table": -1, "pwl": -1,
}  # fmt: skip
"""Functions that are put in other words, with their number of arguments; -1: any."""


def power(base: float, exponent: float) -> float:
    """Return base to the exponent; where the base is negative, the exponent must be an even whole number.

    Raises
    ------
    ArithmeticError
        Where programs disagree: ngspice takes the magnitude of the base, others do not.
    """
    if base < 0 and exponent % 2:
        raise ArithmeticError(
            "a power of a negative number, which ngspice takes of its magnitude; write abs() or a product"
        )
    return math.pow(base, exponent)


def _divide(a: float, b: float) -> float:
    return a / b


BINARY: dict[str, Callable[[float, float], float]] = {
    "+": lambda a, b: a + b,
    "-": lambda a, b: a - b,
    "*": lambda a, b: a * b,
    "/": _divide,
    "^": power,
    "&&": lambda a, b: float(bool(a) and bool(b)),
    "||": lambda a, b: float(bool(a) or bool(b)),
    "==": lambda a, b: float(a == b),
    "!=": lambda a, b: float(a != b),
    "<": lambda a, b: float(a < b),
    ">": lambda a, b: float(a > b),
    "<=": lambda a, b: float(a <= b),
    ">=": lambda a, b: float(a >= b),
}
"""Operators on numbers; conditions are 1 and 0."""


def interpolated(x: float, xs: list[float], ys: list[float]) -> float:
    """Return the value at `x` of a curve of straight lines, its end lines drawn on."""
    index = max(0, min(len(xs) - 2, sum(left <= x for left in xs) - 1))
    return ys[index] + (ys[index + 1] - ys[index]) * (x - xs[index]) / (xs[index + 1] - xs[index])
