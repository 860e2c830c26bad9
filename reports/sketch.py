"""A sketch of a circuit in the making: parts with their values, op-amps, wires, terminals."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Literal

import numpy as np
import schemdraw
import schemdraw.elements as elm

from modepair.sweeps.parts import Value, kind_of
from modepair.sweeps.quantities import render

__all__ = ["INPUT_OFFSET", "OPAMP_REACH", "Point", "Sketch", "value_text"]

INK = "#22262b"

OPAMP_REACH = 2.165
"""Length of an op-amp from its inputs to its output, as schemdraw draws it."""

INPUT_OFFSET = 0.625
"""Height of an op-amp's inputs from its axis, as schemdraw draws it."""

_NAME_SIZE = 11.0

Point = tuple[float, float]


def value_text(name: str, value: Value) -> str:
    """Write the value of a part: ``10 kΩ``; of a part that varies, its values or their range.

    Parameters
    ----------
    name : str
        The part's name.
    value : float or ndarray, shape (n,)
        SI value, or one per case.

    Returns
    -------
    str
        With its unit.
    """
    unit = kind_of(name).unit
    values = np.unique(np.atleast_1d(value))
    if values.size > 3:
        return f"{render(float(values[0]), unit, digits=4)} to {render(float(values[-1]), unit, digits=4)}"
    texts = [render(one, unit, digits=5) for one in values.tolist()]
    short = [text.removesuffix(f" {unit}") for text in texts[:-1]]
    return ", ".join([*short, texts[-1]])


@dataclass
class Sketch:
    """A drawing in the making.

    Points are in schemdraw's units, x to the right and y up.

    Parameters
    ----------
    parts : mapping of str to float or ndarray
        SI values of the parts that are there.
    opamps : mapping of str to str
        What each op-amp instance is.
    """

    parts: Mapping[str, Value]
    opamps: Mapping[str, str]
    drawing: schemdraw.Drawing = field(init=False)

    def __post_init__(self) -> None:
        self.drawing = schemdraw.Drawing(canvas="svg", show=False)
        self.drawing.config(unit=2, fontsize=_NAME_SIZE, color=INK, lw=1.3, inches_per_unit=0.47)

    def has(self, *names: str) -> bool:
        """Tell whether any of some parts is there."""
        return any(name in self.parts for name in names)

    def wire(self, *points: Point) -> None:
        """Draw a wire through points."""
        for start, end in pairwise(points):
            if start != end:
                self.drawing.add(elm.Line().at(start).to(end))

    def dot(self, *points: Point) -> None:
        """Mark joints of wires."""
        for point in points:
            self.drawing.add(elm.Dot(radius=0.06).at(point))

    def text(self, point: Point, text: str, halign: Literal["left", "center", "right"] = "center") -> None:
        """Write a text beside or on a point."""
        label = elm.Label().at(point).theta(0)
        self.drawing.add(label.label(text, halign=halign, valign="center", ofst=0, fontsize=_NAME_SIZE))

    def ground(self, point: Point) -> None:
        """Draw ground below a point."""
        self.drawing.add(elm.Ground().at(point).theta(0))

    def part(self, name: str, start: Point, end: Point, side: str = "above") -> None:
        """Draw a part between two points, or a wire where it is not there."""
        if name not in self.parts:
            self.wire(start, end)
            return
        element = elm.Capacitor() if name.startswith("C") else elm.ResistorIEC()  # type: ignore[no-untyped-call]
        self.drawing.add(element.at(start).to(end))
        middle = ((start[0] + end[0]) / 2, (start[1] + end[1]) / 2)
        text = f"{name}\n{value_text(name, self.parts[name])}"
        reach = 0.42 if name.startswith("C") else 0.36
        if start[1] == end[1]:
            away = reach + 0.4
            self.text((middle[0], middle[1] + (-away if side == "below" else away)), text)
        else:
            self.text((middle[0] + reach, middle[1]), text, halign="left")

    def opamp(self, name: str, centre: Point, plus_above: bool) -> tuple[Point, Point, Point]:
        """Draw an op-amp whose inputs are at x; return its plus input, its minus input and its output."""
        element = elm.Opamp(leads=False)
        if plus_above:
            element.flip()
        self.drawing.add(element.at(centre).anchor("center").theta(0))
        left, right = centre[0] - OPAMP_REACH / 2, centre[0] + OPAMP_REACH / 2
        up, down = centre[1] + INPUT_OFFSET, centre[1] - INPUT_OFFSET
        plus, minus = ((left, up), (left, down)) if plus_above else ((left, down), (left, up))
        self.text((centre[0] - 0.08, centre[1]), name)
        return plus, minus, (right, centre[1])

    def reference(self, point: Point) -> None:
        """Draw what lies from the reference node down to ground."""
        x, y = point
        if self.has("RREF"):
            self.text((x - 0.3, y + 0.05), "ref", halign="right")
            self.dot(point)
            self.part("RREF", point, (x, y - 1.7))
            y -= 1.7
        self.ground((x, y))

    def output(self, x: float, y: float) -> None:
        """Draw the output's terminal, and the load where there is one."""
        end = x + 1.0
        if self.has("RL"):
            self.wire((x, y), (x + 0.7, y))
            self.dot((x + 0.7, y))
            self.part("RL", (x + 0.7, y), (x + 0.7, y - 2.0))
            self.ground((x + 0.7, y - 2.0))
            end = x + 2.2
            self.wire((x + 0.7, y), (end, y))
        else:
            self.wire((x, y), (end, y))
        self.drawing.add(elm.Dot(open=True, radius=0.08).at((end, y)))
        self.text((end + 0.25, y), "out", halign="left")

    def name_opamp(self, name: str, point: Point) -> None:
        """Write what an op-amp is, where that is known."""
        if self.opamps.get(name):
            self.text(point, self.opamps[name])

    def svg(self, caption: str) -> str:
        """Give the drawing as an ``svg`` element with a view box and no fixed size, named by a caption."""
        text = self.drawing.get_imagedata("svg").decode("utf-8")
        text = re.sub(r"<\?xml.*?\?>\s*|<!DOCTYPE.*?>\s*", "", text, flags=re.DOTALL)
        # Bare sizes in points would let the page stretch it: keep the view box, give up the fixed size.
        width = re.search(r'width="([0-9.]+)pt"', text)
        text = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", text, count=1)
        text = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", text, count=1)
        size = f'style="max-width:{float(width[1]):.0f}pt" ' if width else ""
        label = caption.replace("&", "&amp;").replace("<", "&lt;").replace('"', "&quot;")
        return text.replace("<svg ", f'<svg {size}role="img" aria-label="{label}" ', 1)
