"""Tolerances: what varies from board to board, by how much and how."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Annotated, Any

import numpy as np
from pydantic import Field, ValidationError

from modepair.sweeps.document import Document, Location, join_path
from modepair.sweeps.faults import Fault, RefusedError, form_of, shown
from modepair.sweeps.leaves import Reads, ReadsInContext
from modepair.sweeps.parts import OPAMP_PARAMETERS, Topology
from modepair.sweeps.quantities import COUNT, DECIBELS, FRACTION
from modepair.sweeps.schema import Section
from modepair.sweeps.stage_circuits import INSTANCE_NAME, PART_NAME
from modepair.sweeps.vocabulary import BUILT_IN, Vocabulary
from modepair.sweeps.words import Choice, listed, suggestion

if TYPE_CHECKING:
    from modepair.sweeps.cases import Block

__all__ = ["MOST_DRAWS", "MOST_RESULTS", "Tolerance", "ToleranceEntry", "tolerance_faults", "varied_faults"]

MOST_DRAWS = 1_000_000
"""Draws of a case."""

MOST_RESULTS = 20_000_000
"""Draws of all cases together."""

WIDEST_NORMAL = 1 / 3
"""Widest tolerance with a normal distribution: no value at all is then nine sigma away, beyond any draw."""

DISTRIBUTIONS = ("rectangular", "normal", "triangular", "two-point")
SAMPLINGS = ("random", "latin-hypercube", "sobol")

_SHARE = replace(FRACTION, noun="a tolerance", least=1e-9, most=0.999999, zero=False, example="0.1 %")
_LEAST = replace(DECIBELS, noun="a least CMRR in dB", example="100 dB")
_SEED = replace(COUNT, noun="a seed", least=0, most=2**53, zero=True, example="7")
_DRAWS = replace(COUNT, noun="a number of draws", most=MOST_DRAWS, example="2000")


_ENTRIES = "at least one entry, such as {of: [R1, R2], absolute: 0.1 %}"


@dataclass(frozen=True)
class _ToleranceName:
    """Reads the name of a part or of an op-amp's parameter.

    Parameters
    ----------
    known
        What the spec may name.
    """

    known: Vocabulary = BUILT_IN
    takes: str = "names of parts or op-amp parameters, such as R1, CCP or A1.gain_bandwidth"

    def parse(self, written: object) -> str:
        """Return the name; raise `RefusedError` with the nearest known one for any other."""
        if not isinstance(written, str):
            raise RefusedError(form_of(written), self.takes)
        text = written.strip()
        if text not in self.known.varying:
            near = suggestion(text, self.known.varying)
            raise RefusedError(f"{shown(text)} is no part{near}", self.takes)
        if text.endswith(".cmrr_sign"):
            raise RefusedError(
                f"{text} has no tolerance of its own", "the cmrr instead, with least: its sign varies with it"
            )
        return text

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of a name."""
        known = [name for name in self.known.varying if not name.endswith(".cmrr_sign")]
        parameters = "|".join(name for name in OPAMP_PARAMETERS if name != "cmrr_sign")
        own = f"^({PART_NAME.pattern}|{INSTANCE_NAME.pattern}\\.({parameters}))$"
        return {"anyOf": [{"type": "string", "enum": known}, {"type": "string", "pattern": own}]}


class ToleranceEntry(Section):
    """One entry: parts that vary alike.

    Parameters
    ----------
    of
        Names of parts, or of op-amp parameters such as ``A1.gain_bandwidth``.
    absolute
        Bound of the relative error: of each part, or with `matching` of the whole set together.
    matching
        Bound of each part's relative error within the set.
    least
        For op-amps' CMRR: the data sheet's minimum, a ratio; None: each op-amp's own `cmrr`. The signed
        reciprocal of CMRR varies about zero, three sigma (or the bound) at 1/least.
    distribution
        rectangular, normal (the tolerance is 3 sigma), triangular or two-point. None: normal for CMRR,
        else rectangular, since a bound is all that is known (JCGM 101:2008, 6.4.2).
    """

    of: tuple[Annotated[str, ReadsInContext(_ToleranceName)], ...]
    absolute: Annotated[float, Reads(_SHARE)] | None = None
    matching: Annotated[float, Reads(_SHARE)] | None = None
    least: Annotated[float, Reads(_LEAST)] | None = None
    distribution: Annotated[str, Reads(Choice("a distribution", DISTRIBUTIONS))] | None = None

    @property
    def law(self) -> str:
        """The distribution that holds."""
        return self.distribution or ("normal" if self.reciprocal else "rectangular")

    @property
    def reciprocal(self) -> bool:
        """Whether it is about op-amps' CMRR, whose signed reciprocal varies."""
        return all(name.endswith(".cmrr") for name in self.of)


