"""Screening of a model file or a circuit file: what comes out is canonical text of our own, or a list of faults."""

from __future__ import annotations

import contextlib
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Literal, TypeVar

from modepair.circuits.screening.circuit import CircuitElaboration, OpampPlace, PlacedPart, Remainder
from modepair.circuits.screening.definitions import read_definitions
from modepair.circuits.screening.elaboration import Elaboration
from modepair.circuits.screening.files import Files
from modepair.circuits.screening.limits import Limits
from modepair.circuits.screening.places import (
    CardError,
    Findings,
    Place,
    TooManyFaultsError,
    TooMuchWorkError,
)
from modepair.circuits.screening.scopes import Scope
from modepair.circuits.screening.source import Card

__all__ = ["ScreenedCircuit", "ScreenedModel", "screen", "screen_circuit"]

_LIMITS = Limits()
_PSPICE = re.compile(r"\b(?:if|limit|pwrs|table) ?\(|(?<![&|])[&|](?![&|])|\b[vi]switch\b|\btc ?=")


@dataclass(frozen=True)
class ScreenedModel:
    """A model file after screening.

    Attributes
    ----------
    text : str
        Canonical SPICE text: ``.model`` cards and subcircuits, every parameter and function put in, lower
        case, numbers that are read back as the same floats. No comment, no include, no title and no ``.end``.
        Screening it again gives the same text.
    subcircuits : mapping of str to tuple of str
        The subcircuits that the file offers: name in `text` to its ports, in order, as the file names them.
    dialect : {"plain"}
        What the text asks of ngspice: nothing; it loads without ``set ngbehavior``.
    written_for : {"plain", "psa"}
        What the file itself would have asked for: ``psa`` where it uses forms of PSpice that plain ngspice
        misreads.
    rewrites : tuple of str
        What was put in other words or left out, each with file and line.
    files : tuple of Path
        Files that were read: the first one and those it includes.
    """

    text: str
    subcircuits: Mapping[str, tuple[str, ...]]
    dialect: Literal["plain"]
    written_for: Literal["plain", "psa"]
    rewrites: tuple[str, ...]
    files: tuple[Path, ...]


def screen(path: Path, root: Path, *, limits: Limits = _LIMITS, prefix: str = "") -> ScreenedModel:
    """Screen a model file.

    Nothing of the file's own text, no comment and no file name reaches `text`: every card is read by an own
    parser against an allow-list, and written anew.

    Parameters
    ----------
    path : Path
        The file.
    root : Path
        The folder it must lie in, with every file that it includes, links followed.
    limits : Limits
        How much is read.
    prefix : str
        Put before the name of every subcircuit and model, so that several files fit into one deck.

    Returns
    -------
    ScreenedModel
        The canonical text and what it offers.

    Raises
    ------
    SpecError
        With every fault found: file, line, column, what is wrong, and the remedy.
    ValueError
        When `prefix` is not made of small letters, digits and _, a letter first.
    """
    if prefix and not re.fullmatch("[a-z][a-z0-9_]*", prefix):
        raise ValueError(f"prefix must be small letters, digits and _, a letter first, not {prefix!r}")
    findings = Findings(limits)
    elaboration, files = _elaborated(path, root, findings, lambda top: Elaboration(top, findings, prefix))
    return ScreenedModel(
        text="\n".join((*elaboration.models, *elaboration.subcircuits)) + "\n",
        subcircuits=MappingProxyType(dict(elaboration.ports)),
        dialect="plain",
        written_for="psa" if findings.psa_evidence else "plain",
        rewrites=tuple(findings.notes),
        files=files,
    )


@dataclass(frozen=True)
class ScreenedCircuit:
    """One subcircuit of a file after screening, taken apart.

    Attributes
    ----------
    port_names : tuple of str
        Its ports as the file names them, in order.
    port_nodes : tuple of str
        The same in canonical text.
    parts : tuple of PlacedPart
        Its resistors, capacitors and inductors, in file order; inductors that a K couples are not among them.
    opamps : tuple of OpampPlace
        Its instances of what the file does not define.
    remainder : Remainder or None
        What else it holds.
    rewrites : tuple of str
        What was put in other words or left out, each with file and line.
    files : tuple of Path
        Files that were read: the first one and those it includes.
    """

    port_names: tuple[str, ...]
    port_nodes: tuple[str, ...]
    parts: tuple[PlacedPart, ...]
    opamps: tuple[OpampPlace, ...]
    remainder: Remainder | None
    rewrites: tuple[str, ...]
    files: tuple[Path, ...]


def screen_circuit(
    path: Path, root: Path, subcircuit: str, *, limits: Limits = _LIMITS, prefix: str = "own_"
) -> ScreenedCircuit:
    """Screen a circuit file and take one of its subcircuits apart.

    Parameters
    ----------
    path, root, limits, prefix
        As for `screen`.
    subcircuit : str
        Its name.

    Returns
    -------
    ScreenedCircuit
        As `screen`, nothing of the file's own text is in it but names and numbers that were read.

    Raises
    ------
    SpecError
        With every fault found; that there is no such subcircuit is a fault of the file as a whole.
    """
    findings = Findings(limits)
    taken, files = _elaborated(
        path, root, findings, lambda top: CircuitElaboration(top, findings, prefix, subcircuit.lower())
    )
    return ScreenedCircuit(
        taken.port_names,
        taken.port_nodes,
        tuple(taken.parts),
        tuple(taken.places),
        taken.remainder,
        tuple(findings.notes),
        files,
    )


Kind = TypeVar("Kind", bound=Elaboration)


def _elaborated(
    path: Path, root: Path, findings: Findings, make: Callable[[Scope], Kind]
) -> tuple[Kind, tuple[Path, ...]]:
    """Read a file's definitions and elaborate them; raise `SpecError` with every fault found."""
    files = Files(root, findings)
    name = files.name(Path(path))
    elaboration: Kind | None = None
    try:
        top = read_definitions(_watched(files.cards(Path(path)), findings), findings)
        elaboration = make(top)
        elaboration.run()
    except TooManyFaultsError:
        pass
    except TooMuchWorkError as stopped:
        with contextlib.suppress(TooManyFaultsError):
            findings.refuse(CardError(stopped.place, str(stopped)))
    except CardError as refused:
        place = refused.place if refused.place.file else Place(name)
        with contextlib.suppress(TooManyFaultsError):
            findings.refuse(CardError(place, refused.message))
    if findings.faults or elaboration is None:
        raise findings.error()
    return elaboration, tuple(files.paths)


def _watched(cards: Iterator[Card], findings: Findings) -> Iterator[Card]:
    """Pass cards on; all of them are seen for their dialect before expressions are worked out."""
    for card in cards:
        if findings.psa_evidence is None and (match := _PSPICE.search(card.text)):
            findings.psa_evidence = card.place(match.start())
        yield card
