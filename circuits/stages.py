"""Stages: which part joins which nodes in the four built-in ones, and what a stage is once its op-amps are chosen.

To add a stage, write a function that returns its elements, enter it in `STAGES`, and give its parts to
`modepair.sweeps.parts`.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable
from dataclasses import dataclass, field, replace

from modepair.circuits.deck import Bias
from modepair.circuits.elements import GROUND, OUTPUT, Card, Parts, between
from modepair.circuits.imported import ImportedModel, Models, model_texts, models_of, supply_nodes
from modepair.circuits.opamps import opamp_elements
from modepair.circuits.own_circuits import Amplifier, OwnStage, own_stage
from modepair.sweeps import Block, Spec
from modepair.sweeps.stage_circuits import NETLIST

__all__ = ["STAGES", "BuiltStage", "built_stage", "stage_cards"]


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


@dataclass(frozen=True)
class BuiltStage:
    """A stage with what is in its op-amps' places: all but the values of its parts.

    Attributes
    ----------
    topology : str
        A key of `STAGES`, or the topology of an own circuit.
    models : mapping of str to ImportedModel
        Imported op-amps by instance; an instance without one has a macromodel.
    own : OwnStage or None
        The own circuit.
    """

    topology: str
    models: Models = field(default_factory=dict)
    own: OwnStage | None = None

    @property
    def key(self) -> Hashable:
        """What two stages have in common that are the same."""
        return self.topology, frozenset(self.models.items()), self.own

    @property
    def text(self) -> str:
        """Definitions of the subcircuits that its cards name."""
        return model_texts(self.models.values()) + (self.own.text if self.own else "")

    @property
    def supplies(self) -> dict[str, float]:
        """Nodes that carry supplies, and their voltages."""
        return supply_nodes(self.models.values()) | (self.own.supplies if self.own else {})

    @property
    def nonlinear(self) -> bool:
        """Whether it has an operating point."""
        return bool(self.models) or (self.own is not None and self.own.nonlinear)

    def placed(self, instance: str) -> ImportedModel:
        """Return an instance's imported op-amp, with the supplies that it has in its place where they are known."""
        model = self.models[instance]
        rails = self.own.rails(instance) if self.own else None
        return replace(model, supplies=rails) if rails and model.supplies else model


def built_stage(spec: Spec, block: Block) -> BuiltStage:
    """Build the stage of a block of cases.

    Parameters
    ----------
    spec : Spec
        The spec.
    block : Block
        Cases of it.

    Returns
    -------
    BuiltStage

    Raises
    ------
    SpecError
        If the file of an imported op-amp cannot be used.
    """
    models = models_of(block.opamps, spec.candidates)
    return BuiltStage(block.topology, models, own_stage(spec) if block.topology == NETLIST else None)


def stage_cards(stage: BuiltStage, parts: Parts, plus: str, minus: str) -> tuple[list[Card], list[Bias]]:
    """Cards of a stage with its reference resistance and its load.

    Parameters
    ----------
    stage : BuiltStage
        The stage.
    parts : mapping of str to ndarray, shape (n,)
        Part values in SI units, op-amp parameters as "A1.gain_bandwidth".
    plus, minus : str
        The nodes of its inputs.

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
    reference = "ref" if "RREF" in parts else GROUND
    biases: list[Bias] = []

    def opamp(
        name: str, plus: str, minus: str, out: str, positive: str = "", negative: str = ""
    ) -> list[Card]:
        if name not in stage.models:
            return list(opamp_elements(name, plus, minus, out, parts))
        model = stage.placed(name)
        bias = model.bias(name, plus, minus, out)
        if stage.own and stage.own.rails(name) == ():
            bias = replace(bias, supplies=())
        biases.append(bias)
        return [model.instance(name, plus, minus, out, positive, negative)]

    if stage.own:
        inside = stage.own.cards(parts, opamp, plus, minus, reference, OUTPUT)
    elif stage.topology in STAGES:
        inside = STAGES[stage.topology](parts, opamp, plus, minus, reference)
    else:
        raise ValueError(f"topology must be one of {', '.join(STAGES)}, not {stage.topology!r}")
    cards = [
        *inside,
        *between(parts, "RREF", reference, GROUND),
        *between(parts, "RL", OUTPUT, GROUND),
    ]
    return cards, biases
