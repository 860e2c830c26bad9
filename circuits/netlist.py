"""The netlist: two copies of a circuit in one deck, one for each drive, built with PySpice."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence

import numpy as np
from PySpice.Spice.Netlist import Circuit

from modepair.circuits.elements import GROUND, OUTPUT, Card, Element, Instance
from modepair.circuits.sources import GENERATORS

__all__ = [
    "ALTERABLE",
    "COPIES",
    "DRIVES",
    "circuit",
    "netlist",
    "pair_of_drives",
    "standalone",
    "value_model",
]

COPIES = ("c", "d")
"""Suffixes of the two copies: common-mode drive, differential drive."""

DRIVES: Mapping[str, tuple[float, float]] = {"c": (1.0, 1.0), "d": (0.5, -0.5)}
"""Amplitudes of the plus and the minus generator of each copy, in volts."""

OPTIONS = ".option noopac pivrel=0.5"
"""A linear circuit needs no operating point, so a node that floats at DC is no matter. The pivot threshold is
far above ngspice's own 0.001: of random stages, the largest error at the output against a dense solve fell from
1e-9 to 3e-11 V per volt of drive, at no cost in time."""

NONLINEAR_OPTIONS = ".option pivrel=0.5"
"""A nonlinear circuit is linearised about its operating point, so it must have one."""


ALTERABLE: Mapping[str, str] = {"R": "rsh", "C": "cap"}
"""Kinds of elements whose value can stand in a model, and its name there. In a deck that is loaded once and altered for
each case, such an element has its value in a model that all copies share, so that one command sets it. A resistor is
one square of its sheet resistance: a model's plain `r` is silently kept where it would fall to 1 mOhm."""


def value_model(name: str) -> str:
    """Name the model that holds an element's value in all copies.

    ngspice looks for an element before it looks for a model; no element's name ends so, since all end in their copy.
    """
    return f"{name}_m"


def _add(
    built: Circuit, card: Card, row: int, copy: str, shared: Collection[str], *, alterable: bool
) -> None:
    nodes = [node if node in shared else f"{node}_{copy}" for node in card.nodes]
    if isinstance(card, Instance):
        built.X(f"{card.name}_{copy}", card.subcircuit, *nodes)
        return
    name = f"{card.name[1:]}_{copy}"
    value = float(card.values[row])
    if alterable and card.kind in ALTERABLE:
        model = value_model(card.name)
        if model not in built.model_names:
            built.model(model, card.kind.lower(), **{ALTERABLE[card.kind]: value})
        if card.kind == "R":
            built.SemiconductorResistor(name, *nodes, model=model, length=1, width=1)
        else:
            built.SemiconductorCapacitor(name, *nodes, model=model)
    elif card.kind == "R":
        built.R(name, *nodes, value)
    elif card.kind == "C":
        built.C(name, *nodes, value)
    elif card.kind == "L":
        built.L(name, *nodes, value)
    elif card.kind == "V":
        built.V(name, *nodes, f"DC {card.dc:.17g} AC {value!r}")
    elif card.kind in "GI":
        # SPICE counts the current of a source from its first to its second node, through the source.
        into, out_of, *controlling = nodes
        if card.kind == "G":
            built.VCCS(name, out_of, into, *controlling, transconductance=value)
        else:
            built.I(name, out_of, into, f"DC {card.dc:.17g} AC {value!r}")
    else:
        built.VCVS(name, *nodes, voltage_gain=value)


def circuit(
    elements: Mapping[str, Sequence[Card]],
    row: int = 0,
    *,
    saved: Sequence[str],
    models: str = "",
    supplies: Mapping[str, float] = {},
    nonlinear: bool = False,
    alterable: bool = False,
) -> Circuit:
    """Build the PySpice circuit of one case, in several copies.

    Parameters
    ----------
    elements : mapping of str to sequence of Element or Instance
        By the suffix of the copy: what is in it.
    row : int
        Which of the elements' values to take.
    saved : sequence of str
        What is kept of a solve, such as "v(out_c)".
    models : str
        Definitions of the subcircuits that instances name.
    supplies : mapping of str to float
        Nodes that all copies share, and their DC voltages.
    nonlinear : bool
        Whether the circuit has an operating point.
    alterable : bool
        Whether the values of `ALTERABLE` elements stand in models.

    Returns
    -------
    PySpice.Spice.Netlist.Circuit
        Without analyses.
    """
    built = Circuit("modepair")
    options = NONLINEAR_OPTIONS if nonlinear else OPTIONS
    built.raw_spice = f"{options}\n.save {' '.join(saved)}\n{models}"
    shared = {GROUND, *supplies}
    for node, volts in supplies.items():
        built.V(node, node, GROUND, f"DC {volts!r}")
    for copy, cards in elements.items():
        for card in cards:
            _add(built, card, row, copy, shared, alterable=alterable)
    return built


