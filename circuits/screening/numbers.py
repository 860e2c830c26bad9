"""Numbers of a SPICE file, read as SPICE means them: M is milli and MEG is mega.

The scale factors are those of SPICE2 (University of California, Berkeley). Letters after the factor are a
unit and count for nothing, but only known units are taken: simulators read ``4k7``, ``10%`` or ``0x10`` each
in another way.
"""

from __future__ import annotations

import math
import re

from modepair.sweeps.faults import shown

__all__ = ["NUMBER_START", "NumberError", "parse_number", "show_number"]

_SCALES = {
    "": 0, "t": 12, "g": 9, "meg": 6, "k": 3, "m": -3, "u": -6, "n": -9, "p": -12, "f": -15,
}  # fmt: skip
_MIL = 25.4e-6
_SCALED_UNITS = "a|s|w"
_UNITS = "ohms|ohm|volts|volt|vdc|v|amps|amp|adc|farads|farad|f|henrys|henry|h|hz|secs|sec|watts|watt"
_PATTERN = re.compile(
    r"([+-]?)([0-9]+\.?[0-9]*|\.[0-9]+)(?:e([+-]?[0-9]+))?(?:(mil|meg|[tgkmunpf])("
    + _SCALED_UNITS
    + "|"
    + _UNITS
    + ")?|("
    + _UNITS
    + "))?"
)
NUMBER_START = re.compile(r"[+-]?\.?[0-9]")
"""What a text that means to be a number begins with."""

_LONGEST = 60


class NumberError(ValueError):
    """A text that begins like a number and is none; its text is the message."""


def parse_number(text: str) -> float:
    """Read a number.

    Parameters
    ----------
    text : str
        Lower case, without spaces.

    Returns
    -------
    float
        Finite.

    Raises
    ------
    NumberError
        When SPICE programs would not agree on the value, or it is out of range.
    """
    if len(text) > _LONGEST:
        raise NumberError(f"{shown(text)} is {len(text)} characters long, too long for a number")
    match = _PATTERN.fullmatch(text)
    if match is None:
        raise NumberError(_complaint(text))
    sign, digits, exponent, scale, unit, _ = match.groups()
    if scale == "f" and unit == "f":
        raise NumberError(f"{text} has two units; write {sign}{digits}f for femto")
    if scale == "mil":
        value = float(f"{digits}e{exponent or 0}") * _MIL
    else:
        value = float(f"{digits}e{int(exponent or 0) + _SCALES[scale or '']}")
    if math.isinf(value):
        raise NumberError(f"{text} is too large for a number; the largest is about 1e308")
    if value == 0 and re.search("[1-9]", digits):
        raise NumberError(f"{text} is too small for a number; the smallest is about 1e-308")
    return -value if sign == "-" and value else value


def show_number(value: float) -> str:
    """Write a number so that it is read back as the same float.

    Parameters
    ----------
    value : float
        Finite.

    Returns
    -------
    str
        Python's shortest exact form, such as ``4700.0`` or ``1e-12``; -0.0 is written 0.0.
    """
    return repr(float(value) + 0.0)


def _complaint(text: str) -> str:
    number = shown(text)
    if re.fullmatch(r"[+-]?[0-9]+(t|g|meg|k|m|u|n|p|f|r)[0-9]+.*", text):
        return (
            f"{number} has its scale factor inside, which programs read in different ways; write 4.7k for 4k7"
        )
    if text.startswith("0x"):
        return f"{number} is hexadecimal, which SPICE programs read in different ways; write it in decimals"
    if text.endswith("%"):
        return f"{number} has a per cent sign; write the plain number, such as 0.1 for 10%"
    if re.fullmatch(r"[+-]?[0-9.]+d[+-]?[0-9]+", text):
        return f"{number} has the exponent letter d; write e instead"
    if "_" in text:
        return f"{number} has an underscore in a number; write the digits without it"
    if re.fullmatch(r"[+-]?[0-9.]+(e[+-]?[0-9]+)?a[a-z]*", text):
        return f"{number} could be atto, ampere or nothing; write an exponent, such as 1e-18"
    return f"{number} is not a number; take digits, a scale factor T G MEG K M U N P F, and a unit or none"
