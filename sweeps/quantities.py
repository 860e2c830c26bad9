"""Quantities as they are written in a spec: a number, an SI prefix, a unit.

A strict pattern decides whether a text is a quantity of the kind asked for; only then does quantiphy convert
it. Value codes with the prefix in place of the decimal point (4k7, 2R2, 4n7) follow IEC 60062. As in SI, M is
mega and m is milli. Everything else is refused: no text is read as another number than the one it states.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

from quantiphy import Quantity

from modepair.sweeps.faults import RefusedError, form_of, shown

_PREFIXES = "afpnu\u00b5\u03bcmkKMGTP"  # micro sign and Greek mu
_OHM = ("\u03a9", "\u2126", "ohms", "ohm", "Ohm")  # Greek omega and ohm sign
_NUMBER = r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)"
_EXPONENT = r"[eE][+-]?[0-9]+"
_SPACES = dict.fromkeys(map(ord, "\u00a0\u2009\u202f"), " ")
_LONGEST = 80

_UNIT_KINDS = {
    **dict.fromkeys((*_OHM, "R"), "a resistance"),
    "F": "a capacitance",
    "Hz": "a frequency",
    "V": "a voltage",
    "dB": "a ratio in dB",
    "%": "a fraction",
    "ppm": "a fraction",
    "deg": "an angle",
    "°": "an angle",
    "H": "an inductance",
    "A": "a current",
    "s": "a time",
    "W": "a power",
}


class _Figure(Quantity):
    """quantiphy's number with preferences of our own, so that no other user of quantiphy is touched."""


_Figure.set_prefs(
    prec="full",
    full_prec=16,
    output_sf="PTGMkmunpfa",
    map_sf=Quantity.map_sf_to_greek,
    spacer=" ",
    known_units="",
    ignore_sf=False,
)


def render(value: float, unit: str = "", digits: int = 6) -> str:
    """Write a number with an SI prefix, as a spec would.

    Parameters
    ----------
    value
        The number in SI units; finite.
    unit
        The unit's symbol: ``Ω``, ``F``, ``Hz``, ``V`` or none.
    digits
        Significant digits; 17 give back the same float when the text is read again.

    Returns
    -------
    str
        Such as ``4.7 kΩ``.
    """
    return str(_Figure(value, unit).render(prec=digits - 1))


