"""The schematic of a stage and its source, with the values of its parts, as SVG that stands in a page."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Literal

import numpy as np
import schemdraw
import schemdraw.elements as elm

from modepair.sweeps.parts import TOPOLOGIES, Value, kind_of
from modepair.sweeps.quantities import render

INK = "#22262b"
QUIET = "#5d646c"

_NAME_SIZE = 11.0
_OPAMP_REACH = 2.165
_INPUT_OFFSET = 0.625
"""Height of an op-amp's inputs from its axis, as schemdraw draws it."""

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


def part_values(blocks: list[Mapping[str, Value]]) -> dict[str, Value]:
    """Put together the values that parts have in any case.

    Parameters
    ----------
    blocks : list of mapping of str to float or ndarray
        Parts dictionaries of the cases of one topology.

    Returns
    -------
    dict of str to float or ndarray
        Every part that is there in some case; a part that is absent in others has 0 among its values where
        that means the same.
    """
    names = dict.fromkeys(name for block in blocks for name in block if "." not in name)
    found: dict[str, Value] = {}
    for name in names:
        values = np.unique(np.concatenate([np.atleast_1d(block.get(name, 0.0)) for block in blocks]))
        if name in ("RG", "RL", "RBP", "RBN"):
            values = values[values != 0]
        if np.any(values != 0):
            found[name] = float(values[0]) if values.size == 1 else values
    return found


@dataclass
class _Sketch:
    """A drawing in the making, in schemdraw's units."""

    parts: Mapping[str, Value]
    opamps: Mapping[str, str]
    drawing: schemdraw.Drawing = field(init=False)

    def __post_init__(self) -> None:
        self.drawing = schemdraw.Drawing(canvas="svg", show=False)
        self.drawing.config(unit=2, fontsize=_NAME_SIZE, color=INK, lw=1.3, inches_per_unit=0.47)

    def has(self, *names: str) -> bool:
        return any(name in self.parts for name in names)

    def wire(self, *points: Point) -> None:
        for start, end in pairwise(points):
            if start != end:
                self.drawing.add(elm.Line().at(start).to(end))

    def dot(self, *points: Point) -> None:
        for point in points:
            self.drawing.add(elm.Dot(radius=0.06).at(point))

    def text(self, point: Point, text: str, halign: Literal["left", "center", "right"] = "center") -> None:
        label = elm.Label().at(point).theta(0)
        self.drawing.add(label.label(text, halign=halign, valign="center", ofst=0, fontsize=_NAME_SIZE))

    def ground(self, point: Point) -> None:
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
        left, right = centre[0] - _OPAMP_REACH / 2, centre[0] + _OPAMP_REACH / 2
        up, down = centre[1] + _INPUT_OFFSET, centre[1] - _INPUT_OFFSET
        plus, minus = ((left, up), (left, down)) if plus_above else ((left, down), (left, up))
        self.text((centre[0] - 0.08, centre[1]), name)
        return plus, minus, (right, centre[1])

    def svg(self, caption: str) -> str:
        text = self.drawing.get_imagedata("svg").decode("utf-8")
        text = re.sub(r"<\?xml.*?\?>\s*|<!DOCTYPE.*?>\s*", "", text, flags=re.DOTALL)
        # Bare sizes in points would let the page stretch it: keep the view box, give up the fixed size.
        width = re.search(r'width="([0-9.]+)pt"', text)
        text = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", text, count=1)
        text = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", text, count=1)
        size = f'style="max-width:{float(width[1]):.0f}pt" ' if width else ""
        label = caption.replace("&", "&amp;").replace("<", "&lt;").replace('"', "&quot;")
        return text.replace("<svg ", f'<svg {size}role="img" aria-label="{label}" ', 1)


