"""Imported op-amps: candidates that are a subcircuit in a SPICE model file, with their pins and supplies."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, ClassVar

from modepair.sweeps.document import Document, Location, Node
from modepair.sweeps.faults import Fault, RefusedError, form_of, shown
from modepair.sweeps.quantities import VOLTAGE
from modepair.sweeps.words import listed, suggestion

if TYPE_CHECKING:
    from modepair.sweeps.spec import Spec

__all__ = [
    "CONNECTIONS",
    "MODEL_KEYS",
    "PIN",
    "SUBCIRCUIT",
    "SUPPLY",
    "imported_faults",
    "ineffective_faults",
    "supply_faults",
]

MODEL_KEYS = ("file", "subcircuit", "pins", "supplies")
"""Keys that make a candidate an imported model."""

SUPPLY = replace(VOLTAGE, most=1e4, signed=True, example="15")

ONCE = ("plus", "minus", "output")
SUPPLY_PINS = ("positive_supply", "negative_supply")

CONNECTIONS = (*ONCE, *SUPPLY_PINS, "ground", "open")
"""What a pin can be connected to."""

MOST_PINS = 40


@dataclass(frozen=True)
class _SubcircuitName:
    """The name of a subcircuit, as it stands in its file."""

    pattern: ClassVar[re.Pattern[str]] = re.compile(r"[A-Za-z0-9_.+/-]{1,64}")

    @property
    def takes(self) -> str:
        """What is taken."""
        return "the name of a subcircuit of the file: at most 64 letters, digits and _ . + / -"

    def parse(self, written: object) -> str:
        """Return the name; raise `RefusedError` for anything that is none."""
        if not isinstance(written, str):
            raise RefusedError(form_of(written), self.takes)
        text = written.strip()
        if not self.pattern.fullmatch(text):
            raise RefusedError(
                f"{shown(text)} is not a subcircuit's name" if text else "no value is given", self.takes
            )
        return text

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the name."""
        return {"type": "string", "pattern": f"^{self.pattern.pattern}$"}


