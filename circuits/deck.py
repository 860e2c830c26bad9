"""The deck: what the engine loads once for many cases. Light to import, since every worker does."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from modepair.circuits.elements import GROUND

__all__ = ["GAIN_NODES", "Bias", "Deck"]

GAIN_NODES = ("out_d", "out_c")
"""Outputs of the bench's copies that are driven differentially and in common mode."""

RAIL_SHARE = 0.01
"""Share of the supplies' span within which an output is at its rail."""

LARGEST_INPUT_VOLT = 0.1
"""Voltage between an op-amp's inputs beyond which feedback does not hold them together: far beyond any offset."""

LEAST_GAIN_SHARE = 0.1
"""Share of its gain on the bench below which an op-amp in its place is saturated. A load as low as the output
resistance halves its gain."""

TELLING_GAIN = 100.0
"""Gain on the bench below which a frequency is too high to tell."""


@dataclass(frozen=True)
class Bias:
    """What is to be checked of an imported op-amp's operating point.

    Attributes
    ----------
    instance : str
        The op-amp, such as "A1".
    plus, minus, out : str
        Its nodes in the deck.
    supplies : tuple of float
        Positive and negative supply in volts; empty for a model without.
    driven : tuple of str
        The same nodes of the copy that is driven differentially.
    reference : str
        Netlist in which the voltages of `GAIN_NODES` are the model's own gain, and that from the common mode.
    """

    instance: str
    plus: str
    minus: str
    out: str
    supplies: tuple[float, ...] = ()
    driven: tuple[str, str, str] = ("", "", "")
    reference: str = ""

    @property
    def nodes(self) -> tuple[str, str, str]:
        """The nodes whose voltages are needed."""
        return self.plus, self.minus, self.out

    def in_copies(self, common: str, differential: str, shared: Collection[str] = ()) -> Bias:
        """Return the same with the nodes of the two copies of the circuit, given their suffixes and what they share."""
        one = {GROUND, *shared}
        plus, minus, out = (node if node in one else f"{node}_{common}" for node in self.nodes)
        positive, negative, output = (
            node if node in one else f"{node}_{differential}" for node in self.nodes
        )
        return replace(self, plus=plus, minus=minus, out=out, driven=(positive, negative, output))

    def gain_fault(self, volts: tuple[complex, complex, complex], gain: float, error: float) -> str:
        """Say why a solve shows that an op-amp is saturated: it needs far more input than on the bench.

        Parameters
        ----------
        volts : tuple of complex
            Voltages of its nodes in one copy, at a frequency where its output moves.
        gain : float
            Size of its open-loop gain on the bench there, V/V.
        error : float
            Size of its common-mode error there, V/V.

        Returns
        -------
        str
            The reason; empty if there is none.

        Notes
        -----
        Between its inputs an op-amp needs |out|/A for its output, and |k| times the common mode at the most.
        """
        if gain < TELLING_GAIN:
            return ""
        plus, minus, out = volts
        needed = abs(out) / gain + error * abs(plus + minus) / 2
        if abs(plus - minus) <= needed / LEAST_GAIN_SHARE:
            return ""
        return (
            f"{self.instance} needs {abs(plus - minus) / needed:.3g} times the input that it needs on the bench: at an "
            "operating point with so little gain it is saturated, and a small-signal curve about it means nothing"
        )

    def fault(self, plus_volt: float, minus_volt: float, out_volt: float) -> str:
        """Say why a curve about this operating point would mean nothing.

        Parameters
        ----------
        plus_volt, minus_volt, out_volt : float
            Voltages of its nodes.

        Returns
        -------
        str
            The reason; empty if there is none.
        """
        why = "a small-signal curve about such a point means nothing"
        if self.supplies:
            high, low = self.supplies
            rails = f"with supplies of {high:g} V and {low:g} V"
            for name, volt in (("plus", plus_volt), ("minus", minus_volt)):
                if not low < volt < high:
                    return (
                        f"{self.instance}'s {name} input is at {volt:.4g} V {rails}, not between them: {why}"
                    )
            margin = RAIL_SHARE * (high - low)
            if not low + margin < out_volt < high - margin:
                return f"{self.instance}'s output is at {out_volt:.4g} V {rails}, at a rail: {why}"
        apart = plus_volt - minus_volt
        if abs(apart) > LARGEST_INPUT_VOLT:
            return (
                f"{self.instance}'s inputs are {apart:.4g} V apart at an output of {out_volt:.4g} V, so that feedback "
                f"does not hold it: {why}"
            )
        return ""


@dataclass(frozen=True)
class Deck:
    """What the engine loads once: a netlist, and how to alter its elements.

    Attributes
    ----------
    text : str
        The netlist, without analyses.
    names : tuple of str
        Names of the elements that can be altered; the first letter tells their kind.
    commands : tuple of tuple of str
        For each element the starts of the engine commands that set it in all copies.
    values : ndarray, shape (m,)
        The element values that the text holds.
    biases : tuple of Bias
        What is to be checked of the operating point of each case.
    nonlinear : bool
        Whether the circuit has an operating point.
    """

    text: str
    names: tuple[str, ...]
    commands: tuple[tuple[str, ...], ...]
    values: npt.NDArray[np.float64]
    biases: tuple[Bias, ...] = ()
    nonlinear: bool = False
