"""Circuit elements with their values for many cases at once."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

__all__ = ["GROUND", "OUTPUT", "Card", "Element", "Instance", "Kind", "Parts", "Values", "between"]

Values = npt.NDArray[np.float64]
Parts = Mapping[str, Values]
Kind = Literal["R", "C", "L", "G", "E", "V", "I"]

GROUND = "0"

OUTPUT = "out"
"""Node of every stage's output."""


@dataclass(frozen=True)
class Element:
    """One linear element of a circuit, with its value in each of n cases.

    Attributes
    ----------
    name : str
        Name in the netlist; its first letter is the kind.
    kind : {"R", "C", "L", "G", "E", "V", "I"}
        Resistor, capacitor, inductor, voltage-controlled current source (current out of the second node, into
        the first, through the circuit: `nodes` are ordered so that a positive value drives the first node up),
        voltage-controlled voltage source, or independent source of a voltage or of a current out of its
        second node, into its first.
    nodes : tuple of str
        Two nodes; for G and E the output pair, then the controlling pair.
    values : ndarray, shape (n,)
        Ohm, farad, henry, siemens, volt per volt; of an independent source its AC amplitude in volt or
        ampere.
    dc : float
        DC value of an independent source, in volt.
    """

    name: str
    kind: Kind
    nodes: tuple[str, ...]
    values: Values
    dc: float = 0.0


@dataclass(frozen=True)
class Instance:
    """A subcircuit in its place; nothing of it is altered.

    Attributes
    ----------
    name : str
        Name of the instance, without the letter X.
    nodes : tuple of str
        Its nodes, in the order of the subcircuit's ports.
    subcircuit : str
        Name of the subcircuit.
    """

    name: str
    nodes: tuple[str, ...]
    subcircuit: str


Card = Element | Instance
"""What a netlist has a line for."""


def between(parts: Parts, name: str, node_a: str, node_b: str) -> list[Element]:
    """Connect the part `name` between two nodes, if the circuit has it.

    Parameters
    ----------
    parts : mapping of str to ndarray, shape (n,)
        Part values in SI units; a part that is not there has no key.
    name : str
        Part name; its first letter, R, C or L, tells what it is.
    node_a, node_b : str
        The nodes it joins.

    Returns
    -------
    list of Element
        One element, or none.
    """
    if name not in parts:
        return []
    kind: Kind = "R" if name.startswith("R") else "L" if name.startswith("L") else "C"
    return [Element(name, kind, (node_a, node_b), parts[name])]
