"""Semiconductor elements: D, Q, J and M."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.inside import Inside
from modepair.circuits.screening.numbers import NUMBER_START, NumberError, parse_number, show_number
from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.reading import Reader, Token
from modepair.circuits.screening.source import Card
from modepair.sweeps.faults import shown

__all__ = ["Device", "read_device"]

_KINDS = {"d": ("d",), "q": ("npn", "pnp"), "j": ("njf", "pjf"), "m": ("nmos", "pmos")}
_WORDS = {"d": "a diode model", "q": "a bipolar model", "j": "a JFET model", "m": "a MOS model"}
_OPTIONS = {
    "d": ("area", "pj", "m"),
    "q": ("area", "m"),
    "j": ("area", "m"),
    "m": ("l", "w", "ad", "as", "pd", "ps", "nrd", "nrs", "m"),
}
_NODES = {"d": 2, "q": 3, "j": 3, "m": 4}


@dataclass(frozen=True)
class Device:
    """A semiconductor element with its model and its geometry."""

    card: Card
    name: str
    nodes: tuple[str, ...]
    model: str
    options: dict[str, Expression]
    off: bool

    def lines(self, inside: Inside) -> Iterator[str]:
        """Yield the element."""
        letter = self.name[0]
        model = inside.model(self.model, self.card.place(), _KINDS[letter], _WORDS[letter])
        options = []
        for key in _OPTIONS[letter]:
            if key in self.options:
                value = inside.value(self.options[key])
                if value < 0 or (value == 0 and key in ("area", "m", "l", "w")):
                    raise self.options[key].refused(f"{key} is {value:g}; it must be above zero")
                options.append(f" {key}={show_number(value)}")
        yield f"{inside.nodes(self)} {model.name}{''.join(options)}{' off' if self.off else ''}"


def read_device(reader: Reader) -> Device:
    """Read a D, Q, J or M card: ``Q1 c b e [substrate] model area``, ``M1 d g s b model W=10u L=1u``.

    Whether the fourth name of a Q is a substrate or the model shows in what follows it: a name, or none.
    """
    name = reader.name("an element")
    letter = name[0]
    nodes = reader.nodes(_NODES[letter])
    if letter == "q":
        nodes += _substrate(reader)
    model = reader.name(_WORDS[letter])
    options: dict[str, Expression] = {}
    off = False
    while (token := reader.peek()) is not None:
        following = reader.peek(1)
        if token.text == "off" and token.kind == "word":
            reader.take()
            off = True
        elif (
            token.kind == "word"
            and following is not None
            and following.kind == "sign"
            and following.text == "="
        ):
            reader.take()
            reader.take_sign("=")
            if token.text == "ic":
                while (value := reader.peek()) is not None and (
                    value.kind == "expression" or NUMBER_START.match(value.text)
                ):
                    reader.take()
                reader.note("IC is left out: an AC sweep does not use it")
                continue
            _option(reader, letter, token, options)
            options[token.text] = reader.value(f"the value of {token.text}")
        elif (
            letter != "m"
            and "area" not in options
            and (token.kind == "expression" or NUMBER_START.match(token.text))
        ):
            options["area"] = reader.value("the area")
        else:
            raise reader.refused(f"{shown(token.text)} is left over; remove it, or write name=value", token)
    return Device(reader.card, name, nodes, model, options, off)


def _option(reader: Reader, letter: str, token: Token, options: dict[str, Expression]) -> None:
    if token.text not in _OPTIONS[letter]:
        raise reader.refused(
            f"{shown(token.text)} is not taken here; take {', '.join(_OPTIONS[letter])}", token
        )
    if token.text in options:
        raise reader.refused(f"{token.text} is given twice; keep one", token)


def _substrate(reader: Reader) -> tuple[str, ...]:
    """Take the substrate node of a Q, in square brackets or not, where there is one."""
    if reader.take_sign("["):
        node = reader.node()
        if not reader.take_sign("]"):
            raise reader.refused("the bracket of the substrate is not closed; write ]")
        return (node,)
    following = reader.peek(1)
    if following is None or following.kind != "word" or following.text == "off":
        return ()
    after = reader.peek(2)
    if after is not None and after.kind == "sign" and after.text == "=":
        return ()
    if _is_number(following.text):
        return ()
    return (reader.node(),)


def _is_number(text: str) -> bool:
    try:
        parse_number(text)
    except NumberError:
        return False
    return True