def schematic_svg(topology: str, parts: Mapping[str, Value], opamps: Mapping[str, str]) -> str:
    """Draw a stage and its source network.

    Parameters
    ----------
    topology : str
        Name of the stage.
    parts : mapping of str to float or ndarray
        SI values of the parts that are there, such as from `part_values`.
    opamps : mapping of str to str
        What each op-amp instance is, such as ``quiet-bipolar``; empty texts are left out.

    Returns
    -------
    str
        An ``svg`` element with a view box and no fixed size. It holds no script, no link and no reference.

    Raises
    ------
    ValueError
        Where there is no such topology.
    """
    if topology not in TOPOLOGIES:
        raise ValueError(f"topology must be one of {', '.join(TOPOLOGIES)}, not {topology!r}")
    sketch = _Sketch(parts, opamps)
    height = _RAILS[topology] + (1.2 if sketch.has("CF1", "CF2") else 0.0)
    x = _draw_source(sketch, height)
    _STAGES[topology](sketch, x, height)
    return sketch.svg(f"Schematic of the {topology} stage behind its source network")


def _draw_source(sketch: _Sketch, height: float) -> float:
    """Draw the source between its rails, the minus leg above; return where the stage begins."""
    top, bottom = height, -height
    for end, name in ((top, "minus"), (bottom, "plus")):
        generator = elm.SourceSin()  # type: ignore[no-untyped-call]
        sketch.drawing.add(generator.at((0, min(0, end))).to((0, max(0, end))))
        sketch.text((-0.65, end / 2), f"{name}\nleg", halign="right")
    sketch.wire((0, 0), (-0.5, 0))
    sketch.ground((-0.5, 0))
    x = _series(sketch, 0.0, height, "RSN", "RSP")
    if sketch.has("RI"):
        x = _imbalance(sketch, x, height)
    x = _shunts(sketch, x, height, ("CCN", "CCP"), "CCB")
    x = _series(sketch, x, height, "RFN", "RFP")
    x = _shunts(sketch, x, height, ("CFN", "CFP"), "CFB")
    x = _shunts(sketch, x, height, ("RBN", "RBP"), "")
    for end in (top, bottom):
        sketch.wire((x, end), (x + 0.8, end))
    return x + 0.8


def _series(sketch: _Sketch, x: float, height: float, minus: str, plus: str) -> float:
    if not sketch.has(minus, plus):
        return x
    sketch.part(minus, (x, height), (x + 2.2, height))
    sketch.part(plus, (x, -height), (x + 2.2, -height), "below")
    return x + 2.2


def _imbalance(sketch: _Sketch, x: float, height: float) -> float:
    """Draw the imbalance in the plus leg, or in the minus leg where every value is negative."""
    values = np.atleast_1d(sketch.parts["RI"])
    only_minus = bool(np.all(values <= 0))
    end, other, side = (height, -height, "above") if only_minus else (-height, height, "below")
    wide = x + 2.6
    if only_minus:
        sketch.parts = {**sketch.parts, "RI": np.abs(values)}
    sketch.part("RI", (x + 0.3, end), (wide - 0.3, end), side)
    sketch.wire((x, end), (x + 0.3, end))
    sketch.wire((wide - 0.3, end), (wide, end))
    sketch.wire((x, other), (wide, other))
    if sketch.has("CI"):
        level = end + (-1.1 if only_minus else 1.1)
        sketch.wire((x + 0.3, end), (x + 0.3, level))
        sketch.part("CI", (x + 0.3, level), (wide - 0.3, level), "below" if only_minus else "above")
        sketch.wire((wide - 0.3, level), (wide - 0.3, end))
        sketch.dot((x + 0.3, end), (wide - 0.3, end))
    if np.any(values < 0) and not only_minus:
        sketch.text((x + 1.3, -height - 1.4), "negative: in the minus leg")
    return wide


def _shunts(sketch: _Sketch, x: float, height: float, legs: tuple[str, str], between: str) -> float:
    """Draw what lies from each leg to ground, then what lies between the legs."""
    start = x
    if sketch.has(*legs):
        x += 0.7
        for name, end in zip(legs, (height, -height), strict=True):
            if sketch.has(name):
                sketch.part(name, (x, end), (x, 0))
                sketch.dot((x, end))
        sketch.wire((x, 0), (x - 0.45, 0))
        sketch.ground((x - 0.45, 0))
        x += 1.6
    if between and sketch.has(between):
        x += 0.7 if not sketch.has(*legs) else 0.3
        sketch.part(between, (x, height), (x, -height))
        sketch.dot((x, height), (x, -height))
        x += 1.7
    for end in (height, -height):
        sketch.wire((start, end), (x, end))
    return x


