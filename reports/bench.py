"""The op-amp bench's figures: what a model does, whatever it claims."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Bench", "Comparison", "bench_figures", "compare_figures"]

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]

LEAST_FARAD = 1e-18
"""Below this a capacitance is the round-off of a solve."""

FLAT_DB = 0.05
"""Change of the gain over the lowest octave beyond which the lowest frequency does not show its DC value."""


@dataclass(frozen=True)
class Bench:
    """What the bench measured of one op-amp.

    Attributes
    ----------
    name : str
        The candidate.
    frequency_hz : ndarray, shape (F,)
        Frequencies, ascending.
    gain : ndarray, shape (F,)
        Open-loop gain A, output per volt between the inputs, V/V.
    common_gain : ndarray, shape (F,)
        Output per volt at both inputs, open loop, V/V: A k.
    differential_admittance : ndarray, shape (F,)
        Between the inputs, siemens.
    common_admittance : ndarray, shape (F,)
        From each input to ground, the mean of both, siemens.
    output_impedance : ndarray, shape (F,)
        Open loop, ohm.
    supply_gains : ndarray, shape (2, F), optional
        Output per volt on the positive and on the negative supply, open loop, V/V; absent without supplies.
    """

    name: str
    frequency_hz: FloatArray
    gain: ComplexArray
    common_gain: ComplexArray
    differential_admittance: ComplexArray
    common_admittance: ComplexArray
    output_impedance: ComplexArray
    supply_gains: ComplexArray | None = None

    @classmethod
    def from_solve(cls, name: str, frequency_hz: FloatArray, vectors: ComplexArray) -> Bench:
        """Make sense of the vectors of a solve, in the order in which the bench's netlist names them.

        Parameters
        ----------
        name : str
            The candidate.
        frequency_hz : ndarray, shape (F,)
            Frequencies.
        vectors : ndarray, shape (7, F) or (9, F)
            Output at half a volt and minus half a volt at the inputs, and at 1 V at both; currents into both
            inputs of the first; of the second; output at 1 A into it; with supplies, output at 1 V on each.

        Notes
        -----
        With admittances Yd between the inputs and Yc from each to ground, the pins take Yd + Yc/2 and
        -(Yd + Yc/2) of the differential drive, and Yc each of the common one.
        """
        differential, common, plus_d, minus_d, plus_c, minus_c, output = vectors[:7]
        common_admittance = 0.5 * (plus_c + minus_c)
        return cls(
            name,
            frequency_hz,
            differential,
            common,
            0.5 * (plus_d - minus_d) - 0.5 * common_admittance,
            common_admittance,
            output,
            vectors[7:] if len(vectors) > 7 else None,
        )

    @property
    def error(self) -> ComplexArray:
        """The op-amp's own common-mode error k, V/V, shape (F,): signed reciprocal of its CMRR."""
        return self.common_gain / self.gain

    @property
    def cmrr_db(self) -> FloatArray:
        """The op-amp's own CMRR, dB, shape (F,); infinite where no error is left."""
        with np.errstate(divide="ignore"):
            return np.asarray(-20 * np.log10(np.abs(self.error)))

    @property
    def gain_is_flat(self) -> bool:
        """Whether the lowest frequency shows the gain at DC."""
        octave = int(np.searchsorted(self.frequency_hz, 2 * self.frequency_hz[0]))
        return bool(abs(20 * math.log10(abs(self.gain[0] / self.gain[octave]))) < FLAT_DB)


def _first_below(values: FloatArray, level: float) -> int | None:
    """Index of the first value below a level that the first one is not below."""
    below = np.flatnonzero(values < level)
    return int(below[0]) if below.size and below[0] > 0 else None


def _crossing(x: FloatArray, y: FloatArray, level: float) -> tuple[int, float] | None:
    """First fall of `y` below a level: the index behind it, and x there, on a straight line."""
    index = _first_below(y, level)
    if index is None:
        return None
    share = (y[index - 1] - level) / (y[index - 1] - y[index])
    return index, float(x[index - 1] + share * (x[index] - x[index - 1]))


def _corner_hz(frequency_hz: FloatArray, ratio: ComplexArray) -> float | None:
    """Where a ratio has fallen 3 dB from its first value.

    A one-pole fall has 1/|ratio|^2 linear in f^2, so that the straight line between two points is exact.
    """
    with np.errstate(divide="ignore"):
        inverse = -((np.abs(ratio[0]) / np.abs(ratio)) ** 2)
    found = _crossing(frequency_hz**2, inverse, -2.0)
    return None if found is None else math.sqrt(found[1])