class Tolerance(Section):
    """The tolerances of a spec.

    Parameters
    ----------
    draws
        Boards to draw for each case.
    seed
        Whole number from which all draws follow.
    sampling
        random, latin-hypercube or sobol.
    keep
        quantiles, or curves to keep every draw's curve.
    parts
        The entries.
    """

    draws: Annotated[float, Reads(_DRAWS)]
    seed: Annotated[float, Reads(_SEED)] = 1
    sampling: Annotated[str, Reads(Choice("a way of sampling", SAMPLINGS))] = "random"
    keep: Annotated[str, Reads(Choice("a way to keep draws", ("quantiles", "curves")))] = "quantiles"
    parts: tuple[ToleranceEntry, ...] = Field(min_length=1)


def tolerance_faults(
    document: Document, stages: Sequence[Topology], axes: Mapping[str, Any], vocabulary: Vocabulary
) -> Iterator[Fault]:
    """Yield what the entries of a tolerance section do not agree on.

    Parameters
    ----------
    document
        The spec as read.
    stages
        The stages in use.
    axes
        Paths of the axes, as keys.
    vocabulary
        What the spec may name.
    """
    section = document.node(("tolerance",))
    if section is not None and section.entries is not None:
        for key, takes in (("draws", _DRAWS.limits), ("parts", _ENTRIES)):
            if key not in section.entries:
                yield document.fault(("tolerance",), f"{key} is missing; it takes {takes}", at_key=True)
    node = document.node(("tolerance", "parts"))
    items = (node.items or []) if node else []
    if node is not None and node.items == []:
        yield document.fault(("tolerance", "parts"), f"the list is empty; parts takes {_ENTRIES}")
    seen: dict[str, str] = {}
    for index, item in enumerate(items):
        place = ("tolerance", "parts", index)
        keys = set(item.entries or {})
        varied = {
            key for key in ("absolute", "matching", "least") if f"tolerance.parts[{index}].{key}" in axes
        }
        try:
            entry = ToleranceEntry.model_validate(item.raw, context=vocabulary)
        except ValidationError:
            entry = None
        if item.entries and "of" not in item.entries:
            yield document.fault(place, f"of is missing; it takes {_ToleranceName.takes}")
        names = entry.of if entry else ()
        if entry and not names:
            yield document.fault((*place, "of"), "the list is empty; of takes at least one part")
        for position, name in enumerate(names):
            at = (*place, "of", position)
            if stages and not any(_has(stage, name, vocabulary) for stage in stages):
                in_use = " and ".join(stage.name for stage in stages)
                yield document.fault(at, f"the {in_use} stage has no {name}; {_known(stages, name)}")
            if name in seen:
                yield document.fault(at, f"{name} has a tolerance already, at {seen[name]}; give it once")
            seen.setdefault(name, _where(document, at))
        given = keys | varied
        of_cmrr = bool(names) and all(name.endswith(".cmrr") for name in names)
        if entry and not of_cmrr and not given & {"absolute", "least"}:
            yield document.fault(place, f"absolute is missing; it takes {_SHARE.takes}")
        yield from _cmrr_faults(document, place, names, given)
        if entry and not of_cmrr:
            values = {key: _values(document, axes, (*place, key)) for key in ("absolute", "matching")}
            yield from _matching_faults(document, place, entry, values, vocabulary)
            yield from _normal_faults(document, entry, values)
    for path in axes:
        if path.startswith("tolerance.parts["):
            index = int(path.removeprefix("tolerance.parts[").partition("]")[0])
            if index >= len(items):
                entries = f"its entries are 0 to {len(items) - 1}" if items else "it has no entries"
                yield document.fault(
                    ("vary", path), f"the tolerance section has no parts[{index}]; {entries}", at_key=True
                )


def _where(document: Document, location: tuple[str | int, ...]) -> str:
    place = document.value_place(location)
    return f"line {place.line}"


def _has(stage: Topology, name: str, vocabulary: Vocabulary) -> bool:
    instance, dot, _ = name.partition(".")
    if dot:
        return instance in stage.opamps
    return vocabulary.parts[name].section == "source" or name in stage.parts


def _known(stages: Sequence[Topology], name: str) -> str:
    if "." in name:
        return f"its op-amps are {listed(sorted({a for stage in stages for a in stage.opamps})) or 'none'}"
    return f"its parts are {listed(dict.fromkeys(part for stage in stages for part in stage.parts))}"


