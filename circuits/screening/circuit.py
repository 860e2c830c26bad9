"""One subcircuit of a file as a circuit of its own: its parts, its op-amps' places, and what else it holds."""

from __future__ import annotations

from dataclasses import dataclass

from modepair.circuits.screening.elaboration import Elaboration
from modepair.circuits.screening.frames import Frame
from modepair.circuits.screening.inside import Inside
from modepair.circuits.screening.passives import Coupling, Passive
from modepair.circuits.screening.places import CardError, Findings, KnownError, Place
from modepair.circuits.screening.scopes import Instance, Scope, Subcircuit
from modepair.sweeps.faults import shown
from modepair.sweeps.words import listed, suggestion

__all__ = ["CircuitElaboration", "OpampPlace", "PlacedPart", "Remainder"]

PLACE_NODES = (3, 5)
"""Nodes of an op-amp's place: plus, minus, output; or plus, minus, both supplies, output."""

_LINEAR = "rclkvix"
_CONTROLLED = "efgh"


@dataclass(frozen=True)
class PlacedPart:
    """A resistor, capacitor or inductor of the subcircuit itself.

    Attributes
    ----------
    name : str
        As written, in lower case.
    nodes : tuple of str
        Its nodes, in canonical text.
    value : float
        Ohm, farad or henry, above zero.
    place : Place
        Where it stands.
    """

    name: str
    nodes: tuple[str, ...]
    value: float
    place: Place


@dataclass(frozen=True)
class OpampPlace:
    """An instance of a subcircuit that the file does not define: a place for an op-amp.

    Attributes
    ----------
    name : str
        As written, in lower case, without the X.
    nodes : tuple of str
        Plus, minus and output; or plus, minus, positive supply, negative supply and output.
    place : Place
        Where it stands.
    """

    name: str
    nodes: tuple[str, ...]
    place: Place


@dataclass(frozen=True)
class Remainder:
    """What else the subcircuit holds, as a subcircuit of canonical text.

    Attributes
    ----------
    name : str
        Its name in `text`.
    nodes : tuple of str
        The nodes that it needs of the circuit: its ports.
    text : str
        Its definition, and those of the models and subcircuits in it.
    linear : bool
        Whether it is the same at any operating point.
    """

    name: str
    nodes: tuple[str, ...]
    text: str
    linear: bool


