"""Interference: the common-mode voltage between source and amplifier, as lines, a profile, or both."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Annotated, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from pydantic import Field

from modepair.sweeps.corners import Corners, ReadsCorners
from modepair.sweeps.document import Document, Location
from modepair.sweeps.faults import Fault, RefusedError, form_of, shown
from modepair.sweeps.leaves import Reads
from modepair.sweeps.limits import read_frequency, solved_band
from modepair.sweeps.quantities import DECIBELS, FREQUENCY, VOLTAGE, Kind
from modepair.sweeps.schema import SPOT_MATCH, FrequencyValue, Section
from modepair.sweeps.words import Choice

MOST_HARMONICS = 100
"""Highest order of a harmonic."""

_VOLTS = replace(VOLTAGE, zero=False, example="5 V")
_HARMONICS = Kind("an order", prefixes="", least=1, most=MOST_HARMONICS, example="7", whole=True)
_FALLING = replace(DECIBELS, noun="a fall per decade of frequency in dB", example="20 dB")
_ORDERS = Choice("a choice of harmonics", ("all", "odd"))
_BITS = Kind("a number of bits", prefixes="", least=1, most=64, example="16", whole=True)
_RANGE = replace(VOLTAGE, zero=False, example="4.096 V")


@dataclass(frozen=True)
class Profile:
    """A common-mode voltage over a band, met at one frequency at a time.

    Parameters
    ----------
    corners
        Pairs of frequency in Hz, ascending, and volts rms; straight between them on logarithmic scales.
    """

    corners: Corners

    @property
    def frequency_hz(self) -> NDArray[np.float64]:
        """Frequencies of the corners, Hz, shape (m,)."""
        return np.array([frequency for frequency, _ in self.corners])

    @property
    def volts(self) -> NDArray[np.float64]:
        """Voltages of the corners, V rms, shape (m,)."""
        return np.array([volts for _, volts in self.corners])

    def at(self, frequency_hz: ArrayLike) -> NDArray[np.float64]:
        """Return the voltage at frequencies.

        Parameters
        ----------
        frequency_hz
            Frequencies, Hz, any shape, above zero.

        Returns
        -------
        ndarray
            V rms, of the same shape; NaN outside the profile.
        """
        corner_hz = self.frequency_hz
        asked_hz = np.asarray(frequency_hz, dtype=np.float64)
        low_hz, high_hz = corner_hz[0] * (1 - SPOT_MATCH), corner_hz[-1] * (1 + SPOT_MATCH)
        volts = np.exp(np.interp(np.log(asked_hz), np.log(corner_hz), np.log(self.volts)))
        return np.where((asked_hz >= low_hz) & (asked_hz <= high_hz), volts, np.nan)


IEC_61000_4_16 = {
    3: Profile(((15.0, 10.0), (150.0, 1.0), (1.5e3, 1.0), (15e3, 10.0), (150e3, 10.0))),
}
"""Conducted common-mode disturbance from 15 Hz to 150 kHz, by level (from memory): level 3 falls 20 dB a
decade from 10 V to 1 V at 150 Hz, is 1 V to 1.5 kHz, rises 20 dB a decade to 10 V at 15 kHz, and is 10 V to
150 kHz."""


class _Level:
    takes = "3, the only one known here (from memory); for another, write its corners under profile"

    def parse(self, written: object) -> int:
        if not isinstance(written, str | int):
            raise RefusedError(form_of(written), self.takes)
        text = str(written).strip()
        if text not in {str(level) for level in IEC_61000_4_16}:
            raise RefusedError(f"{shown(text)} is not a level" if text else "no value is given", self.takes)
        return int(text)

    def json_schema(self) -> dict[str, Any]:
        return {"enum": [form(level) for form in (int, str) for level in IEC_61000_4_16]}


class Line(Section):
    """A single interfering frequency, with harmonics where they are given.

    Parameters
    ----------
    at
        Its frequency, Hz.
    volts
        Its voltage, V rms.
    harmonics
        The highest order of its harmonics; 1: none.
    falling
        How much harmonics fall per decade of frequency, a ratio: 20 dB makes the nth one nth.
    orders
        ``all`` orders from 2 on, or ``odd`` ones from 3 on.
    """

    at: FrequencyValue
    volts: Annotated[float, Reads(_VOLTS)]
    harmonics: Annotated[float, Reads(_HARMONICS)] = 1.0
    falling: Annotated[float, Reads(_FALLING)] = 10.0
    orders: Annotated[str, Reads(_ORDERS)] = "all"

    def series(self) -> Iterator[tuple[float, float]]:
        """Yield frequency (Hz) and voltage (V rms) of its harmonics, the line itself first."""
        for order in range(1, int(self.harmonics) + 1, 2 if self.orders == "odd" else 1):
            yield self.at * order, self.volts * self.falling ** -math.log10(order)


class Disturbance(Section):
    """A standard's profile (key ``iec-61000-4-16``), by its level."""

    level: Annotated[int, Reads(_Level())]


