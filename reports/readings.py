"""How a figure is written for reading: SI prefixes, bounds, and enough digits for an engineer but no more."""

from __future__ import annotations

import math

from quantiphy import Quantity


def frequency_text(frequency_hz: float, digits: int = 3, pad: bool = False) -> str:
    """Write a frequency with an SI prefix: 1000.0 becomes ``1 kHz``.

    Parameters
    ----------
    frequency_hz : float
        Frequency in Hz.
    digits : int
        Significant digits.
    pad : bool
        Whether to keep trailing zeros, as a column of measured figures does: ``1.00 kHz``.

    Returns
    -------
    str
        The number, a space and the unit.
    """
    return str(Quantity(frequency_hz, "Hz").render(prec=digits - 1, form="si", strip_zeros=not pad))


def gain_text(ratio: float) -> str:
    """Write a gain in V/V with four significant digits and without an exponent: 101.0 becomes ``101.0``.

    Parameters
    ----------
    ratio : float
        Gain in V/V.

    Returns
    -------
    str
        The number; very large and very small gains keep an exponent.
    """
    if ratio == 0 or not 1e-4 <= abs(ratio) < 1e7:
        return f"{ratio:.3e}"
    rounded = float(f"{ratio:.3e}")
    return f"{rounded:.{max(0, 3 - math.floor(math.log10(abs(rounded))))}f}"


def decibel_text(level_db: float, at_floor: bool = False) -> str:
    """Write a level in dB to a tenth; a bound as ``> 240``, rounded down so that it stays true (to 0.05 dB).

    Parameters
    ----------
    level_db : float
        Level in dB.
    at_floor : bool
        Whether the level is only known to be above this value.

    Returns
    -------
    str
        The number, without its unit.
    """
    return f"> {math.floor(level_db + 0.05):d}" if at_floor else f"{level_db:.1f}"


def ratio_text(ratio: float, digits: int = 3) -> str:
    """Write an error ratio with an SI prefix: 9.09e-5 becomes ``90.9 µV/V``.

    Parameters
    ----------
    ratio : float
        |rho| in V/V, at least zero.
    digits : int
        Significant digits.

    Returns
    -------
    str
        The number, a space and the unit; below 0.1 nV/V, where a solve can tell nothing, ``< 0.1 nV/V``.
    """
    if ratio < 1e-10:
        return "< 0.1 nV/V"
    return str(Quantity(ratio, "V/V").render(prec=digits - 1, form="si", strip_zeros=False)).replace(
        "uV", "µV"
    )
