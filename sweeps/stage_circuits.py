"""Own circuits: a stage that is a subcircuit in a SPICE file, as far as a spec has to know it."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from modepair.sweeps.document import Document, Node
from modepair.sweeps.faults import Fault, RefusedError, shown
from modepair.sweeps.imported import ONCE, SUPPLY_PINS, supply_faults
from modepair.sweeps.words import Choice, listed

__all__ = [
    "CIRCUIT_KEYS",
    "INSTANCE_NAME",
    "NETLIST",
    "PART_NAME",
    "PORT",
    "ReadCircuit",
    "StageCircuit",
    "circuit_faults",
    "read_ports",
    "unread",
]

NETLIST = "netlist"
"""The topology of an own circuit."""

CIRCUIT_KEYS = ("file", "subcircuit", "ports", "supplies")
"""Keys of the stage that are about its own circuit."""

PART_NAME = re.compile("[RCL][A-Z0-9_]{1,31}")
"""Name of a part of an own circuit."""

INSTANCE_NAME = re.compile("[A-Z][A-Z0-9_]{0,31}")
"""Name of an op-amp's place in an own circuit."""

PORTS = (*ONCE, "reference", *SUPPLY_PINS, "ground", "open")

PORT = Choice("anything that a port can be", PORTS)
"""What a port of an own circuit is."""

_MISSING = {
    "file": "it takes a circuit file in the spec's folder or below it, such as circuits/mine.cir",
    "subcircuit": "it takes the name of a subcircuit of the file",
    "ports": "it takes what each port of the subcircuit is, in order, such as [plus, minus, reference, output]",
}


@dataclass(frozen=True)
class StageCircuit:
    """An own circuit as it was read from its file.

    Parameters
    ----------
    file
        Its file's name, as the spec gives it.
    subcircuit
        Its name in the file, in lower case.
    ports
        Names of its ports, in order.
    loose
        Those of them that are connected to nothing in it.
    opamps
        Its op-amps' instances, in file order.
    values
        Its parts in file order, each with its value in ohm, farad or henry.
    digest
        SHA-256 of what was read, in hexadecimal: the same for files that differ in comments only.
    """

    file: str
    subcircuit: str
    ports: tuple[str, ...]
    loose: tuple[str, ...]
    opamps: tuple[str, ...]
    values: tuple[tuple[str, float], ...]
    digest: str


ReadCircuit = Callable[[Path, str, str], StageCircuit]
"""Reads an own circuit, given the spec's folder, the file's name as the spec gives it, and the subcircuit's name.

Raises `SpecError`; a fault without a line is about the key of the stage that it names.
"""


def circuit_faults(
    document: Document, used: Sequence[str], circuit: StageCircuit | None, axes: Mapping[str, Node]
) -> Iterator[Fault]:
    """Yield what is missing in the keys of the stage's own circuit, or at odds.

    Parameters
    ----------
    document
        The spec as read.
    used
        Names of the topologies in use, as written.
    circuit
        The circuit; None where it could not be read.
    axes
        The axes by path.
    """
    stage = document.node(("stage",))
    entries = (stage.entries or {}) if stage else {}
    if NETLIST not in used:
        for key in CIRCUIT_KEYS if used else ():
            if key in entries:
                message = f"{key} has no effect without topology {NETLIST}; give that topology, or remove it"
                yield document.fault(("stage", key), message, at_key=True)
        return
    for key, takes in _MISSING.items():
        if key not in entries:
            yield document.fault(("stage",), f"{key} is missing; {takes}", at_key=True)
    words: list[str] = []
    if "ports" in entries and entries["ports"].items is not None:
        words = [(item.text or "").strip() for item in entries["ports"].items]
        yield from _port_faults(document, words, circuit)
    wanted = [word for word in SUPPLY_PINS if word in words]
    if wanted and "supplies" not in entries:
        message = f"supplies is missing, which port {listed(wanted)} needs; it takes two voltages, such as [15, -15]"
        yield document.fault(("stage",), message, at_key=True)
    if "supplies" in entries:
        if words and not wanted:
            message = f"supplies has no effect, as no port is {' or '.join(SUPPLY_PINS)}; remove it, or name the port"
            yield document.fault(("stage", "supplies"), message, at_key=True)
        else:
            yield from supply_faults(document, ("stage", "supplies"), entries["supplies"])
    if set(used) != {NETLIST}:
        return
    for path, wrong, why in (
        (
            "stage.gain",
            True,
            "gain sets no part of an own circuit; remove it, and give its parts their values",
        ),
        (
            "stage.reference_resistance",
            bool(words) and "reference" not in words,
            "reference_resistance has no effect, as no port is reference; remove it, or name the port",
        ),
    ):
        if wrong and (path in axes or document.has(tuple(path.split(".")))):
            place = ("vary", path) if path in axes else tuple(path.split("."))
            yield document.fault(place, why, at_key=True)


def _port_faults(document: Document, words: Sequence[str], circuit: StageCircuit | None) -> Iterator[Fault]:
    for word in ONCE:
        count = words.count(word)
        if count != 1:
            what = f"{word} is not among them" if not count else f"{word} is there {count} times"
            yield document.fault(("stage", "ports"), f"{what}; ports takes each of {listed(ONCE)} once")
    if circuit is not None and len(words) != len(circuit.ports):
        number = f"{len(words)} port{' is' if len(words) == 1 else 's are'} given"
        message = (
            f"{number}, {circuit.subcircuit} has {len(circuit.ports)}: {', '.join(circuit.ports)}; "
            "say of each, in this order, what it is"
        )
        yield document.fault(("stage", "ports"), message)
        return
    for index, (word, port) in enumerate(zip(words, circuit.ports if circuit else (), strict=False)):
        if word in ONCE and circuit is not None and port in circuit.loose:
            nothing = f"{port} is connected to nothing in {circuit.subcircuit}"
            message = f"{nothing}, so it cannot be {word}; correct the file, or name another port"
            yield document.fault(("stage", "ports", index), message)


def read_ports(document: Document) -> tuple[str, ...]:
    """Return what the spec says its circuit's ports are; what cannot be read is left out."""
    node = document.node(("stage", "ports"))
    found = []
    for item in (node.items or []) if node else []:
        try:
            found.append(PORT.parse(item.raw))
        except RefusedError:
            continue
    return tuple(found)


def unread(circuit: str) -> str:
    """Word that nobody was given to read an own circuit."""
    return f"{shown(circuit)} cannot be read here: load_spec was given nothing that reads circuit files (read_circuit)"