def _reference(sketch: _Sketch, point: Point) -> None:
    """Draw what lies from the reference node down to ground."""
    x, y = point
    if sketch.has("RREF"):
        sketch.text((x - 0.3, y + 0.05), "ref", halign="right")
        sketch.dot(point)
        sketch.part("RREF", point, (x, y - 1.7))
        y -= 1.7
    sketch.ground((x, y))


def _output(sketch: _Sketch, x: float, y: float) -> None:
    """Draw the output's terminal, and the load where there is one."""
    end = x + 1.0
    if sketch.has("RL"):
        sketch.wire((x, y), (x + 0.7, y))
        sketch.dot((x + 0.7, y))
        sketch.part("RL", (x + 0.7, y), (x + 0.7, y - 2.0))
        sketch.ground((x + 0.7, y - 2.0))
        end = x + 2.2
        sketch.wire((x + 0.7, y), (end, y))
    else:
        sketch.wire((x, y), (end, y))
    sketch.drawing.add(elm.Dot(open=True, radius=0.08).at((end, y)))
    sketch.text((end + 0.25, y), "out", halign="left")


def _opamp_name(sketch: _Sketch, name: str, point: Point) -> None:
    if sketch.opamps.get(name):
        sketch.text(point, sketch.opamps[name])


def _difference(sketch: _Sketch, x: float, height: float, opamp: str = "A1") -> None:
    """Draw R1 to R4 around an op-amp, from rails at plus and minus `height`."""
    node, inner = x + 2.4, x + 3.1
    sketch.part("R1", (x, height), (node, height))
    sketch.part("R3", (x, -height), (node, -height), "below")
    plus, minus, out = sketch.opamp(opamp, (inner + _OPAMP_REACH / 2, 0), plus_above=False)
    sketch.wire((node, height), (node, minus[1]), minus)
    sketch.wire((node, -height), (node, plus[1]), plus)
    over = out[0] + 0.9
    sketch.wire(out, (over, 0))
    sketch.part("R2", (node, height), (over, height))
    sketch.wire((over, height), (over, 0))
    sketch.dot((node, height), (node, -height), (over, 0))
    if sketch.has("C2"):
        level = height + 1.5
        sketch.wire((node, height), (node, level))
        sketch.part("C2", (node, level), (over, level))
        sketch.wire((over, level), (over, height))
        sketch.dot((over, height))
    low = -height - 2.3
    sketch.part("R4", (node, -height), (node, low))
    if sketch.has("C4"):
        beside = node + 2.4
        sketch.wire((node, -height), (beside, -height))
        sketch.part("C4", (beside, -height), (beside, low))
        sketch.wire((beside, low), (node, low))
    _reference(sketch, (node, low))
    _opamp_name(sketch, opamp, (inner + 1.1, -1.6))
    _output(sketch, over, 0)


def _buffered_difference(sketch: _Sketch, x: float, height: float) -> None:
    inner = x + 0.4
    ends = []
    for name, end, sign in (("A2", height, 1), ("A1", -height, -1)):
        centre = (inner + _OPAMP_REACH / 2, end + sign * _INPUT_OFFSET)
        plus, minus, out = sketch.opamp(name, centre, plus_above=sign < 0)
        sketch.wire((x, end), plus)
        over, level = out[0] + 0.5, centre[1] + sign * 1.6
        sketch.wire(
            minus, (minus[0] - 0.35, minus[1]), (minus[0] - 0.35, level), (over, level), (over, out[1])
        )
        sketch.wire(out, (over, out[1]))
        sketch.dot((over, out[1]))
        _opamp_name(sketch, name, (centre[0], end - sign * 0.95))
        ends.append((over, out[1]))
    level = ends[0][1]
    stage = ends[0][0] + 0.3
    for over, y in ends:
        sketch.wire((over, y), (stage, y))
    _difference(sketch, stage, level, "A3")