@dataclass(frozen=True)
class _Pin:
    """A pin: what it is connected to, or its name with that, for those that an op-amp need not have."""

    @property
    def takes(self) -> str:
        """What is taken."""
        return f"{', '.join(CONNECTIONS[:-1])} or {CONNECTIONS[-1]}, or a name with one of them, {{shutdown: ground}}"

    def parse(self, written: object) -> str:
        """Return what the pin is connected to; raise `RefusedError` for anything else."""
        if isinstance(written, Mapping) and len(written) == 1:
            (written,) = written.values()
        if not isinstance(written, str):
            raise RefusedError(form_of(written), self.takes)
        text = written.strip()
        if text not in CONNECTIONS:
            what = f"{shown(text)} is nothing that a pin is connected to{suggestion(text, CONNECTIONS)}"
            raise RefusedError(what if text else "no value is given", self.takes)
        return text

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the pin."""
        word = {"enum": list(CONNECTIONS)}
        named = {"type": "object", "additionalProperties": word, "minProperties": 1, "maxProperties": 1}
        return {"anyOf": [word, named]}


SUBCIRCUIT = _SubcircuitName()
PIN = _Pin()


def imported_faults(document: Document, name: str, entries: Mapping[str, Node]) -> Iterator[Fault]:
    """Yield what is missing in an imported candidate, or at odds.

    Parameters
    ----------
    document
        The file that holds it.
    name
        The candidate's name.
    entries
        Its keys.
    """
    place = ("opamps", name)
    if "file" not in entries:
        for key in MODEL_KEYS[1:]:
            if key in entries:
                message = f"{key} has no effect without file; give the model's file too, or remove it"
                yield document.fault((*place, key), message, at_key=True)
        return
    if "subcircuit" not in entries:
        yield document.fault(place, f"subcircuit is missing; it takes {SUBCIRCUIT.takes}", at_key=True)
    if "pins" not in entries:
        message = (
            "pins is missing; it takes what each port of the subcircuit is, in order, such as "
            "[plus, minus, positive_supply, negative_supply, output]"
        )
        yield document.fault(place, message, at_key=True)
        return
    items = entries["pins"].items or []
    words = [item.text.strip() for item in items if item.text is not None]
    for pin in ONCE:
        count = words.count(pin)
        if items and count != 1:
            what = f"{pin} is not among them" if not count else f"{pin} is there {count} times"
            message = (
                f"{what}; pins takes each of {listed(ONCE)} once (extra pins have a name, {{sense: output}})"
            )
            yield document.fault((*place, "pins"), message)
    if len(items) > MOST_PINS:
        yield document.fault((*place, "pins"), f"there are {len(items)} pins; at most {MOST_PINS} are taken")
    connected = set(words) | {
        str(node.text).strip() for item in items for node in (item.entries or {}).values() if node.text
    }
    wanted = [pin for pin in SUPPLY_PINS if pin in connected]
    if wanted and "supplies" not in entries:
        message = (
            f"supplies is missing, which {listed(wanted)} needs; it takes two voltages, such as [15, -15]"
        )
        yield document.fault(place, message, at_key=True)
    if "supplies" in entries:
        yield from supply_faults(document, (*place, "supplies"), entries["supplies"])


def supply_faults(document: Document, place: Location, node: Node) -> Iterator[Fault]:
    """Yield what is wrong with a pair of supplies.

    Parameters
    ----------
    document
        The file that holds it.
    place
        Where it stands there.
    node
        The pair as read.
    """
    items = node.items
    if items is None:
        return
    try:
        volts = [SUPPLY.parse(item.text) for item in items]
    except RefusedError:
        return
    if len(volts) != 2 or volts[0] <= volts[1]:
        written = ", ".join(shown(item.text or "") for item in items)
        message = f"[{written}] is no pair of supplies; supplies takes the positive, then the lower negative voltage"
        yield document.fault(place, message)


def ineffective_faults(spec: Spec) -> Iterator[Fault]:
    """Yield the settings that would alter an imported model, which has no parameters to alter.

    Parameters
    ----------
    spec
        A spec with its candidates and axes.
    """
    imported = {name for name, opamp in spec.candidates.items() if opamp.file is not None}
    if not imported:
        return
    reason = "is an imported model, which no parameter changes"
    for axis in spec.axes:
        section, _, rest = axis.path.partition(".")
        name = rest.rpartition(".")[0]
        if section == "opamps" and name in imported:
            message = f"{name} {reason}; vary a macromodel, or give several models as candidates"
            yield spec.document.fault(("vary", axis.path), message, at_key=True)
    for instance in spec.instances:
        if not _choices(spec, instance) <= imported:
            continue
        paths = [path for path in spec.stage.parts if path.startswith(f"{instance}.")]
        for path in paths:
            message = f"{instance} {reason}; take this out"
            yield spec.document.fault(("stage", "parts", path), message, at_key=True)
        for axis in spec.axes:
            if axis.path.startswith(f"stage.parts.{instance}."):
                yield spec.document.fault(
                    ("vary", axis.path), f"{instance} {reason}; take this out", at_key=True
                )
        for index, entry in enumerate(spec.tolerance.parts if spec.tolerance else ()):
            for position, part in enumerate(entry.of):
                if part.startswith(f"{instance}."):
                    place = ("tolerance", "parts", index, "of", position)
                    yield spec.document.fault(
                        place, f"{instance} {reason}, so {part} cannot vary; take it out here"
                    )


def _choices(spec: Spec, instance: str) -> set[str]:
    """Names of the candidates that an instance has in some case."""
    for path in (f"stage.opamps.{instance}", "stage.opamp"):
        for axis in spec.axes:
            if axis.path == path:
                return {str(value) for value in axis.values}
        given = (
            (spec.stage.opamps or {}).get(instance) if path.startswith("stage.opamps.") else spec.stage.opamp
        )
        if given:
            return {given}
    return set()
