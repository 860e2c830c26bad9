"""Frames: what the parameters and functions of a place in the file mean."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from modepair.circuits.screening.parsing import Expression

__all__ = ["Frame", "Function"]


@dataclass(frozen=True)
class Function:
    """A ``.func`` of the file.

    Attributes
    ----------
    arguments : tuple of str
        Names of its arguments.
    body : Expression
        What it stands for.
    """

    arguments: tuple[str, ...]
    body: Expression


@dataclass(eq=False)
class Frame:
    """The parameters and functions that an expression sees, with those of the frames around it.

    Attributes
    ----------
    parent : Frame or None
        The frame around it.
    parameters : mapping of str to Expression
        As written; worked out when asked for, in any order.
    functions : mapping of str to Function
        Functions defined here.
    spoilt : frozenset of str
        Names whose definition is already refused.
    given : dict of str to float
        Values of parameters: arguments of the instance, and what is worked out.
    outer : set of str
        Names of parameters that expressions here took from the outermost frame.
    active : list of str
        Parameters being worked out, to find those that depend on themselves.
    """

    parent: Frame | None
    parameters: Mapping[str, Expression]
    functions: Mapping[str, Function]
    spoilt: frozenset[str] = frozenset()
    given: dict[str, float] = field(default_factory=dict)
    outer: set[str] = field(default_factory=set)
    active: list[str] = field(default_factory=list)

    def defines(self, name: str) -> bool:
        """Tell whether the frame itself has the parameter."""
        return name in self.given or name in self.parameters