def _three_opamp(sketch: _Sketch, x: float, height: float) -> None:
    left, inner = x + 0.2, x + 1.1
    over, level = inner + _OPAMP_REACH + 0.8, height - 2.05
    for name, resistor, capacitor, end, sign in (
        ("A2", "RF2", "CF2", height, 1),
        ("A1", "RF1", "CF1", -height, -1),
    ):
        centre = (inner + _OPAMP_REACH / 2, end - sign * _INPUT_OFFSET)
        plus, minus, out = sketch.opamp(name, centre, plus_above=sign > 0)
        sketch.wire((x, end), plus)
        summing = (left + 0.3, sign * level)
        sketch.wire(minus, (summing[0], minus[1]), summing)
        side = "above" if sign < 0 else "below"
        sketch.part(resistor, summing, (over, sign * level), side)
        sketch.wire((over, sign * level), (over, out[1]), out)
        sketch.dot(summing, (over, out[1]))
        if sketch.has(capacitor):
            inside = sign * (level - 1.9)
            sketch.wire(summing, (summing[0], inside))
            sketch.part(capacitor, (summing[0], inside), (over, inside), side)
            sketch.wire((over, inside), (over, sign * level))
        _opamp_name(sketch, name, (centre[0] + 0.2, end + sign * 0.95))
    if sketch.has("RG"):
        sketch.part("RG", (left + 0.3, level), (left + 0.3, -level))
    stage = over + 0.3
    out_level = height - _INPUT_OFFSET
    for sign in (1, -1):
        sketch.wire((over, sign * out_level), (stage, sign * out_level))
    _difference(sketch, stage, out_level, "A3")


def _two_opamp(sketch: _Sketch, x: float, height: float) -> None:
    reference, first = x + 0.9, x + 3.2
    inner = first + 0.6
    # A1 above the chain takes the minus leg; A2 below it takes the plus leg.
    centre = (inner + _OPAMP_REACH / 2, height - _INPUT_OFFSET)
    plus, minus, out = sketch.opamp("A1", centre, plus_above=True)
    sketch.wire((x, height), plus)
    sketch.wire(minus, (first, minus[1]), (first, 0))
    one = out[0] + 0.6
    sketch.wire(out, (one, out[1]), (one, 0))
    sketch.part("R1", (reference, 0), (first, 0))
    sketch.part("R2", (first, 0), (one, 0), "below" if sketch.has("C2") else "above")
    if sketch.has("C2"):
        sketch.part("C2", (first, 1.1), (one, 1.1), "above")
    second = one + 2.4
    sketch.part("R3", (one, 0), (second, 0))
    _reference(sketch, (reference, 0))
    centre = (second + 0.6 + _OPAMP_REACH / 2, -height + _INPUT_OFFSET)
    plus, minus, out = sketch.opamp("A2", centre, plus_above=False)
    sketch.wire((x, -height), plus)
    sketch.wire((second, 0), (second, minus[1]), minus)
    over = out[0] + 0.7
    sketch.wire(out, (over, out[1]), (over, 0))
    sketch.part("R4", (second, 0), (over, 0), "below" if sketch.has("C4") else "above")
    if sketch.has("C4"):
        sketch.wire((second, 0), (second, 1.1))
        sketch.part("C4", (second, 1.1), (over, 1.1), "above")
        sketch.wire((over, 1.1), (over, 0))
    sketch.dot((first, 0), (one, 0), (second, 0), (over, out[1]))
    if sketch.has("RG"):
        level = -1.5
        sketch.wire((first, 0), (first, level))
        sketch.part("RG", (first, level), (second, level), "below")
        sketch.dot((second, level))
    _opamp_name(sketch, "A1", (inner + _OPAMP_REACH / 2, height + 0.95))
    _opamp_name(sketch, "A2", (centre[0], -height - 0.95))
    _output(sketch, over, out[1])


_RAILS = {"difference": 2.3, "buffered-difference": 2.6, "three-opamp": 4.4, "two-opamp": 4.2}
_STAGES = {
    "difference": _difference,
    "buffered-difference": _buffered_difference,
    "three-opamp": _three_opamp,
    "two-opamp": _two_opamp,
}
