"""Limits: what a sweep's cases must keep, and the mask of least CMRR over frequency."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Annotated

import numpy as np
from numpy.typing import ArrayLike, NDArray
from pydantic import Field

from modepair.sweeps.corners import Corners, ReadsCorners
from modepair.sweeps.document import Document, Location
from modepair.sweeps.faults import Fault, RefusedError, shown
from modepair.sweeps.leaves import Reads
from modepair.sweeps.quantities import DECIBELS, FRACTION, FREQUENCY, GAIN, VOLTAGE, Kind
from modepair.sweeps.schema import SPOT_MATCH, FrequencyValue, Section

_PART = replace(FRACTION, zero=False, example="0.5 %")
_YIELD = replace(FRACTION, zero=False, most=0.999999, example="99 %")
_ERROR = replace(VOLTAGE, zero=False, example="1 mV")
_CODES = Kind("a number of converter codes", prefixes="", least=1e-6, most=1e9, example="2")


@dataclass(frozen=True)
class Mask:
    """The least CMRR over frequency: corners, and straight lines in dB over log frequency between them.

    Parameters
    ----------
    corners
        Pairs of frequency in Hz, ascending, and level in dB; at least one.
    """

    corners: Corners

    @property
    def frequency_hz(self) -> NDArray[np.float64]:
        """Frequencies of the corners, Hz, shape (m,)."""
        return np.array([frequency for frequency, _ in self.corners])

    @property
    def level_db(self) -> NDArray[np.float64]:
        """Levels of the corners, dB, shape (m,)."""
        return np.array([level for _, level in self.corners])

    def at(self, frequency_hz: ArrayLike) -> NDArray[np.float64]:
        """Return the mask's level at frequencies.

        Parameters
        ----------
        frequency_hz
            Frequencies, Hz, any shape, above zero.

        Returns
        -------
        ndarray
            Levels in dB, of the same shape; NaN outside the mask.
        """
        corner_hz = self.frequency_hz
        asked_hz = np.asarray(frequency_hz, dtype=np.float64)
        inside = (asked_hz >= corner_hz[0] * (1 - SPOT_MATCH)) & (
            asked_hz <= corner_hz[-1] * (1 + SPOT_MATCH)
        )
        level = np.interp(np.log(asked_hz), np.log(corner_hz), self.level_db)
        return np.where(inside, level, np.nan)


def _mask(corners: Corners) -> Mask:
    """Make a mask from corners whose levels are plain ratios; rounded as they were written, in dB."""
    return Mask(tuple((frequency, round(20 * float(np.log10(ratio)), 9)) for frequency, ratio in corners))


_READS_MASK = ReadsCorners(DECIBELS, "[[50, 90 dB], [1k, 80 dB]]", _mask)


class GainLimit(Section):
    """How far the differential gain may be off over a band.

    Parameters
    ----------
    within
        Greatest relative error of abs(A_dm), a fraction.
    of
        The gain that is asked for; None: the stage's `gain`.
    from_hz, to_hz
        Ends of the band, Hz (keys ``from`` and ``to``); None: where the solved band begins or ends.
    """

    within: Annotated[float, Reads(_PART)]
    of: Annotated[float, Reads(GAIN)] | None = None
    from_hz: FrequencyValue | None = Field(default=None, alias="from")
    to_hz: FrequencyValue | None = Field(default=None, alias="to")


class BandwidthLimit(Section):
    """The least bandwidth (-3 dB) of the differential gain, Hz."""

    least: FrequencyValue


class YieldLimit(Section):
    """The least share of draws that keep the CMRR mask, a fraction."""

    least: Annotated[float, Reads(_YIELD)]


class InputErrorLimit(Section):
    """The greatest error that interference leaves, referred to the input, V rms."""

    most: Annotated[float, Reads(_ERROR)]


class OutputErrorLimit(Section):
    """The greatest error that interference leaves at the output.

    Parameters
    ----------
    most
        In V rms.
    most_codes
        In codes of the converter, rms; instead of `most`.
    """

    most: Annotated[float, Reads(_ERROR)] | None = None
    most_codes: Annotated[float, Reads(_CODES)] | None = None


class Limits(Section):
    """What every case must keep.

    Parameters
    ----------
    cmrr
        The mask of least CMRR.
    differential_gain
        How far the gain may be off.
    bandwidth
        The least bandwidth.
    yield_
        The least yield (key ``yield``).
    output_error, input_error
        The greatest errors that interference leaves.
    """

    cmrr: Annotated[Mask, Reads(_READS_MASK)] | None = None
    differential_gain: GainLimit | None = None
    bandwidth: BandwidthLimit | None = None
    yield_: YieldLimit | None = Field(default=None, alias="yield")
    output_error: OutputErrorLimit | None = None
    input_error: InputErrorLimit | None = None

    @property
    def yield_least(self) -> float | None:
        """The least yield, a fraction; None: none asked."""
        return self.yield_.least if self.yield_ else None

    @property
    def frequency_hz(self) -> tuple[float, ...]:
        """Frequencies that must be solved exactly: the mask's corners and the ends of the gain's band, Hz."""
        found = list(self.cmrr.frequency_hz.tolist()) if self.cmrr else []
        if self.differential_gain:
            ends = (self.differential_gain.from_hz, self.differential_gain.to_hz)
            found += [end for end in ends if end is not None]
        return tuple(found)


_NEEDED = {
    "differential_gain": ("within", f"it takes {_PART.takes}"),
    "bandwidth": ("least", "it takes a frequency, such as 10 kHz"),
    "yield": ("least", f"it takes {_YIELD.takes}"),
    "input_error": ("most", f"it takes {_ERROR.takes}"),
}


def limit_faults(document: Document) -> Iterator[Fault]:
    """Yield what a spec's limits do not agree on with each other, or with the rest of the spec.

    Parameters
    ----------
    document
        The spec as read; values that cannot be read are passed over, as their own faults name them.

    Yields
    ------
    Fault
        In no particular order.
    """
    limits = document.node(("limits",))
    if limits is None or limits.entries is None:
        return
    if not limits.entries:
        message = "nothing is limited; give cmrr, such as [[50, 90 dB], [1k, 80 dB]], or remove limits"
        yield document.fault(("limits",), message, at_key=True)
    for name, (key, takes) in _NEEDED.items():
        node = limits.entries.get(name)
        if node is not None and node.entries is not None and key not in node.entries:
            yield document.fault(("limits", name), f"{key} is missing; {takes}", at_key=True)
    yield from _band_faults(document)
    if "yield" in limits.entries:
        if "cmrr" not in limits.entries:
            message = "a yield is counted against the cmrr mask; give cmrr too"
            yield document.fault(("limits", "yield"), message, at_key=True)
        if not document.has(("tolerance",)):
            message = "a yield is counted over draws; give tolerance with draws"
            yield document.fault(("limits", "yield"), message, at_key=True)
    yield from _error_faults(document)


def read_frequency(document: Document, location: Location) -> float | None:
    """Return the frequency written at a location, Hz, or None where there is none that can be read."""
    node = document.node(location)
    try:
        return FREQUENCY.parse(node.text if node else None)
    except RefusedError:
        return None


def solved_band(document: Document) -> tuple[float, float, str] | None:
    """Return start and stop of a spec, Hz, and the band as written; None where it cannot be read."""
    start, stop = (read_frequency(document, ("frequency", key)) for key in ("start", "stop"))
    if start is None or stop is None or stop < start:
        return None
    written = [node.text for key in ("start", "stop") if (node := document.node(("frequency", key)))]
    return start, stop, " to ".join(shown(str(text)) for text in written)


def _band_faults(document: Document) -> Iterator[Fault]:
    """Yield the limits that ask about frequencies that are not solved."""
    band = solved_band(document)
    mask = document.node(("limits", "cmrr"))
    places: list[tuple[Location, str]] = [
        (
            ("limits", "cmrr", index, 0),
            "a curve that does not cover the mask is no pass",
        )
        for index, _ in enumerate((mask.items or []) if mask else [])
    ]
    gain = ("limits", "differential_gain")
    places += [((*gain, key), "the band of a limit must lie within it") for key in ("from", "to")]
    for location, why in places:
        value = read_frequency(document, location)
        if value is None or band is None or band[0] <= value <= band[1]:
            continue
        node = document.node(location)
        text = shown((node.text or "") if node else "")
        yield document.fault(location, f"{text} lies outside the solved band, {band[2]}; {why}")
    low, high = (read_frequency(document, (*gain, key)) for key in ("from", "to"))
    if low is not None and high is not None and high < low:
        message = "to is below from; the band runs from the lower to the higher frequency"
        yield document.fault((*gain, "to"), message)
    node = document.node(gain)
    elsewhere = document.has(("stage", "gain")) and not document.has(("vary", "stage.gain"))
    if node is not None and node.entries is not None and "of" not in node.entries and not elsewhere:
        message = "of is missing, and stage.gain is not one gain for every case; of takes a gain, such as 101"
        yield document.fault(gain, message, at_key=True)
    least = ("limits", "bandwidth", "least")
    value = read_frequency(document, least)
    if value is not None and band is not None and value > band[1]:
        node = document.node(least)
        text = shown((node.text or "") if node else "")
        message = f"{text} lies above the solved band, {band[2]}; raise frequency.stop to show it"
        yield document.fault(least, message)


def _error_faults(document: Document) -> Iterator[Fault]:
    for name in ("output_error", "input_error"):
        node = document.node(("limits", name))
        if node is not None and not document.has(("interference",)):
            message = f"{name} judges what interference leaves; give interference too"
            yield document.fault(("limits", name), message, at_key=True)
    node = document.node(("limits", "output_error"))
    if node is None or node.entries is None:
        return
    given = [key for key in ("most", "most_codes") if key in node.entries]
    if len(given) == 2:
        message = "most and most_codes are both given; leave one of them out"
        yield document.fault(("limits", "output_error"), message, at_key=True)
    if not given:
        message = f"most or most_codes is missing; most takes {_ERROR.takes}, most_codes {_CODES.takes}"
        yield document.fault(("limits", "output_error"), message, at_key=True)
    if "most_codes" in given and not document.has(("interference", "converter")):
        message = "codes need a converter; give interference.converter, such as {bits: 16, range: 4.096}"
        yield document.fault(("limits", "output_error", "most_codes"), message, at_key=True)
