"""The four stages: which part joins which nodes.

To add a stage, write a function that returns its elements, enter it in `STAGES`, and give its parts to
`modepair.sweeps.parts`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

from modepair.circuits.deck import Bias
from modepair.circuits.elements import GROUND, Card, Parts, between
from modepair.circuits.imported import ImportedModel
from modepair.circuits.opamps import opamp_elements

__all__ = ["OUTPUT", "STAGES", "stage_cards"]

OUTPUT = "out"
"""Node of every stage's output."""

Amplifier = Callable[[str, str, str, str], list[Card]]
"""Puts an op-amp, by its instance's name, between its nodes: plus, minus, output."""


def _subtractor(
    parts: Parts, opamp: Amplifier, name: str, plus: str, minus: str, reference: str
) -> list[Card]:
    """Difference stage: R1 and R2 on the minus side, R3 and R4 on the plus side."""
    return [
        *between(parts, "R1", minus, "n1"),
        *between(parts, "R2", "n1", OUTPUT),
        *between(parts, "C2", "n1", OUTPUT),
        *between(parts, "R3", plus, "p1"),
        *between(parts, "R4", "p1", reference),
        *between(parts, "C4", "p1", reference),
        *opamp(name, "p1", "n1", OUTPUT),
    ]


def _difference(parts: Parts, opamp: Amplifier, plus: str, minus: str, reference: str) -> list[Card]:
    return _subtractor(parts, opamp, "A1", plus, minus, reference)


def _buffered_difference(parts: Parts, opamp: Amplifier, plus: str, minus: str, reference: str) -> list[Card]:
    return [
        *opamp("A1", plus, "o1", "o1"),
        *opamp("A2", minus, "o2", "o2"),
        *_subtractor(parts, opamp, "A3", "o1", "o2", reference),
    ]


def _three_opamp(parts: Parts, opamp: Amplifier, plus: str, minus: str, reference: str) -> list[Card]:
    return [
        *opamp("A1", plus, "s1", "o1"),
        *opamp("A2", minus, "s2", "o2"),
        *between(parts, "RF1", "o1", "s1"),
        *between(parts, "CF1", "o1", "s1"),
        *between(parts, "RF2", "o2", "s2"),
        *between(parts, "CF2", "o2", "s2"),
        *between(parts, "RG", "s1", "s2"),
        *_subtractor(parts, opamp, "A3", "o1", "o2", reference),
    ]


def _two_opamp(parts: Parts, opamp: Amplifier, plus: str, minus: str, reference: str) -> list[Card]:
    return [
        *opamp("A1", minus, "s1", "o1"),
        *between(parts, "R1", reference, "s1"),
        *between(parts, "R2", "s1", "o1"),
        *between(parts, "C2", "s1", "o1"),
        *between(parts, "R3", "o1", "s2"),
        *between(parts, "R4", "s2", OUTPUT),
        *between(parts, "C4", "s2", OUTPUT),
        *between(parts, "RG", "s1", "s2"),
        *opamp("A2", plus, "s2", OUTPUT),
    ]


STAGES: dict[str, Callable[[Parts, Amplifier, str, str, str], list[Card]]] = {
    "difference": _difference,
    "buffered-difference": _buffered_difference,
    "three-opamp": _three_opamp,
    "two-opamp": _two_opamp,
}


def stage_cards(
    topology: str, parts: Parts, plus: str, minus: str, models: Mapping[str, ImportedModel] = {}
) -> tuple[list[Card], list[Bias]]:
    """Cards of a stage with its reference resistance and its load.

    Parameters
    ----------
    topology : str
        A key of `STAGES`.
    parts : mapping of str to ndarray, shape (n,)
        Part values in SI units, op-amp parameters as "A1.gain_bandwidth".
    plus, minus : str
        The nodes of its inputs.
    models : mapping of str to ImportedModel
        Imported models by instance, in place of a macromodel.

    Returns
    -------
    cards : list of Element or Instance
        The output is at `OUTPUT`.
    biases : list of Bias
        What is to be checked of the operating point.

    Raises
    ------
    ValueError
        If the topology is not known.
    """
    if topology not in STAGES:
        raise ValueError(f"topology must be one of {', '.join(STAGES)}, not {topology!r}")
    reference = "ref" if "RREF" in parts else GROUND
    biases: list[Bias] = []

    def opamp(name: str, plus: str, minus: str, out: str) -> list[Card]:
        if name not in models:
            return list(opamp_elements(name, plus, minus, out, parts))
        biases.append(models[name].bias(name, plus, minus, out))
        return [models[name].instance(name, plus, minus, out)]

    cards = [
        *STAGES[topology](parts, opamp, plus, minus, reference),
        *between(parts, "RREF", reference, GROUND),
        *between(parts, "RL", OUTPUT, GROUND),
    ]
    return cards, biases
