"""The op-amp bench: test circuits of its own that measure one op-amp, whatever its model is.

An op-amp's open-loop gain cannot be measured in an open loop, since at DC its output would go to a rail. So
the loop is closed at DC, by an inductor from the output to the inverting input, and open at every frequency
measured, where a capacitor ties that input to its generator. Both are so large that neither matters on its
wrong side. The operating point is then that of a follower, and each copy of the circuit measures one thing:

== ==============================================================================================
d  +0.5 V and -0.5 V at the inputs: gain, and with the next the differential input admittance
c  1 V at both inputs: gain from common mode, and common input admittance
o  1 A into the output: output impedance
p  1 V on the positive supply: gain from it; imported models only
n  1 V on the negative supply
== ==============================================================================================
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from modepair.circuits.deck import GAIN_NODES, Bias
from modepair.circuits.elements import GROUND, Card, Element, Kind
from modepair.circuits.imported import ImportedModel
from modepair.circuits.netlist import circuit
from modepair.circuits.opamps import opamp_elements

__all__ = [
    "BENCH_VECTORS",
    "LOOP_FARAD",
    "LOOP_HENRY",
    "SUPPLY_VECTORS",
    "Mounting",
    "bench_netlist",
    "gain_netlist",
    "imported_mounting",
    "macromodel_mounting",
]

LOOP_HENRY = LOOP_FARAD = 1e12
"""At 1 mHz six gigohm at the output, and a corner of the loop at 0.2 pHz."""

DRIVES = {"d": (0.5, -0.5), "c": (1.0, 1.0), "o": (0.0, 0.0)}
SUPPLY_DRIVES = {"p": (1.0, 0.0), "n": (0.0, 1.0)}

BENCH_VECTORS = (
    "out_d", "out_c", "vsp_d#branch", "vsn_d#branch", "vsp_c#branch", "vsn_c#branch", "out_o",
)  # fmt: skip
"""What a solve gives: outputs in volts, and currents into the pins in amperes."""

SUPPLY_VECTORS = ("out_p", "out_n")
"""What a solve gives besides where there are supplies."""


@dataclass(frozen=True)
class Mounting:
    """One op-amp as the bench takes it.

    Attributes
    ----------
    cards : callable
        Given the nodes of the non-inverting input, the inverting input, the output, the positive and the
        negative supply, returns what is between them.
    models : str
        Definitions of subcircuits that these name.
    supplies : tuple of float, optional
        Positive and negative supply in volts; absent for a model without.
    bias : Bias, optional
        What is to be checked of its operating point on the bench.
    """

    cards: Callable[[str, str, str, str, str], list[Card]]
    models: str = ""
    supplies: tuple[float, float] | None = None
    bias: Bias | None = None


def macromodel_mounting(parameters: Mapping[str, float]) -> Mounting:
    """Mount a macromodel.

    Parameters
    ----------
    parameters : mapping of str to float
        Its parameters in SI units; zero means that an impedance is not there.

    Returns
    -------
    Mounting
        Without supplies.
    """
    parts = {f"A1.{name}": np.full(1, value) for name, value in parameters.items() if value}

    def cards(plus: str, minus: str, out: str, _positive: str, _negative: str) -> list[Card]:
        return list(opamp_elements("A1", plus, minus, out, parts))

    return Mounting(cards)


def imported_mounting(model: ImportedModel) -> Mounting:
    """Mount an imported model.

    Parameters
    ----------
    model : ImportedModel
        The model.

    Returns
    -------
    Mounting
        With its supplies.
    """

    def cards(plus: str, minus: str, out: str, positive: str, negative: str) -> list[Card]:
        return [model.instance("A1", plus, minus, out, positive, negative)]

    supplies = (model.supplies[0], model.supplies[1]) if model.supplies else None
    return Mounting(cards, model.text, supplies, model.bias("the op-amp", "p_d", "n_d", "out_d"))


def _source(name: str, kind: Kind, node_a: str, node_b: str, value: float, dc: float = 0.0) -> Element:
    return Element(f"{kind}{name}", kind, (node_a, node_b), np.full(1, value), dc)


def _copy(
    mounting: Mounting, plus: float, minus: float, current: float, ripple: tuple[float, float]
) -> list[Card]:
    middle = sum(mounting.supplies) / 2 if mounting.supplies else 0.0
    cards: list[Card] = [
        _source("gp", "V", "gp", GROUND, plus, middle),
        _source("gn", "V", "gn", GROUND, minus),
        _source("sp", "V", "gp", "p", 0.0),
        _source("sn", "V", "nn", "n", 0.0),
        _source("loop", "L", "out", "nn", LOOP_HENRY),
        _source("loop", "C", "nn", "gn", LOOP_FARAD),
    ]
    if current:
        cards.append(_source("o", "I", "out", GROUND, current))
    if mounting.supplies:
        for node, volts, swing in zip(("vcc", "vee"), mounting.supplies, ripple, strict=True):
            cards.append(_source(node, "V", node, GROUND, swing, volts))
    return cards + mounting.cards("p", "n", "out", "vcc", "vee")


def gain_netlist(mounting: Mounting) -> str:
    """Write a netlist that measures an op-amp's gains only, at `modepair.circuits.deck.GAIN_NODES`."""
    copies = {suffix: _copy(mounting, *DRIVES[suffix], 0.0, (0.0, 0.0)) for suffix in "dc"}
    return str(
        circuit(
            copies,
            saved=[f"v({node})" for node in GAIN_NODES],
            models=mounting.models,
            nonlinear=bool(mounting.models),
        )
    )


def bench_netlist(mounting: Mounting) -> tuple[str, tuple[str, ...]]:
    """Write the bench's netlist for one op-amp.

    Parameters
    ----------
    mounting : Mounting
        The op-amp.

    Returns
    -------
    text : str
        SPICE text without analyses and without `.end`. The pins of the op-amp are the nodes p, n and out,
        with the suffix of the copy.
    vectors : tuple of str
        What to read of a solve.
    """
    copies = {
        suffix: _copy(mounting, plus, minus, 1.0 if suffix == "o" else 0.0, (0.0, 0.0))
        for suffix, (plus, minus) in DRIVES.items()
    }
    vectors: tuple[str, ...] = BENCH_VECTORS
    if mounting.supplies:
        copies |= {suffix: _copy(mounting, 0.0, 0.0, 0.0, ripple) for suffix, ripple in SUPPLY_DRIVES.items()}
        vectors += SUPPLY_VECTORS
    saved = [
        f"i({name.removesuffix('#branch')})" if name.endswith("#branch") else f"v({name})" for name in vectors
    ]
    saved += ["v(p_d)", "v(n_d)"] if mounting.models else []
    return str(circuit(copies, saved=saved, models=mounting.models, nonlinear=bool(mounting.models))), vectors