class Converter(Section):
    """The converter behind the stage.

    Parameters
    ----------
    bits
        Its resolution.
    range
        From its lowest to its highest input, V.
    """

    bits: Annotated[float, Reads(_BITS)]
    range: Annotated[float, Reads(_RANGE)]

    @property
    def code_volts(self) -> float:
        """The input step of one code, V: ``range / 2**bits``."""
        return float(self.range / 2.0**self.bits)


class Interference(Section):
    """The common-mode voltage between source and amplifier.

    Parameters
    ----------
    lines
        Single frequencies, all present at the same time.
    profile
        A voltage over a band, met at one frequency at a time.
    disturbance
        The same by a standard's level (key ``iec-61000-4-16``).
    converter
        What reads the output; gives errors in codes.
    """

    lines: tuple[Line, ...] = ()
    profile: Annotated[Profile, Reads(ReadsCorners(_VOLTS, "[[15, 10 V], [150, 1 V]]", Profile))] | None = (
        None
    )
    disturbance: Disturbance | None = Field(default=None, alias="iec-61000-4-16")
    converter: Converter | None = None

    @property
    def spectrum(self) -> tuple[tuple[float, float], ...]:
        """Lines and their harmonics: pairs of frequency (Hz), ascending, and voltage (V rms).

        A line that is given by itself goes before a harmonic of the same frequency; harmonics of several
        lines at one frequency add as powers.
        """
        given = [(line.at, line.volts) for line in self.lines]
        found: list[tuple[float, float]] = []
        harmonics = [pair for line in self.lines for pair in list(line.series())[1:]]
        for frequency, volts in [*given, *harmonics]:
            same = next((i for i, (f, _) in enumerate(found) if abs(f - frequency) <= SPOT_MATCH * f), None)
            if same is None:
                found.append((frequency, volts))
            elif same >= len(given):
                found[same] = (found[same][0], math.hypot(found[same][1], volts))
        return tuple(sorted(found))

    @property
    def swept(self) -> Profile | None:
        """The profile, given by corners or by a standard's level; None: none."""
        return IEC_61000_4_16[self.disturbance.level] if self.disturbance else self.profile

    @property
    def frequency_hz(self) -> tuple[float, ...]:
        """Frequencies that must be solved exactly: lines, harmonics and the profile's corners, Hz."""
        corners = self.swept.frequency_hz.tolist() if self.swept else []
        return (*(frequency for frequency, _ in self.spectrum), *corners)


_NEEDED = (
    ("at", f"at is missing; it takes {FREQUENCY.takes}"),
    ("volts", f"volts is missing; it takes {_VOLTS.takes}"),
)
_CONVERTER = (
    ("bits", f"bits is missing; it takes {_BITS.takes}"),
    ("range", f"range is missing; it takes {_RANGE.takes}"),
)
_DISTURBANCE = (("level", f"level is missing; it takes {_Level.takes}"),)