@dataclass(frozen=True)
class Kind:
    """A kind of quantity: its unit, the forms it may be written in, and its limits.

    Parameters
    ----------
    noun
        With its article: ``a resistance``.
    unit
        Symbol used when a value is shown; empty for pure numbers.
    units
        Every spelling that is read as that unit.
    prefixes
        SI prefixes that are read.
    least, most
        Limits of the magnitude in SI units, both included. They are wide of any real part; beyond them the
        simulator would be given nonsense.
    example
        A value as a user would write it.
    zero
        Whether 0 is taken.
    signed
        Whether negative values are taken.
    code
        Letter that stands for the decimal point in an IEC 60062 code without a prefix: R for resistances.
    codes
        Whether IEC 60062 codes are read at all.
    decibels
        ``no``: no dB; ``or ratio``: dB or a plain ratio; ``only``: dB must be written.
    plain_from
        Least plain number (no dB) that is read as a ratio: below it the number could as well be meant in dB.
    percents
        Whether % and ppm are read.
    whole
        Whether only whole numbers are taken.
    choices
        The only values taken; empty for all.
    """

    noun: str
    unit: str = ""
    units: tuple[str, ...] = ()
    prefixes: str = _PREFIXES
    least: float = 0.0
    most: float = math.inf
    example: str = ""
    zero: bool = False
    signed: bool = False
    code: str = ""
    codes: bool = False
    decibels: str = "no"
    plain_from: float = 0.0
    percents: bool = False
    whole: bool = False
    choices: tuple[float, ...] = ()

    @property
    def pattern(self) -> str:
        """Regular expression of the forms that are read, in the syntax of JSON Schema as of Python."""
        forms = [] if self.decibels == "only" else [self._plain.pattern]
        if self.codes:
            forms.append(self._coded.pattern)
        if self.decibels != "no":
            forms.append(f"{_NUMBER} ?dB")
        if self.percents:
            forms.append(f"{_NUMBER}(?:{_EXPONENT})? ?(?:%|ppm)")
        return f"^(?:{'|'.join(forms)})$"

    @cached_property
    def _plain(self) -> re.Pattern[str]:
        units = "|".join(map(re.escape, self.units)) or "(?!)"
        prefix = f"[{self.prefixes}]" if self.prefixes else "(?!)"
        return re.compile(
            rf"({_NUMBER})(?:({_EXPONENT}) ?(?:{units})?| ?({prefix})? ?(?:{units})?"
            + (f"|{self.code}" if self.code else "")
            + ")"
        )

    @cached_property
    def _coded(self) -> re.Pattern[str]:
        units = "|".join(map(re.escape, self.units)) or "(?!)"
        return re.compile(rf"([+-]?)([0-9]*)([{self.prefixes}{self.code}])([0-9]+)(?: ?(?:{units}))?")

    @property
    def takes(self) -> str:
        """What the kind takes, with an example: the second half of a message."""
        return f"{self.noun}, such as {self.example}"

    @property
    def limits(self) -> str:
        """What the kind takes, with its limits and an example."""
        if self.choices:
            return " or ".join(f"{choice:g}" for choice in self.choices)
        low, high = self._show(self.least), self._show(self.most)
        if self.signed:
            text = f"{self.noun} from -{high} to {high}"
        elif self.zero and self.least == 0:
            text = f"{self.noun} from 0 to {high}"
        elif self.zero:
            text = f"0 or {self.noun} from {low} to {high}"
        else:
            text = f"{self.noun} from {low} to {high}"
        return f"{text}, such as {self.example}"

    def _show(self, value: float) -> str:
        if self.decibels != "no":
            decibels = f"{20 * math.log10(value):.4g} dB"
            return decibels if self.decibels == "only" else f"{value:g} ({decibels})"
        if self.unit:
            return render(value, self.unit)
        return f"{value:.0f}" if self.whole else f"{value:g}"

    def with_zero(self) -> Kind:
        """Return the same kind with 0 taken."""
        return replace(self, zero=True)

    def with_sign(self) -> Kind:
        """Return the same kind with 0 and negative values taken."""
        return replace(self, zero=True, signed=True)

    def parse(self, written: object) -> float:
        """Read a value.

        Parameters
        ----------
        written
            Text as it stands in the file, or a number from Python.

        Returns
        -------
        float
            The value in SI units; a ratio where dB were written.

        Raises
        ------
        RefusedError
            When the text is no quantity of this kind, or is beyond its limits.
        """
        if isinstance(written, float):
            return self._within(written, f"{written}")
        if isinstance(written, int) and not isinstance(written, bool):
            written = str(written)
        if not isinstance(written, str):
            raise RefusedError(form_of(written), self.takes)
        text = re.sub(" +", " ", written.translate(_SPACES)).strip(" ")
        if not text:
            raise RefusedError("no value is given", self.takes)
        if len(text) > _LONGEST:
            raise RefusedError(
                f"{shown(text)} is {len(text)} characters long, too long for a number", self.takes
            )
        return self._within(self._convert(text), text)

    def _convert(self, text: str) -> float:
        if self.decibels != "no" and (match := re.fullmatch(rf"({_NUMBER}) ?dB", text)):
            self._check_zeros(match[1], text)
            exponent = float(match[1]) / 20
            return float(10.0 ** max(-300.0, min(300.0, exponent)))
        if self.percents and (match := re.fullmatch(rf"({_NUMBER})({_EXPONENT})? ?(%|ppm)", text)):
            self._check_zeros(match[1], text)
            return self._number(match[1] + (match[2] or ""), "", text) / (100.0 if match[3] == "%" else 1e6)
        if match := self._plain.fullmatch(text):
            self._check_zeros(match[1], text)
            if self.decibels == "only":
                raise RefusedError(f"{text} has no unit; write {match[1]} dB if dB is meant", self.takes)
            return self._number(match[1] + (match[2] or ""), match[3] or "", text)
        if self.codes and (match := self._coded.fullmatch(text)):
            sign, whole, prefix, part = match.groups()
            if whole or prefix == self.code:
                self._check_zeros(whole, text)
                return self._number(
                    f"{sign}{whole or '0'}.{part}", "" if prefix == self.code else prefix, text
                )
        raise RefusedError(_complaint(text, self), self.takes)

    def _check_zeros(self, number: str, text: str) -> None:
        digits = number.lstrip("+-").split(".")[0]
        if len(digits) > 1 and digits.startswith("0"):
            raise RefusedError(
                f"{text} begins with a zero; write {text.replace(digits, digits.lstrip('0') or '0', 1)}"
            )

    def _number(self, number: str, prefix: str, text: str) -> float:
        prefix = prefix.replace("K", "k").replace("\u00b5", "u").replace("\u03bc", "u")
        value = float(_Figure(f"{number}{prefix}"))
        if value == 0 and any(digit in "123456789" for digit in re.split("[eE]", number)[0]):
            raise RefusedError(f"{text} is too small for a number", self.limits)
        return value

    def _within(self, value: float, text: str) -> float:
        text = shown(text)
        if math.isnan(value) or math.isinf(value):
            raise RefusedError(f"{text} is not a finite number", self.limits)
        if self.choices:
            if value not in self.choices:
                raise RefusedError(f"{text} is not among the values", self.limits)
            return value
        if value == 0:
            if not self.zero:
                raise RefusedError(f"{text} is zero", self.limits)
            return 0.0
        if value < 0 and not self.signed:
            raise RefusedError(f"{text} is negative", self.limits)
        if not self.least <= abs(value) <= self.most:
            raise RefusedError(f"{text} is out of range", self.limits)
        if self.whole and value != int(value):
            raise RefusedError(f"{text} is not a whole number", self.limits)
        if self.plain_from and value < self.plain_from and not text.endswith("dB"):
            decibels = 20 * math.log10(value)
            raise RefusedError(
                f"{text} could be dB or a ratio; write {text} dB, or {decibels:.4g} dB if the ratio is meant"
            )
        return value

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of a value of this kind, for editors."""
        if self.choices:
            return {"enum": [form(choice) for form in (int, "{:g}".format) for choice in self.choices]}
        return {
            "type": "string" if self.decibels == "only" else ["string", "number"],
            "pattern": self.pattern,
            "description": self.limits,
            "examples": [int(self.example) if self.example.isdigit() else self.example],
        }


def _complaint(text: str, kind: Kind) -> str:
    """Say why `text` is no quantity of `kind`."""
    if text.lstrip("+-").lower() in ("nan", "inf", "infinity", ".nan", ".inf"):
        return f"{text} is not a finite number"
    if "," in text:
        return f"{shown(text)} has a comma; write a decimal point, and nothing between thousands"
    match = re.match(rf"({_NUMBER})(?:{_EXPONENT})? ?", text)
    if not match:
        return f"{shown(text)} is not a number{_strange(text)}"
    suffix = text[match.end() :]
    if meg := re.fullmatch(r"meg ?(.*)", suffix, re.IGNORECASE):
        unit = meg[1] if meg[1] in kind.units else ""
        return f"{shown(text)} has SPICE's meg for mega; write {match[1]}M{unit}"
    for unit, noun in _UNIT_KINDS.items():
        prefixed = re.fullmatch(rf"[{_PREFIXES}]? ?{re.escape(unit)}", suffix)
        if prefixed and unit not in kind.units and noun != kind.noun:
            return f"{shown(text)} is {noun}"
    for unit in kind.units:
        if suffix and suffix.lower().endswith(unit.lower()) and unit not in suffix:
            return f"{shown(text)} has its unit in the wrong case; write {unit}"
    if ":" in suffix:
        return f"{shown(text)} has a colon and is not a number"
    if re.fullmatch(rf"{_NUMBER}{_EXPONENT} ?[{_PREFIXES}].*", text):
        return f"{shown(text)} has both an exponent and a prefix; write one of them"
    if suffix and suffix in _PREFIXES:
        return f"{shown(text)} has a prefix that is not taken here"
    return (
        f"{shown(text)} is not a quantity: {shown(suffix)!r} is neither a prefix nor a unit{_strange(suffix)}"
    )


def _strange(text: str) -> str:
    for character in text:
        if not (character.isascii() or character in f"{_PREFIXES}{_OHM[0]}{_OHM[1]}°"):
            name = f" {character}" if character.isprintable() else ""
            return f" (the character{name} U+{ord(character):04X} is not taken; write plain digits and signs)"
    return ""


RESISTANCE = Kind("a resistance", "Ω", _OHM, least=1e-6, most=1e15, example="10k", code="R", codes=True)
"""A resistance above zero."""

CAPACITANCE = Kind("a capacitance", "F", ("F",), least=1e-18, most=1.0, example="100p", codes=True)
"""A capacitance above zero."""

INDUCTANCE = Kind("an inductance", "H", ("H",), least=1e-15, most=1e6, example="10m", codes=True)
"""An inductance above zero."""

FREQUENCY = Kind("a frequency", "Hz", ("Hz",), least=1e-6, most=1e12, example="50 Hz", codes=True)
"""A frequency above zero."""

VOLTAGE = Kind("a voltage", "V", ("V",), least=1e-15, most=1e9, example="10 V", codes=True, zero=True)
"""A voltage, 0 or above."""

GAIN = Kind("a gain", prefixes="kKM", least=1e-6, most=1e7, example="100", decibels="or ratio")
"""A gain as a plain ratio, or in dB."""

RATIO_DB = Kind(
    "a ratio", prefixes="kKMG", least=1.0, most=1e15, example="120 dB", decibels="or ratio", plain_from=1000.0
)
"""A ratio in dB, or a plain ratio of 1000 or more."""

DECIBELS = Kind("a ratio in dB", prefixes="", least=1.0, most=1e15, example="120 dB", decibels="only")
"""A ratio that must be written in dB; the value is the plain ratio."""

FRACTION = Kind("a fraction", prefixes="", least=1e-12, most=1.0, example="0.1 %", percents=True, zero=True)
"""A fraction: %, ppm or plain."""

ANGLE = Kind("an angle", units=("deg", "°"), prefixes="", least=1e-6, most=360.0, example="60")
"""An angle in degrees."""

COUNT = Kind("a whole number", prefixes="", least=1, most=1_000_000, example="20", whole=True)
"""A count, 1 or more."""

SIGN = Kind("a sign", prefixes="", example="1", choices=(1.0, -1.0))
"""1 or -1."""

NUMBER = Kind("a number", prefixes="", least=1e-9, most=1e9, example="1.25", zero=True)
"""A plain number, 0 or above."""