def _cmrr_faults(
    document: Document, place: tuple[str | int, ...], names: Sequence[str], given: set[str]
) -> Iterator[Fault]:
    cmrr = [name for name in names if name.endswith(".cmrr")]
    if cmrr and len(cmrr) < len(names):
        other = next(name for name in names if name not in cmrr)
        yield document.fault(
            place, f"{cmrr[0]} and {other} cannot share an entry; give CMRR an entry of its own"
        )
    elif cmrr and given & {"absolute", "matching"}:
        key = "absolute" if "absolute" in given else "matching"
        yield document.fault(
            (*place, key), f"{cmrr[0]} takes least, such as 100 dB, in place of {key}", at_key=True
        )
    elif names and not cmrr and "least" in given:
        yield document.fault(
            (*place, "least"),
            f"{names[0]} takes absolute, such as 0.1 %; least is for op-amps' cmrr",
            at_key=True,
        )


Written = list[tuple[Location, str, float]]
"""Where a value stands, its text, and the value."""


def _values(document: Document, axes: Mapping[str, Any], place: Location) -> Written:
    """Return the values that an entry's key takes: of its axis where there is one; those that can be read."""
    path = join_path(place)
    places: list[Location] = [place]
    if path in axes:
        places = [("vary", path, index) for index in range(len(axes[path].items or []))]
    found: Written = []
    for at in places:
        node = document.node(at)
        text = (node.text or "").strip() if node else ""
        try:
            found.append((at, text, _SHARE.parse(text)))
        except RefusedError:
            continue
    return found


def _matching_faults(
    document: Document,
    place: Location,
    entry: ToleranceEntry,
    values: Mapping[str, Written],
    vocabulary: Vocabulary,
) -> Iterator[Fault]:
    if not values["matching"]:
        return
    first = values["matching"][0][0]
    if len(entry.of) == 1:
        key = first if first[0] == "tolerance" else first[:2]
        message = f"{entry.of[0]} alone cannot match anything; matching takes a set of two or more parts"
        yield document.fault(key, message, at_key=True)
    units = {vocabulary.varying[name].unit for name in entry.of}
    if len(units) > 1:
        message = "parts of different kinds cannot form a matched set; give each kind an entry of its own"
        yield document.fault(place, message)
    narrowest = min((value for _, _, value in values["absolute"]), default=1.0)
    for at, text, value in values["matching"]:
        if value > narrowest:
            allowed = "parts of a set match at least as well as absolute says"
            yield document.fault(at, f"{shown(text)} is wider than absolute; {allowed}")


def _normal_faults(
    document: Document, entry: ToleranceEntry, values: Mapping[str, Written]
) -> Iterator[Fault]:
    if entry.law != "normal":
        return
    for at, text, value in (one for written in values.values() for one in written):
        if value > WIDEST_NORMAL:
            message = "is too wide for a normal distribution, whose tails would reach zero"
            yield document.fault(at, f"{shown(text)} {message}; give at most 33 %, or another distribution")


def varied_faults(
    document: Document, tolerance: Tolerance, blocks: Sequence[Block], results: int
) -> Iterator[Fault]:
    """Yield the parts of a tolerance section that have no value in any case, or that its bounds take where no board can
    be; and a product that is too large.

    Parameters
    ----------
    document
        The spec as read.
    tolerance
        Its tolerance section.
    blocks
        All its cases.
    results
        Draws of all cases together.
    """
    valued = {name for block in blocks for name in (*block.parts, *block.tolerances)}
    for index, entry in enumerate(tolerance.parts):
        for position, name in enumerate(entry.of):
            at = ("tolerance", "parts", index, "of", position)
            if name in valued:
                yield from _margin_faults(document, at, name, entry.reciprocal, blocks, index)
            elif not (entry.reciprocal and f"tolerance.parts[{index}].least" in valued):
                yield document.fault(
                    at,
                    f"{name} has no value in any case, so it cannot vary; give it one, or take it out here",
                )
    if results > MOST_RESULTS:
        message = (
            f"the cases make {results:,} draws together; at most {MOST_RESULTS:,} are taken, so draw less or "
            "shorten an axis"
        )
        yield document.fault(("tolerance", "draws"), message)


def _margin_faults(
    document: Document, at: Location, name: str, reciprocal: bool, blocks: Sequence[Block], index: int
) -> Iterator[Fault]:
    """Yield a phase margin that some board would have beyond what one second pole can give."""
    if reciprocal or not name.endswith(".phase_margin"):
        return
    most = OPAMP_PARAMETERS["phase_margin"].most
    highest = 0.0
    for block in blocks:
        if name in block.parts:
            value = np.asarray(block.parts[name], dtype=np.float64)
            for key in ("absolute", "matching"):
                value = value * (1.0 + block.tolerances.get(f"tolerance.parts[{index}].{key}", 0.0))
            highest = max(highest, float(value.max()))
    if highest > most:
        yield document.fault(
            at,
            f"{name} would reach {highest:.4g} degrees; one second pole gives at most {most:g}, so narrow the "
            "tolerance, or leave phase_margin out for a single pole",
        )