class CircuitElaboration(Elaboration):
    """Takes one subcircuit of a file apart.

    Parameters
    ----------
    top : Scope
        The file's definitions.
    findings : Findings
        Gets the faults.
    prefix : str
        Put before the name of every subcircuit and model.
    name : str
        The subcircuit, in lower case.

    Attributes
    ----------
    port_names, port_nodes : tuple of str
        Its ports as the file names them, and in canonical text.
    parts : list of PlacedPart
        In file order.
    places : list of OpampPlace
        In file order.
    remainder : Remainder or None
        What else it holds.
    """

    def __init__(self, top: Scope, findings: Findings, prefix: str, name: str) -> None:
        super().__init__(top, findings, prefix)
        self.name = name
        self.port_names: tuple[str, ...] = ()
        self.port_nodes: tuple[str, ...] = ()
        self.parts: list[PlacedPart] = []
        self.places: list[OpampPlace] = []
        self.remainder: Remainder | None = None

    def run(self) -> None:
        """Take the subcircuit apart; that there is none is a fault without a place."""
        self._check_parameters()
        subcircuit = self.top.subcircuits.get(self.name)
        if subcircuit is None:
            if self.findings.faults:
                return
            offered = list(self.top.subcircuits)
            near = suggestion(self.name, offered) or f"; it has {listed(offered) or 'none'}"
            message = f"there is no subcircuit {shown(self.name)} in the file{near}"
            self.findings.refuse(CardError(Place(""), message), "subcircuit")
            return
        frame = Frame(
            self._top_frame, subcircuit.parameters, subcircuit.functions, frozenset(subcircuit.spoilt)
        )
        self._frames.append(frame)
        self._active.append(subcircuit)
        try:
            self._take_apart(subcircuit, frame)
        except CardError as refused:
            self.findings.refuse(refused, subcircuit.name)
        except KnownError:
            pass

    def _take_apart(self, subcircuit: Subcircuit, frame: Frame) -> None:
        place = subcircuit.card.place()
        self.folder.charge(place, len(subcircuit.elements))
        for name in subcircuit.parameters:
            self.folder.parameter(name, frame)
        elements = list(subcircuit.elements.values())
        inside = Inside(subcircuit, elements, frame, self.folder, self._model(subcircuit))
        self.port_names = subcircuit.ports
        self.port_nodes = tuple(inside.node(port, place) for port in subcircuit.ports)
        coupled = {name for one in elements if isinstance(one, Coupling) for name in one.inductors}
        rest, lines, count = [], list[str](), 0
        for element in elements:
            try:
                if isinstance(element, Passive) and element.name not in coupled:
                    self.parts.append(self._part(element, inside))
                elif isinstance(element, Instance) and not self._defined(element, subcircuit):
                    self.places.append(_opamp_place(element, inside))
                else:
                    rest.append(element)
            except CardError as refused:
                self.findings.refuse(refused, element.name)
            except KnownError:
                pass
        inside.mentioned.clear()
        for element in rest:
            try:
                if isinstance(element, Instance):
                    line, inner = self._instance(element, subcircuit, inside)
                    lines.append(line)
                    count += inner.elements
                    self._check_hidden(element, subcircuit, inner)
                else:
                    written = list(element.lines(inside))
                    lines += written
                    count += len(written)
                self._check_count(element, count)
            except CardError as refused:
                self.findings.refuse(refused, element.name)
            except KnownError:
                pass
        if not (self.parts or self.places or lines) and not self.findings.faults:
            raise CardError(place, f"subcircuit {subcircuit.name} is empty; write its elements")
        nodes = tuple(inside.mentioned)
        # What is connected to nothing but ground does nothing.
        if lines and nodes:
            name = self.prefix + self._names.free(subcircuit.name)
            body = "\n".join((f".subckt {name} {' '.join(nodes)}", *lines, f".ends {name}"))
            text = "\n".join((*self.models, *self.subcircuits, body)) + "\n"
            inner_lines = [line for one in self.subcircuits for line in one.split("\n")[1:-1]]
            self.remainder = Remainder(name, nodes, text, all(map(_is_linear, (*lines, *inner_lines))))

    def _defined(self, element: Instance, subcircuit: Subcircuit) -> bool:
        """Tell whether the file defines what an instance is of, or tried to."""
        scope: Scope | None = subcircuit
        while scope is not None:
            if element.subcircuit in scope.subcircuits or element.subcircuit in scope.spoilt:
                return True
            scope = scope.parent
        return False

    def _part(self, element: Passive, inside: Inside) -> PlacedPart:
        place = element.card.place()
        value, options = element.worked_out(inside)
        if "m" in options:
            raise element.options["m"].refused(
                "m has no place in a part of the circuit; write the value of all in one"
            )
        if options:
            inside.findings.note(
                place, f"{element.name}'s temperature coefficients are left out: all is at 27 degrees"
            )
        return PlacedPart(
            element.name, tuple(inside.node(node, place) for node in element.nodes), value, place
        )


def _opamp_place(element: Instance, inside: Inside) -> OpampPlace:
    place = element.card.place()
    if len(element.nodes) not in PLACE_NODES:
        raise CardError(
            place,
            f"subcircuit {shown(element.subcircuit)} is not defined; define it or include its file, or give an "
            "op-amp's place three nodes (plus minus output) or five (plus minus vpos vneg output), not "
            f"{len(element.nodes)}",
        )
    if element.arguments:
        raise next(iter(element.arguments.values())).refused(
            "an op-amp's place takes no parameters; give them to the op-amp's candidate in the spec"
        )
    nodes = tuple(inside.node(node, place) for node in element.nodes)
    return OpampPlace(element.name[1:], nodes, place)


def _is_linear(line: str) -> bool:
    letter = line[0]
    return letter in _LINEAR or (
        letter in _CONTROLLED and not any(mark in line for mark in ("{", "=", "poly"))
    )