def interference_faults(document: Document) -> Iterator[Fault]:
    """Yield what a spec's interference does not agree on with itself, or with the frequencies solved.

    Parameters
    ----------
    document
        The spec as read; values that cannot be read are passed over, as their own faults name them.

    Yields
    ------
    Fault
        In no particular order.
    """
    top: Location = ("interference",)
    node = document.node(top)
    if node is None or node.entries is None:
        return
    keys = node.entries
    if not keys.keys() & {"lines", "profile", "iec-61000-4-16"}:
        message = "there is no voltage here; give lines, such as [{at: 50, volts: 5}], or a profile"
        yield document.fault(top, message, at_key=True)
    if keys.keys() >= {"profile", "iec-61000-4-16"}:
        message = "profile and iec-61000-4-16 are both given; leave one of them out"
        yield document.fault((*top, "profile"), message, at_key=True)
    for name, needed in (("converter", _CONVERTER), ("iec-61000-4-16", _DISTURBANCE)):
        section = keys.get(name)
        given = section.entries if section is not None else None
        for key, message in needed if given is not None else ():
            if key not in (given or {}):
                yield document.fault((*top, name), message, at_key=True)
    band = solved_band(document)
    yield from _line_faults(document, (*top, "lines"), band)
    if band is not None:
        yield from _coverage(document, top, band)


def _line_faults(
    document: Document, place: Location, band: tuple[float, float, str] | None
) -> Iterator[Fault]:
    node = document.node(place)
    if node is not None and node.items == []:
        yield document.fault(
            place, "the list is empty; lines takes a list of lines, such as [{at: 50, volts: 5}]"
        )
    seen: list[tuple[float, int]] = []
    for index, line in enumerate((node.items or []) if node else []):
        here: Location = (*place, index)
        for key, message in _NEEDED:
            if line.entries is not None and key not in line.entries:
                yield document.fault(here, message)
        for key in ("falling", "orders"):
            if line.entries is not None and key in line.entries and "harmonics" not in line.entries:
                message = f"{key} has no effect without harmonics; give harmonics too, or remove it"
                yield document.fault((*here, key), message, at_key=True)
        value = read_frequency(document, (*here, "at"))
        if value is None:
            continue
        written = document.node((*here, "at"))
        text = shown((written.text or "") if written else "")
        twice = next((i for other, i in seen if abs(other - value) <= SPOT_MATCH * value), None)
        if twice is not None:
            message = f"{text} is among the lines twice, first as lines[{twice}]; remove one of them"
            yield document.fault((*here, "at"), message)
        seen.append((value, index))
        if band is None:
            continue
        if not band[0] <= value <= band[1]:
            message = f"{text} lies outside the solved band, {band[2]}; every line must be solved"
            yield document.fault((*here, "at"), message)
            continue
        written = document.node((*here, "harmonics"))
        try:
            order = _HARMONICS.parse(written.text if written else None)
        except RefusedError:
            continue
        if order * value > band[1] * (1 + SPOT_MATCH):
            message = (
                f"harmonic {order:.0f} of {text} lies above the solved band, {band[2]}; "
                f"up to {int(band[1] / value)} is within it"
            )
            yield document.fault((*here, "harmonics"), message)


def _coverage(document: Document, top: Location, band: tuple[float, float, str]) -> Iterator[Fault]:
    """Yield profiles that reach beyond the solved band: an error there would be overlooked."""
    node = document.node((*top, "profile"))
    for index, _ in enumerate((node.items or []) if node else []):
        place = (*top, "profile", index, 0)
        value = read_frequency(document, place)
        if value is not None and not band[0] <= value <= band[1]:
            written = document.node(place)
            text = shown((written.text or "") if written else "")
            message = f"{text} lies outside the solved band, {band[2]}; the whole profile must be solved"
            yield document.fault(place, message)
    written = document.node((*top, "iec-61000-4-16", "level"))
    try:
        profile = IEC_61000_4_16[_Level().parse(written.text if written else None)]
    except RefusedError:
        return
    if not (band[0] <= profile.frequency_hz[0] and profile.frequency_hz[-1] <= band[1]):
        message = (
            f"the profile runs from 15 Hz to 150 kHz, beyond the solved band, {band[2]}; widen frequency"
        )
        yield document.fault((*top, "iec-61000-4-16"), message, at_key=True)
