"""Scopes: what is defined in a file, or in a subcircuit of it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from modepair.circuits.screening.frames import Function
from modepair.circuits.screening.inside import Element
from modepair.circuits.screening.models import Model
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.places import CardError, Place
from modepair.circuits.screening.source import Card
from modepair.sweeps.faults import shown

__all__ = ["Instance", "Scope", "Subcircuit"]


@dataclass(frozen=True)
class Instance:
    """An X element."""

    card: Card
    name: str
    nodes: tuple[str, ...]
    subcircuit: str
    arguments: dict[str, Expression]

    def lines(self, inside: object) -> Iterable[str]:
        """Yield nothing; `elaboration` writes instances."""
        return ()


@dataclass(eq=False)
class Scope:
    """What is defined in one place: the file, or a subcircuit.

    Attributes
    ----------
    parent : Scope or None
        The scope around it.
    parameters, functions, models, subcircuits : dict
        By name.
    elements : dict of str to Element
        By name.
    spoilt : set of str
        Names of what was refused, so that their use is not refused again.
    """

    parent: Scope | None = None
    parameters: dict[str, Expression] = field(default_factory=dict)
    functions: dict[str, Function] = field(default_factory=dict)
    models: dict[str, Model] = field(default_factory=dict)
    subcircuits: dict[str, Subcircuit] = field(default_factory=dict)
    elements: dict[str, Element] = field(default_factory=dict)
    spoilt: set[str] = field(default_factory=set)
    places: dict[tuple[str, str], Place] = field(default_factory=dict)

    def claim(self, kind: str, name: str, card: Card) -> None:
        """Take a name for a definition.

        Raises
        ------
        CardError
            When the scope has that name already, with the place of the first one.
        """
        first = self.places.setdefault((kind, name), card.place())
        if first != card.place():
            raise CardError(
                card.place(),
                f"{kind} {shown(name)} is defined at {first} already; programs take the first or the "
                f"last; keep one",
            )


@dataclass(eq=False)
class Subcircuit(Scope):
    """A ``.subckt`` and what stands in it.

    Attributes
    ----------
    name : str
        Its name.
    ports : tuple of str
        Its ports.
    defaults : tuple of str
        Names of the parameters that an instance may set.
    card : Card
        Its first card.
    faulty : bool
        Whether a card in it was refused.
    """

    name: str = ""
    ports: tuple[str, ...] = ()
    defaults: tuple[str, ...] = ()
    card: Card = field(default_factory=lambda: Card("", "", ()))
    faulty: bool = False
