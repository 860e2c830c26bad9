"""Own circuits: a subcircuit of a SPICE file as a stage, its parts and op-amps in the place of the built-in ones."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import numpy as np

from modepair.circuits.elements import GROUND, Card, Instance, Parts, between
from modepair.circuits.imported import supply_node
from modepair.circuits.opamps import opamp_elements
from modepair.circuits.screening import OpampPlace, PlacedPart, Remainder, ScreenedCircuit, screen_circuit
from modepair.circuits.screening.places import Place
from modepair.sweeps import OPAMP_PARAMETERS, PARTS, Fault, Spec, SpecError, StageCircuit
from modepair.sweeps.faults import LONGEST_PATH, shown
from modepair.sweeps.parts import kind_of
from modepair.sweeps.quantities import render
from modepair.sweeps.stage_circuits import INSTANCE_NAME, PART_NAME

__all__ = ["Amplifier", "OwnCircuit", "OwnStage", "own_stage", "read_circuit"]

MOST_PARTS = 500
"""Parts and op-amps of an own circuit: what a stage never has, and a table can hold."""

TAKEN = {"RREF": "the resistance at the reference", "RL": "the load"}
"""Names in the stage's section that belong to what is outside the circuit."""

REMAINDER = "_rest"
"""Name of the remainder's instance; an op-amp's begins with a letter."""


class Amplifier(Protocol):
    """Puts an op-amp, by its instance's name, between its nodes."""

    def __call__(
        self, name: str, plus: str, minus: str, out: str, positive: str = "", negative: str = ""
    ) -> list[Card]:
        """Return its cards; supplies are given where the circuit has nodes for them."""


@dataclass(frozen=True)
class OwnCircuit(StageCircuit):
    """An own circuit with what a netlist needs of it.

    Attributes
    ----------
    port_nodes : tuple of str
        The nodes of its ports.
    part_nodes : tuple of tuple of str
        The two nodes of each part, in the order of `values`.
    opamp_nodes : tuple of tuple of str
        The nodes of each op-amp, in the order of `opamps`: plus, minus, output; or plus, minus, positive supply,
        negative supply, output.
    remainder : Remainder or None
        What else it holds.
    """

    port_nodes: tuple[str, ...]
    part_nodes: tuple[tuple[str, ...], ...]
    opamp_nodes: tuple[tuple[str, ...], ...]
    remainder: Remainder | None


@dataclass(frozen=True)
class OwnStage:
    """An own circuit in its place.

    Attributes
    ----------
    circuit : OwnCircuit
        The circuit.
    ports : tuple of str
        What each of its ports is: words of `modepair.sweeps.stage_circuits.PORT`.
    supply_volts : tuple of float
        Positive and negative supply in volts; empty where no port is one.
    """

    circuit: OwnCircuit
    ports: tuple[str, ...]
    supply_volts: tuple[float, ...]

    @property
    def nonlinear(self) -> bool:
        """Whether it has an operating point, whatever its op-amps are."""
        return self.circuit.remainder is not None and not self.circuit.remainder.linear

    @property
    def text(self) -> str:
        """Definition of the subcircuit that its cards name; empty if none."""
        return self.circuit.remainder.text if self.circuit.remainder else ""

    @property
    def supplies(self) -> dict[str, float]:
        """Its supply nodes and their voltages."""
        return {supply_node(volts): volts for volts in self.supply_volts}

    def _nodes(self, plus: str, minus: str, reference: str, out: str) -> Callable[[str], str]:
        given = {"plus": plus, "minus": minus, "output": out, "reference": reference, "ground": GROUND}
        given |= dict(zip(("positive_supply", "negative_supply"), self.supplies, strict=False))
        outer = {
            node: given[word]
            for node, word in zip(self.circuit.port_nodes, self.ports, strict=True)
            if word in given
        }
        # No other node of a deck ends so, so the circuit's own names stay clear of all others.
        return lambda node: GROUND if node == GROUND else outer.get(node, f"{node}_n")

    def rails(self, instance: str) -> tuple[float, ...] | None:
        """Supplies of an op-amp's place.

        Parameters
        ----------
        instance : str
            The op-amp.

        Returns
        -------
        tuple of float or None
            Positive and negative supply in volts; empty where they are not ports of the circuit, so that nothing is
            known of them; None where the place has no supply nodes.
        """
        nodes = self.circuit.opamp_nodes[self.circuit.opamps.index(instance)]
        if len(nodes) == 3:
            return None
        node_of = self._nodes("", "", "", "")
        volts = {**self.supplies, GROUND: 0.0}
        found = [volts[node] for node in map(node_of, nodes[2:4]) if node in volts]
        return tuple(found) if len(found) == 2 else ()

    def cards(
        self, parts: Parts, opamp: Amplifier, plus: str, minus: str, reference: str, out: str
    ) -> list[Card]:
        """Cards of the circuit.

        Parameters
        ----------
        parts : mapping of str to ndarray, shape (n,)
            Part values in SI units.
        opamp : Amplifier
            Puts op-amps in their places.
        plus, minus, reference, out : str
            The nodes outside it.

        Returns
        -------
        list of Element or Instance
            Its parts in file order, its op-amps, and what else it holds.
        """
        node_of = self._nodes(plus, minus, reference, out)
        circuit = self.circuit
        cards: list[Card] = []
        for (name, _), (a, b) in zip(circuit.values, circuit.part_nodes, strict=True):
            cards += between(parts, name, node_of(a), node_of(b))
        for instance, nodes in zip(circuit.opamps, circuit.opamp_nodes, strict=True):
            positive, negative, *supplies, output = map(node_of, nodes)
            cards += opamp(instance, positive, negative, output, *supplies)
        if circuit.remainder:
            cards.append(
                Instance(REMAINDER, tuple(map(node_of, circuit.remainder.nodes)), circuit.remainder.name)
            )
        return cards


