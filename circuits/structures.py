"""Structures: cases with the same nodes and elements share one deck and differ in a vector of values."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from modepair.circuits.bench import gain_netlist, imported_mounting
from modepair.circuits.deck import Bias, Deck
from modepair.circuits.elements import GROUND, Card, Element, Values
from modepair.circuits.netlist import ALTERABLE, COPIES, netlist, value_model
from modepair.circuits.sources import source_elements
from modepair.circuits.stages import BuiltStage, stage_cards

__all__ = ["Structure", "structures"]

Rows = npt.NDArray[np.int64]
GivenParts = Mapping[str, float | Values]


@dataclass(frozen=True)
class Structure:
    """Cases whose circuits have the same nodes and elements.

    A part of value zero is not there: a wire in series, nothing in parallel. So which parts are zero, and
    for the imbalance its leg, decide the structure.

    Attributes
    ----------
    stage : BuiltStage
        Their stage.
    present : frozenset of str
        The parts that are there.
    imbalanced_leg : {"P", "N"}
        The leg that carries RI.
    parts : mapping of str to float or ndarray, shape (n,)
        Part values of all the cases handed in.
    rows : ndarray of int, shape (k,)
        Which of the n cases have this structure, ascending.
    """

    stage: BuiltStage
    present: frozenset[str]
    imbalanced_leg: str
    parts: GivenParts
    rows: Rows

    def _circuit(self, rows: Rows) -> tuple[tuple[Card, ...], list[Bias]]:
        here = {name: _taken(self.parts[name], rows) for name in self.parts if name in self.present}
        if "RI" in here:
            here["RI"] = np.abs(here["RI"])
        network, plus, minus = source_elements(here, self.imbalanced_leg)
        cards, biases = stage_cards(self.stage, here, plus, minus)
        return (*network, *cards), biases

    def _netlist(self, cards: Sequence[Card], biases: Iterable[Bias], *, alterable: bool = False) -> str:
        watched = list(dict.fromkeys(node for bias in biases for node in bias.nodes if node != GROUND))
        stage = self.stage
        return netlist(
            cards,
            models=stage.text,
            supplies=stage.supplies,
            nonlinear=stage.nonlinear,
            watched=watched,
            alterable=alterable,
        )

    def elements(self, rows: Rows) -> tuple[Element, ...]:
        """Elements of some of the cases, without what subcircuits hold.

        Parameters
        ----------
        rows : ndarray of int, shape (j,)
            Rows of the part values.

        Returns
        -------
        tuple of Element
            In the order of the netlist, with values of shape (j,).
        """
        return _elements(self._circuit(rows)[0])

    def values(self, rows: Rows) -> Values:
        """Element values of some of the cases: shape (j, m), a column per element of the deck."""
        elements = self.elements(rows)
        if not elements:
            # Such as a transformer between the generators and the output.
            return np.empty((len(rows), 0))
        return np.stack([element.values for element in elements], axis=1)

    def text(self, row: int) -> str:
        """Netlist of one case, without analyses."""
        return self._netlist(*self._circuit(np.array([row])))

    @property
    def key(self) -> Hashable:
        """What two structures have in common when one deck serves both."""
        return self.stage.key, self.present, self.imbalanced_leg

    def deck(self) -> Deck:
        """Write the deck, with the values of the structure's first case."""
        cards, found = self._circuit(self.rows[:1])
        elements = _elements(cards)
        references = {
            name: gain_netlist(imported_mounting(self.stage.placed(name))) for name in self.stage.models
        }
        biases = tuple(
            replace(bias.in_copies(*COPIES, self.stage.supplies), reference=references[bias.instance])
            for bias in found
        )
        return Deck(
            self._netlist(cards, found, alterable=True),
            tuple(element.name for element in elements),
            tuple(_commands(element) for element in elements),
            np.array([element.values[0] for element in elements]),
            biases,
            self.stage.nonlinear,
        )


def _elements(cards: Iterable[Card]) -> tuple[Element, ...]:
    return tuple(card for card in cards if isinstance(card, Element))


def _taken(values: float | Values, rows: Rows) -> Values:
    array = np.asarray(values, float)
    return array[rows] if array.ndim else np.full(len(rows), array)


def _commands(element: Element) -> tuple[str, ...]:
    # Of the forms that ngspice knows these are the ones it reads fastest; spaces cost time too.
    name = element.name.lower()
    if element.kind in ALTERABLE:
        return (f"altermod @{value_model(name)}[{ALTERABLE[element.kind]}]=",)
    form = "alter @{}_{}[gain]=" if element.kind in "GE" else "alter {}_{}="
    return tuple(form.format(name, copy) for copy in COPIES)


def structures(stage: BuiltStage, parts: GivenParts, count: int) -> list[Structure]:
    """Split cases by structure.

    Parameters
    ----------
    stage : BuiltStage
        Their stage, the same in all cases.
    parts : mapping of str to float or ndarray, shape (n,)
        Part values in SI units; a part that no case has needs no key.
    count : int
        Number of cases n.

    Returns
    -------
    list of Structure
        In the order of the first case of each.
    """
    names = list(parts)
    signs = np.empty((len(names), count), dtype=np.int8)
    for index, name in enumerate(names):
        values = np.asarray(parts[name], float)
        signs[index] = np.sign(values) if name == "RI" else values != 0
    patterns, first, member = np.unique(signs, axis=1, return_index=True, return_inverse=True)
    result = []
    for pattern in np.argsort(first):
        sign = dict(zip(names, patterns[:, pattern].tolist(), strict=True))
        result.append(
            Structure(
                stage,
                frozenset(name for name in names if sign[name]),
                "N" if sign.get("RI", 1) < 0 else "P",
                parts,
                np.flatnonzero(member.ravel() == pattern),
            )
        )
    return result
