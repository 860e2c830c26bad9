"""The source network: two generators, each behind its own leg, up to the stage's inputs."""

from __future__ import annotations

from modepair.circuits.elements import GROUND, Element, Parts, between

__all__ = ["GENERATORS", "source_elements"]

GENERATORS = ("genp", "genn")
"""Nodes of the generators of the plus and the minus leg."""


def source_elements(parts: Parts, imbalanced_leg: str) -> tuple[list[Element], str, str]:
    """Connect the generators to the stage's inputs.

    Each leg runs: generator, source resistance, imbalance with its capacitor, cable capacitance, filter
    resistance, filter capacitance, bias resistance, stage input. A series part that is not there is a wire.

    Parameters
    ----------
    parts : mapping of str to ndarray, shape (n,)
        Part values; RI, if there, is positive.
    imbalanced_leg : {"P", "N"}
        The leg that carries RI and CI.

    Returns
    -------
    elements : list of Element
        Resistors and capacitors.
    plus, minus : str
        The nodes where the stage's inputs go; the generator's own where a leg has no series part.
    """
    elements: list[Element] = []
    cable_ends, inputs = [], []
    for leg, generator in zip("PN", GENERATORS, strict=True):
        here = generator
        for name in (f"RS{leg}", "RI" if leg == imbalanced_leg else ""):
            there = _behind(parts, name, here)
            elements += between(parts, name, here, there)
            if name == "RI" and there != here:
                elements += between(parts, "CI", here, there)
            here = there
        cable_ends.append(here)
        elements += between(parts, f"CC{leg}", here, GROUND)
        there = _behind(parts, f"RF{leg}", here)
        elements += between(parts, f"RF{leg}", here, there)
        inputs.append(there)
        elements += between(parts, f"CF{leg}", there, GROUND)
        elements += between(parts, f"RB{leg}", there, GROUND)
    elements += between(parts, "CCB", *cable_ends)
    elements += between(parts, "CFB", *inputs)
    return elements, inputs[0], inputs[1]


def _behind(parts: Parts, name: str, here: str) -> str:
    """Node behind a series part that starts at `here`."""
    return f"behind_{name.lower()}" if name in parts else here
