"""R, C, L and K elements, and V and I sources of a constant value."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.inside import Inside
from modepair.circuits.screening.numbers import NUMBER_START, show_number
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.reading import Reader
from modepair.circuits.screening.source import Card
from modepair.sweeps.faults import shown

__all__ = ["PASSIVE_MODELS", "Coupling", "Passive", "Source", "read_coupling", "read_passive", "read_source"]

PASSIVE_MODELS = {"r": ("r", "res"), "c": ("c", "cap"), "l": ("l", "ind")}
_WORDS = {"r": "a resistance", "c": "a capacitance", "l": "an inductance"}
_OPTIONS = ("tc1", "tc2", "m")
_WAVEFORMS = (
    "pulse",
    "sin",
    "exp",
    "pwl",
    "sffm",
    "am",
    "trnoise",
    "trrandom",
    "external",
    "distof1",
    "distof2",
)
_REMEDY_WAVEFORM = "write the DC value; an AC sweep uses no more"


@dataclass(frozen=True)
class Passive:
    """A resistor, capacitor or inductor with a constant value."""

    card: Card
    name: str
    nodes: tuple[str, ...]
    value: Expression
    model: str | None
    options: dict[str, Expression]

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the element; a model's coefficients are put into it."""
        value, options = self.worked_out(inside)
        tail = "".join(f" {key}={show_number(options[key])}" for key in _OPTIONS if key in options)
        yield f"{inside.nodes(self)} {show_number(value)}{tail}"

    def worked_out(self, inside: Inside) -> tuple[float, dict[str, float]]:
        """Work out its value, which is above zero, and its options, a model's coefficients among them."""
        letter = self.name[0]
        value = inside.positive(self.value, _WORDS[letter])
        options = {key: inside.value(expression) for key, expression in self.options.items()}
        if self.model is not None:
            place = self.card.place()
            model = inside.model(self.model, place, PASSIVE_MODELS[letter], f"a model of {_WORDS[letter]}")
            if model.values.get(letter, 1.0) != 1.0:
                raise self.value.refused(
                    f"model {self.model} has {letter.upper()}={model.values[letter]:g}, which one "
                    f"program multiplies by and another ignores; write the product"
                )
            options = {key: model.values[key] for key in ("tc1", "tc2") if key in model.values} | options
            inside.findings.note(place, f"model {self.model} is put into the element")
        if options.get("m", 1.0) <= 0:
            raise self.options["m"].refused("m is zero or negative; it must be above zero")
        return value, options


def read_passive(reader: Reader) -> Passive:
    """Read an R, C or L card: ``R1 a b 1k``, ``R1 a b model 1k TC=1m,0``, ``C1 a b {cx} IC=0``."""
    name = reader.name("an element")
    nodes = reader.nodes(2)
    letter = name[0]
    value: Expression | None = None
    model: str | None = None
    for _ in range(2):
        token, after = reader.peek(), reader.peek(1)
        if token is None or (after is not None and after.text == "=" and after.kind == "sign"):
            break
        if token.kind == "word" and not NUMBER_START.match(token.text):
            if model is not None:
                break
            model = reader.name("a model")
        elif value is None:
            value = reader.value(_WORDS[letter])
        else:
            break
    options: dict[str, Expression] = {}
    while (token := reader.take()) is not None:
        key = token.text
        if not reader.take_sign("="):
            raise reader.refused(f"{shown(key)} is left over; one value is taken; remove it", token)
        given = reader.value(f"the value of {key}")
        if key in options or (key == letter and value is not None):
            raise reader.refused(f"{key} is given twice; keep one", token)
        if key == letter:
            value = given
        elif key == "tc" and letter == "r":
            options["tc1"] = given
            following = reader.peek()
            if following is not None and (
                following.kind == "expression" or NUMBER_START.match(following.text)
            ):
                options["tc2"] = reader.value("the second temperature coefficient")
        elif key in _OPTIONS:
            options[key] = given
        elif key == "ic" and letter in "cl":
            reader.note("IC is left out: an AC sweep does not use it")
        else:
            raise reader.refused(
                f"{shown(key)} is not a parameter that is taken here; take {', '.join(_OPTIONS)}", token
            )
    if value is None:
        raise reader.refused(
            f"{name} has no value; write {_WORDS[letter]}, such as "
            f"{'1k' if letter == 'r' else '1n' if letter == 'c' else '1u'}"
        )
    return Passive(reader.card, name, nodes, value, model, options)


@dataclass(frozen=True)
class Coupling:
    """Two coupled inductors."""

    card: Card
    name: str
    inductors: tuple[str, str]
    value: Expression
    nodes: tuple[str, ...] = ()

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the element, its inductors checked."""
        place = self.card.place()
        names = [inside.element(name, "l", place, "an inductor") for name in self.inductors]
        value = inside.value(self.value)
        if not 0 < abs(value) <= 1:
            raise self.value.refused(f"the coupling is {value:g}; it lies between 0 and 1")
        if names[0] == names[1]:
            raise self.value.refused(f"{self.inductors[0]} is coupled to itself; name two inductors")
        yield f"{inside.name(self)} {names[0]} {names[1]} {show_number(value)}"


def read_coupling(reader: Reader) -> Coupling:
    """Read a K card: ``K1 L1 L2 0.99``."""
    name = reader.name("an element")
    inductors = (reader.name("an inductor"), reader.name("an inductor"))
    token = reader.peek()
    if token is not None and token.text.startswith("l"):
        raise reader.refused("more than two inductors are coupled by one K; write one K for each pair")
    value = reader.value("the coupling")
    reader.end()
    return Coupling(reader.card, name, inductors, value)


@dataclass(frozen=True)
class Source:
    """An independent source; only its DC value is kept."""

    card: Card
    name: str
    nodes: tuple[str, ...]
    value: Expression | None

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the element."""
        value = "0.0" if self.value is None else inside.number(self.value)
        yield f"{inside.nodes(self)} dc {value}"


def read_source(reader: Reader) -> Source:
    """Read a V or I card: ``V1 a b 5``, ``V1 a b DC 5 AC 0``."""
    name = reader.name("an element")
    nodes = reader.nodes(2)
    value: Expression | None = None
    while (token := reader.peek()) is not None:
        if token.kind == "word" and token.text == "ac":
            reader.take()
            following = reader.peek()
            magnitude = reader.value("the AC magnitude") if following is not None else None
            if magnitude is None or getattr(magnitude.node, "value", None) != 0.0:
                raise reader.refused(
                    "an AC source inside a model would add to the sweep; remove AC and its value", token
                )
            if (phase := reader.peek()) is not None and NUMBER_START.match(phase.text):
                reader.value("the AC phase")
        elif token.kind == "word" and token.text in _WAVEFORMS:
            if value is None:
                raise reader.refused(
                    f"{name} has the waveform {token.text} and no DC value; {_REMEDY_WAVEFORM}", token
                )
            while reader.take() is not None:
                pass
            reader.note(f"waveform {token.text} is left out: an AC sweep uses the DC value only")
        else:
            if reader.take_word("dc"):
                reader.take_sign("=")
            elif token.kind == "word" and not NUMBER_START.match(token.text):
                raise reader.refused(
                    f"{shown(token.text)} is not a constant source; {_REMEDY_WAVEFORM}, or write E, G or "
                    f"B for an expression",
                    token,
                )
            if value is not None:
                raise reader.refused("a second DC value; programs take one or the other; keep one", token)
            value = reader.value("the DC value")
    return Source(reader.card, name, nodes, value)
