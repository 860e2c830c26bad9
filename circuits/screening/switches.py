"""Switches S and W, rewritten: ngspice has every switch open in AC analysis, whatever its operating point.

A switch with VON and VOFF follows PSpice's smooth law between them (from memory of its reference guide):
ln R = Lm + 3 Lr u / 2 - 2 Lr u^3 with Lm = ln sqrt(RON ROFF), Lr = ln(RON / ROFF) and u = (v - Vm)/Vd, held
between
-1/2 and 1/2; at both ends it meets ROFF and RON with no slope. A switch with VT and VH is closed above VT +
VH (above VT - VH if it is marked ON).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.expressions import (
    Call,
    Chain,
    Choice,
    Compare,
    Current,
    Node,
    Number,
    Voltage,
    show,
)
from modepair.circuits.screening.inside import Inside, ModelUse
from modepair.circuits.screening.places import CardError
from modepair.circuits.screening.reading import Reader
from modepair.circuits.screening.source import Card

__all__ = ["SWITCH_MODELS", "Switch", "read_switch"]

SWITCH_MODELS = {"s": ("vswitch", "sw"), "w": ("iswitch", "csw")}


@dataclass(frozen=True)
class Switch:
    """A switch with its control: two nodes (S), or a voltage source (W)."""

    card: Card
    name: str
    nodes: tuple[str, ...]
    source: str | None
    model: str
    closed: bool

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield a G element of the same conductance."""
        place = self.card.place()
        model = inside.model(self.model, place, SWITCH_MODELS[self.name[0]], "a switch model")
        plus, minus, *control = (inside.node(node, place) for node in self.nodes)
        across: Node
        if self.source is None:
            across = Voltage(control[0], control[1])
        else:
            across = Current(inside.element(self.source, "v", place, "a voltage source"))
        current = Chain(Voltage(plus, minus), (("/", self._resistance(model, across)),))
        name = inside.fresh_name(f"g{inside.name(self)}")
        inside.findings.note(place, f"switch {self.name} is written as {name}, which is right in AC")
        yield f"{name} {plus} {minus} value={{{show(current)}}}"

    def _refused(self, message: str) -> CardError:
        return CardError(self.card.place(), f"model {self.model} of {self.name} {message}")

    def _resistance(self, model: ModelUse, across: Node) -> Node:
        """Return the resistance over the control."""
        unit, values = "v" if self.name[0] == "s" else "i", model.values
        smooth = any(key in values for key in (f"{unit}on", f"{unit}off"))
        stepped = any(key in values for key in (f"{unit}t", f"{unit}h"))
        if smooth and stepped:
            raise self._refused("has both a threshold and ON and OFF values; keep one kind")
        smooth = smooth or (model.kind in ("vswitch", "iswitch") and not stepped)
        on, off = values.get("ron", 1.0), values.get("roff", 1e6 if smooth else 1e12)
        if on <= 0 or off <= 0:
            raise self._refused("has a resistance of zero or less; write RON and ROFF above zero")
        if not smooth:
            hysteresis = values.get(f"{unit}h", 0.0)
            if hysteresis < 0:
                raise self._refused(
                    "has a negative hysteresis, which programs read in different ways; write it positive"
                )
            threshold = values.get(f"{unit}t", 0.0) + (-hysteresis if self.closed else hysteresis)
            return Choice(Compare(">", across, Number(threshold)), Number(on), Number(off))
        high, low = values.get(f"{unit}on", 1.0 if unit == "v" else 1e-3), values.get(f"{unit}off", 0.0)
        if high == low:
            raise self._refused("has equal ON and OFF values; write two different ones")
        middle, ratio = (math.log(on) + math.log(off)) / 2, math.log(on) - math.log(off)
        shifted = Chain(across, (("-", Number((high + low) / 2)),))
        scaled = Chain(shifted, (("/", Number(high - low)),))
        held = Call("min", (Call("max", (scaled, Number(-0.5))), Number(0.5)))
        linear = Chain(Number(1.5 * ratio), (("*", held),))
        cubic = Chain(Number(2 * ratio), (("*", held), ("*", held), ("*", held)))
        return Call("exp", (Chain(Number(middle), (("+", linear), ("-", cubic))),))


def read_switch(reader: Reader) -> Switch:
    """Read an S card, ``S1 a b c d model``, or a W card, ``W1 a b V1 model``; ON or OFF may follow."""
    name = reader.name("an element")
    nodes = reader.nodes(4 if name[0] == "s" else 2)
    source = reader.name("a voltage source") if name[0] == "w" else None
    model = reader.name("a switch model")
    closed = reader.take_word("on")
    if not closed:
        reader.take_word("off")
    reader.end()
    return Switch(reader.card, name, nodes, source, model, closed)