def bench_figures(bench: Bench) -> dict[str, float]:
    """Work out the figures of a measured op-amp.

    Parameters
    ----------
    bench : Bench
        The measurement.

    Returns
    -------
    dict of str to float
        SI values under the names of op-amp parameters, ratios plain; besides these `unity_gain_frequency` and,
        with supplies, `supply_rejection_positive` and `supply_rejection_negative`. What the band does not show
        has no key.

    Notes
    -----
    Gain-bandwidth is the gain at DC times the frequency 3 dB below it, or where the gain at the lowest
    frequency still rises, gain times frequency there. The phase margin is that of the gain with its output
    closed onto the inverting input and nothing else on it: 180 deg and the phase where the gain is one. The
    resistances are those at the lowest frequency, the capacitances those at unity gain.
    """
    f, gain = bench.frequency_hz, bench.gain
    size = np.abs(gain)
    figures = {"open_loop_gain": float(size[0])}
    pole = _corner_hz(f, gain)
    if bench.gain_is_flat and pole is not None:
        figures["gain_bandwidth"] = float(size[0]) * pole
    elif not bench.gain_is_flat:
        figures["gain_bandwidth"] = float(size[0] * f[0])
    with np.errstate(divide="ignore"):
        found = _crossing(np.log10(f), 20 * np.log10(size), 0.0)
    last = len(f) - 1
    if found is not None:
        last, place = found
        figures["unity_gain_frequency"] = 10**place
        phase = np.degrees(np.unwrap(np.angle(gain)))
        figures["phase_margin"] = 180.0 + float(np.interp(place, np.log10(f), phase))
    error = bench.error
    if error[0] != 0:
        figures["cmrr"] = 1.0 / float(np.abs(error[0]))
        figures["cmrr_sign"] = 1.0 if error[0].real >= 0 else -1.0
        corner = _corner_hz(f[: last + 1], 1 / error[: last + 1]) if error[: last + 1].all() else None
        if corner is not None:
            figures["cmrr_corner"] = corner
    for mode, admittance in (
        ("differential", bench.differential_admittance),
        ("common", bench.common_admittance),
    ):
        if admittance[0].real > 0:
            figures[f"input_resistance_{mode}"] = 1.0 / float(admittance[0].real)
        capacitance = float(admittance[last].imag / (2 * np.pi * f[last]))
        if capacitance > LEAST_FARAD:
            figures[f"input_capacitance_{mode}"] = capacitance
    figures["output_resistance"] = float(np.abs(bench.output_impedance[0]))
    if bench.supply_gains is not None:
        for sign, other in zip(("positive", "negative"), bench.supply_gains, strict=True):
            if other[0] != 0:
                figures[f"supply_rejection_{sign}"] = float(np.abs(gain[0] / other[0]))
    return figures


@dataclass(frozen=True)
class Comparison:
    """One figure, measured beside declared.

    Attributes
    ----------
    parameter : str
        Its name.
    measured, declared : float or None
        SI values; None: not seen in the band, or not given.
    """

    parameter: str
    measured: float | None
    declared: float | None

    @property
    def difference_db(self) -> float | None:
        """Measured above declared, as a ratio in dB; None where either is missing or zero."""
        if not self.measured or not self.declared or not math.isfinite(self.declared):
            return None
        return 20 * math.log10(abs(self.measured / self.declared))


def compare_figures(measured: Mapping[str, float], declared: Mapping[str, float]) -> list[Comparison]:
    """Lay measured figures beside declared ones.

    Parameters
    ----------
    measured : mapping of str to float
        As from `bench_figures`.
    declared : mapping of str to float
        Values that came with the model, under the names of op-amp parameters.

    Returns
    -------
    list of Comparison
        Every figure that either has.
    """
    order = [*ORDER, *(name for name in measured if name not in ORDER)]
    return [
        Comparison(name, measured.get(name), declared.get(name))
        for name in order
        if name in measured or name in declared
    ]


ORDER = (
    "open_loop_gain",
    "gain_bandwidth",
    "unity_gain_frequency",
    "phase_margin",
    "cmrr",
    "cmrr_corner",
    "cmrr_sign",
    "input_resistance_differential",
    "input_capacitance_differential",
    "input_resistance_common",
    "input_capacitance_common",
    "output_resistance",
)
"""Figures as a data sheet lists them."""
