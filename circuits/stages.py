"""The four stages: which part joins which nodes.

To add a stage, write a function that returns its elements, enter it in `STAGES`, and give its parts to
`modepair.sweeps.parts`.
"""

from __future__ import annotations

from collections.abc import Callable

from modepair.circuits.elements import GROUND, Element, Parts, between
from modepair.circuits.opamps import opamp_elements

__all__ = ["OUTPUT", "STAGES", "stage_elements"]

OUTPUT = "out"
"""Node of every stage's output."""


def _subtractor(parts: Parts, plus: str, minus: str, reference: str, opamp: str) -> list[Element]:
    """Difference stage: R1 and R2 on the minus side, R3 and R4 on the plus side."""
    return [
        *between(parts, "R1", minus, "n1"),
        *between(parts, "R2", "n1", OUTPUT),
        *between(parts, "C2", "n1", OUTPUT),
        *between(parts, "R3", plus, "p1"),
        *between(parts, "R4", "p1", reference),
        *between(parts, "C4", "p1", reference),
        *opamp_elements(opamp, "p1", "n1", OUTPUT, parts),
    ]


def _difference(parts: Parts, plus: str, minus: str, reference: str) -> list[Element]:
    return _subtractor(parts, plus, minus, reference, "A1")


def _buffered_difference(parts: Parts, plus: str, minus: str, reference: str) -> list[Element]:
    return [
        *opamp_elements("A1", plus, "o1", "o1", parts),
        *opamp_elements("A2", minus, "o2", "o2", parts),
        *_subtractor(parts, "o1", "o2", reference, "A3"),
    ]


def _three_opamp(parts: Parts, plus: str, minus: str, reference: str) -> list[Element]:
    return [
        *opamp_elements("A1", plus, "s1", "o1", parts),
        *opamp_elements("A2", minus, "s2", "o2", parts),
        *between(parts, "RF1", "o1", "s1"),
        *between(parts, "CF1", "o1", "s1"),
        *between(parts, "RF2", "o2", "s2"),
        *between(parts, "CF2", "o2", "s2"),
        *between(parts, "RG", "s1", "s2"),
        *_subtractor(parts, "o1", "o2", reference, "A3"),
    ]


def _two_opamp(parts: Parts, plus: str, minus: str, reference: str) -> list[Element]:
    return [
        *opamp_elements("A1", minus, "s1", "o1", parts),
        *between(parts, "R1", reference, "s1"),
        *between(parts, "R2", "s1", "o1"),
        *between(parts, "C2", "s1", "o1"),
        *between(parts, "R3", "o1", "s2"),
        *between(parts, "R4", "s2", OUTPUT),
        *between(parts, "C4", "s2", OUTPUT),
        *between(parts, "RG", "s1", "s2"),
        *opamp_elements("A2", plus, "s2", OUTPUT, parts),
    ]


STAGES: dict[str, Callable[[Parts, str, str, str], list[Element]]] = {
    "difference": _difference,
    "buffered-difference": _buffered_difference,
    "three-opamp": _three_opamp,
    "two-opamp": _two_opamp,
}


def stage_elements(topology: str, parts: Parts, plus: str, minus: str) -> list[Element]:
    """Elements of a stage with its reference resistance and its load.

    Parameters
    ----------
    topology : str
        A key of `STAGES`.
    parts : mapping of str to ndarray, shape (n,)
        Part values in SI units, op-amp parameters as "A1.gain_bandwidth".
    plus, minus : str
        The nodes of its inputs.

    Returns
    -------
    list of Element
        The output is at `OUTPUT`.

    Raises
    ------
    ValueError
        If the topology is not known.
    """
    if topology not in STAGES:
        raise ValueError(f"topology must be one of {', '.join(STAGES)}, not {topology!r}")
    reference = "ref" if "RREF" in parts else GROUND
    return [
        *STAGES[topology](parts, plus, minus, reference),
        *between(parts, "RREF", reference, GROUND),
        *between(parts, "RL", OUTPUT, GROUND),
    ]