def own_stage(spec: Spec) -> OwnStage:
    """Put a spec's own circuit in its place.

    Parameters
    ----------
    spec : Spec
        A spec that has one, as it was read from its files.

    Returns
    -------
    OwnStage

    Raises
    ------
    ValueError
        If the spec was restored without the circuit's file, so that there is nothing to solve.
    """
    if not isinstance(spec.circuit, OwnCircuit):
        raise ValueError("the spec must be read with read_circuit, to have a circuit that can be solved")
    return OwnStage(spec.circuit, spec.stage.ports or (), spec.stage.supplies or ())


def read_circuit(folder: Path, file: str, subcircuit: str) -> OwnCircuit:
    """Read an own circuit.

    Parameters
    ----------
    folder : Path
        The spec's folder.
    file : str
        The file's name, as the spec gives it.
    subcircuit : str
        The subcircuit's name.

    Returns
    -------
    OwnCircuit
        Screened: nothing of the file's own text is in it but names and numbers that were read.

    Raises
    ------
    SpecError
        With every fault of the file. A fault without a line is about the key of the stage that it names.
    """
    path = folder / file
    if "\0" in file or not path.is_file():
        message = f"{shown(file)} is no file that can be read (looked for {shown(str(path), LONGEST_PATH)})"
        raise SpecError([Fault("", 0, 0, "file", message)])
    screened = screen_circuit(path, folder, subcircuit)
    faults = list(_faults(screened))
    if faults:
        raise SpecError(sorted(faults, key=lambda fault: (fault.file, fault.line, fault.column)))
    values = tuple((part.name.upper(), part.value) for part in screened.parts)
    part_nodes = tuple(part.nodes for part in screened.parts)
    opamps = tuple(place.name.upper() for place in screened.opamps)
    opamp_nodes = tuple(place.nodes for place in screened.opamps)
    joined = {node for nodes in (*part_nodes, *opamp_nodes) for node in nodes}
    joined |= set(screened.remainder.nodes) if screened.remainder else set()
    ports = zip(screened.port_names, screened.port_nodes, strict=True)
    content = (screened.port_nodes, values, part_nodes, opamps, opamp_nodes, screened.remainder)
    return OwnCircuit(
        file=file,
        subcircuit=subcircuit.lower(),
        ports=screened.port_names,
        loose=tuple(name for name, node in ports if node not in joined),
        opamps=opamps,
        values=values,
        digest=hashlib.sha256(repr(content).encode()).hexdigest(),
        port_nodes=screened.port_nodes,
        part_nodes=part_nodes,
        opamp_nodes=opamp_nodes,
        remainder=screened.remainder,
    )


def _faults(screened: ScreenedCircuit) -> Iterator[Fault]:
    """Yield what makes a circuit's names or values unfit for a spec."""
    inner: dict[str, str] = {}
    for place in screened.opamps:
        names = _inner_names(place.name.upper())
        other = next((inner[name] for name in sorted(names) if name in inner), "")
        if other:
            message = (
                f"x{place.name} and x{other.lower()} are op-amps whose inner elements would have the same names; "
                f"rename one of them"
            )
            yield _fault(place.place, f"x{place.name}", message)
        inner |= dict.fromkeys(names, place.name.upper())
    for part in screened.parts:
        name = part.name.upper()
        kind = kind_of(name)
        if not PART_NAME.fullmatch(name):
            yield _fault(
                part.place,
                part.name,
                f"{part.name} cannot be the name of a part in a spec; rename it, with at most 32 letters, "
                "digits and _",
            )
        elif name in PARTS and (PARTS[name].section == "source" or name in TAKEN):
            whose = TAKEN.get(name, "a part of the source network")
            yield _fault(part.place, part.name, f"{name} is the name of {whose}; rename it")
        elif name in inner:
            yield _fault(
                part.place,
                part.name,
                f"{name} is the name of an element inside op-amp {inner[name]}; rename it",
            )
        elif not kind.least <= part.value <= kind.most:
            yield _fault(
                part.place,
                part.name,
                f"{render(part.value, kind.unit)} is out of range; {name} takes {kind.limits}",
            )
    for place in screened.opamps:
        if not INSTANCE_NAME.fullmatch(place.name.upper()):
            yield _fault(
                place.place,
                f"x{place.name}",
                f"x{place.name} is an op-amp's place, whose name in a spec is what follows the X; rename it, with a "
                "letter first, then letters, digits and _, such as XA1",
            )
    things: list[PlacedPart | OpampPlace] = [*screened.parts, *screened.opamps]
    if len(things) > MOST_PARTS:
        last = things[MOST_PARTS]
        yield _fault(
            last.place,
            last.name,
            f"there are {len(things)} parts and op-amps; at most {MOST_PARTS} are taken",
        )


def _fault(place: Place, key: str, message: str) -> Fault:
    return Fault(place.file, place.line, place.column, key, message)


def _inner_names(instance: str) -> set[str]:
    """Names of the elements that an op-amp's macromodel may have, in capitals."""
    every = {name: np.ones(1) for name in OPAMP_PARAMETERS}
    found: set[str] = set()
    for left_out in ("", "output_resistance", "cmrr"):
        parts = {f"{instance}.{name}": value for name, value in every.items() if name != left_out}
        found |= {element.name.upper() for element in opamp_elements(instance, "p", "n", "o", parts)}
    return found
