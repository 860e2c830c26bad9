"""The vocabulary of a spec: the stages, parts and op-amps that it may name."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property

from modepair.sweeps.parts import (
    INSTANCES,
    OPAMP_PARAMETERS,
    PARTS,
    TOPOLOGIES,
    Part,
    Topology,
    kind_of,
)
from modepair.sweeps.quantities import Kind
from modepair.sweeps.stage_circuits import NETLIST, StageCircuit

__all__ = ["BUILT_IN", "STAGES", "Vocabulary"]

STAGES = (*TOPOLOGIES, NETLIST)
"""What `stage.topology` takes."""


@dataclass(frozen=True)
class Vocabulary:
    """What a spec may name: the built-in stages with their parts, and its own circuit.

    Parameters
    ----------
    circuit
        The own circuit; None: there is none.
    ports
        What its ports are: words of `modepair.sweeps.stage_circuits.PORT`.
    """

    circuit: StageCircuit | None = None
    ports: tuple[str, ...] = ()

    @cached_property
    def own_parts(self) -> tuple[str, ...]:
        """Names of the own circuit's parts, in file order."""
        return tuple(name for name, _ in self.circuit.values) if self.circuit else ()

    @cached_property
    def topologies(self) -> Mapping[str, Topology]:
        """The stages by name."""
        if self.circuit is None:
            return TOPOLOGIES
        ends = ("RREF", "RL") if "reference" in self.ports else ("RL",)
        own = Topology(
            NETLIST, self.circuit.opamps, (), (*self.own_parts, *ends), (), values=self.circuit.values
        )
        return {**TOPOLOGIES, NETLIST: own}

    @cached_property
    def parts(self) -> Mapping[str, Part]:
        """Every passive part by name."""
        if self.circuit is None:
            return PARTS
        found = dict(PARTS)
        for name in self.topologies[NETLIST].parts:
            part = found.get(name) or Part(name, kind_of(name), "stage", ())
            found[name] = replace(part, topologies=(*part.topologies, NETLIST))
        return found

    @cached_property
    def instances(self) -> tuple[str, ...]:
        """Op-amp instances that some stage has."""
        return tuple(dict.fromkeys((*INSTANCES, *(self.circuit.opamps if self.circuit else ()))))

    @cached_property
    def stage_part_kinds(self) -> Mapping[str, Kind]:
        """What `stage.parts` takes: passive parts, and parameters of instances such as ``A1.gain_bandwidth``."""
        passive = {name: part.kind for name, part in self.parts.items() if part.section == "stage"}
        return passive | self._parameters(self.instances)

    @cached_property
    def varying(self) -> Mapping[str, Kind]:
        """Every name that can have a tolerance: first those of the built-in stages and the source, in an order that no
        circuit changes, then those that only the own circuit has.
        """
        built_in = {name: part.kind for name, part in PARTS.items()} | self._parameters(INSTANCES)
        return built_in | {name: kind for name, kind in self.stage_part_kinds.items() if name not in built_in}

    @staticmethod
    def _parameters(instances: tuple[str, ...]) -> dict[str, Kind]:
        return {
            f"{instance}.{name}": kind for instance in instances for name, kind in OPAMP_PARAMETERS.items()
        }


BUILT_IN = Vocabulary()
"""The vocabulary of a spec without an own circuit."""