def pair_of_drives(
    cards: Sequence[Card], drives: Mapping[str, tuple[float, float]] = DRIVES
) -> dict[str, list[Card]]:
    """Put a circuit behind two generators, in a copy for each drive.

    Parameters
    ----------
    cards : sequence of Element or Instance
        The circuit between the generators and its output.
    drives : mapping of str to (float, float)
        Amplitudes in volts of the plus and the minus generator, by the suffix of the copy.

    Returns
    -------
    dict of str to list of Element or Instance
        As `circuit` takes them.
    """
    return {
        copy: [
            *(
                Element(f"V{generator}", "V", (generator, GROUND), np.full(1, amplitude))
                for generator, amplitude in zip(GENERATORS, amplitudes, strict=True)
            ),
            *cards,
        ]
        for copy, amplitudes in drives.items()
    }


def netlist(
    cards: Sequence[Card],
    *,
    models: str = "",
    supplies: Mapping[str, float] = {},
    nonlinear: bool = False,
    watched: Sequence[str] = (),
    drives: Mapping[str, tuple[float, float]] = DRIVES,
    alterable: bool = False,
) -> str:
    """Write the netlist of one case, a copy for each drive.

    Parameters
    ----------
    cards : sequence of Element or Instance
        The circuit between the generators and its output, its elements with one value each.
    models : str
        Definitions of the subcircuits that instances name.
    supplies : mapping of str to float
        Nodes that both copies share, and their DC voltages.
    nonlinear : bool
        Whether the circuit has an operating point.
    watched : sequence of str
        Further nodes whose voltages are wanted.
    drives : mapping of str to (float, float)
        As for `pair_of_drives`.
    alterable : bool
        Whether the values of `ALTERABLE` elements stand in models.

    Returns
    -------
    str
        SPICE text without analyses and without `.end`. Every number is written so that it reads back to
        the same double.
    """
    saved = [f"v({OUTPUT}_{copy})" for copy in drives]
    own = [node for node in watched if node != OUTPUT and node not in supplies]
    saved += [f"v({node}_{copy})" for copy in drives for node in own]
    saved += [f"v({node})" for node in watched if node in supplies]
    copies = pair_of_drives(cards, drives)
    built = circuit(
        copies, saved=saved, models=models, supplies=supplies, nonlinear=nonlinear, alterable=alterable
    )
    return str(built)


def standalone(text: str, analyses: Sequence[str], comment: str) -> str:
    """Complete a netlist to a deck that `ngspice -b` runs to the same curve.

    Parameters
    ----------
    text : str
        What `netlist` wrote.
    analyses : sequence of str
        AC analyses, such as "ac dec 20 1.0 1000000.0".
    comment : str
        One line that says which case it is; characters that could end the line are replaced.

    Returns
    -------
    str
        A deck that prints, for each analysis, the complex output of both copies and CMRR in dB.
    """
    title, _, body = text.partition("\n")
    printable = "".join(c if c.isprintable() and c.isascii() else "?" for c in comment)
    common, differential = (f"{OUTPUT}_{copy}" for copy in COPIES)
    control = [".control", "set numdgt=12", "set nopage"]
    for analysis in analyses:
        control += [f"echo {analysis}", analysis, f"let cmrr_db = db({differential}) - db({common})"]
        control += [f"print {common} {differential} cmrr_db"]
    control += ["quit", ".endc", ".end", ""]
    return "\n".join([title, f"* {printable}", body.rstrip("\n"), *control])
