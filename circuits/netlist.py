"""The netlist: two copies of a circuit in one deck, one for each drive, built with PySpice."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from PySpice.Spice.Netlist import Circuit

from modepair.circuits.elements import GROUND, Element
from modepair.circuits.sources import GENERATORS
from modepair.circuits.stages import OUTPUT

__all__ = ["COPIES", "DRIVES", "circuit", "netlist", "standalone"]

COPIES = ("c", "d")
"""Suffixes of the two copies: common-mode drive, differential drive."""

DRIVES: Mapping[str, tuple[float, float]] = {"c": (1.0, 1.0), "d": (0.5, -0.5)}
"""Amplitudes of the plus and the minus generator of each copy, in volts."""

OPTIONS = ".option noopac pivrel=0.5"
"""A linear circuit needs no operating point, so a node that floats at DC is no matter. The pivot threshold is
far above ngspice's own 0.001: of random stages, the largest error at the output against a dense solve fell from
1e-9 to 3e-11 V per volt of drive, at no cost in time."""


def _add(built: Circuit, element: Element, row: int, copy: str) -> None:
    name = f"{element.name[1:]}_{copy}"
    nodes = [node if node == GROUND else f"{node}_{copy}" for node in element.nodes]
    value = float(element.values[row])
    if element.kind == "R":
        built.R(name, *nodes, value)
    elif element.kind == "C":
        built.C(name, *nodes, value)
    elif element.kind == "G":
        # SPICE counts the current of a G element from its first to its second node, through the source.
        into, out_of, *controlling = nodes
        built.VCCS(name, out_of, into, *controlling, transconductance=value)
    else:
        built.VCVS(name, *nodes, voltage_gain=value)


def circuit(
    elements: Sequence[Element], row: int = 0, drives: Mapping[str, tuple[float, float]] = DRIVES
) -> Circuit:
    """Build the PySpice circuit of one case, a copy for each drive.

    Parameters
    ----------
    elements : sequence of Element
        The circuit between the generators and its output.
    row : int
        Which of the elements' values to take.
    drives : mapping of str to (float, float)
        Amplitudes in volts of the plus and the minus generator, by the suffix of the copy.

    Returns
    -------
    PySpice.Spice.Netlist.Circuit
        Without analyses.
    """
    built = Circuit("modepair")
    built.raw_spice = OPTIONS + "\n.save " + " ".join(f"v({OUTPUT}_{copy})" for copy in drives) + "\n"
    for copy, amplitudes in drives.items():
        for generator, amplitude in zip(GENERATORS, amplitudes, strict=True):
            node = f"{generator}_{copy}"
            built.V(node, node, GROUND, f"DC 0 AC {float(amplitude)!r}")
        for element in elements:
            _add(built, element, row, copy)
    return built


def netlist(
    elements: Sequence[Element], row: int = 0, drives: Mapping[str, tuple[float, float]] = DRIVES
) -> str:
    """Write the netlist of one case, a copy for each drive.

    Parameters
    ----------
    elements, row, drives
        As for `circuit`.

    Returns
    -------
    str
        SPICE text without analyses and without `.end`. Every number is written so that it reads back to
        the same double.
    """
    return str(circuit(elements, row, drives))


def standalone(text: str, analyses: Sequence[str], comment: str) -> str:
    """Complete a netlist to a deck that `ngspice -b` runs to the same curve.

    Parameters
    ----------
    text : str
        What `netlist` wrote.
    analyses : sequence of str
        AC analyses, such as "ac dec 20 1.0 1000000.0".
    comment : str
        One line that says which case it is; characters that could end the line are replaced.

    Returns
    -------
    str
        A deck that prints, for each analysis, the complex output of both copies and CMRR in dB.
    """
    title, _, body = text.partition("\n")
    printable = "".join(c if c.isprintable() and c.isascii() else "?" for c in comment)
    common, differential = (f"{OUTPUT}_{copy}" for copy in COPIES)
    control = [".control", "set numdgt=12", "set nopage"]
    for analysis in analyses:
        control += [f"echo {analysis}", analysis, f"let cmrr_db = db({differential}) - db({common})"]
        control += [f"print {common} {differential} cmrr_db"]
    control += ["quit", ".endc", ".end", ""]
    return "\n".join([title, f"* {printable}", body.rstrip("\n"), *control])
