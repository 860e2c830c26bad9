"""Coherence: what the keys of a spec must agree on between them.

The checks look at which keys the document has, so that they find their faults even where single values are
refused.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping

from modepair.sweeps.axes import MOST_CASES
from modepair.sweeps.document import Document, Location, Node
from modepair.sweeps.faults import Fault, RefusedError, shown
from modepair.sweeps.imported import imported_faults
from modepair.sweeps.parts import OPAMP_PARAMETERS, REQUIRED_PARAMETERS, SHORTHANDS, Topology
from modepair.sweeps.quantities import FREQUENCY
from modepair.sweeps.schema import MOST_SPOTS, OPAMP_NAME, SPOT_MATCH
from modepair.sweeps.stage_circuits import NETLIST, circuit_faults
from modepair.sweeps.vocabulary import BUILT_IN, STAGES, Vocabulary
from modepair.sweeps.words import listed, suggestion


class Coherence:
    """The checks over one document.

    Parameters
    ----------
    document
        The spec as read.
    names
        Names of all op-amp candidates.
    all_named
        Whether every candidate file could be read, so that a name not in `names` is unknown.
    vocabulary
        What the spec may name.
    """

    def __init__(
        self,
        document: Document,
        names: Collection[str],
        *,
        all_named: bool = True,
        vocabulary: Vocabulary = BUILT_IN,
    ) -> None:
        self.document = document
        self.names = names
        self.all_named = all_named
        self.vocabulary = vocabulary
        vary = document.node(("vary",))
        self.axes: dict[str, Node] = dict(vary.entries or {}) if vary else {}
        self.used = [text for _, text in self._words("stage.topology") if text in STAGES]
        self.topologies = [vocabulary.topologies[text] for text in self.used if text in vocabulary.topologies]
        self.instances = sorted({instance for t in self.topologies for instance in t.opamps})

    def faults(self) -> Iterator[Fault]:
        """Yield every fault found, in no particular order."""
        yield from self._cases()
        yield from self._frequency()
        if self.document.has(("stage",)):
            yield from self._topology()
            yield from circuit_faults(self.document, self.used, self.vocabulary.circuit, self.axes)
            yield from self._opamps()
        yield from self._overridden()
        yield from self._candidates()

    def _text(self, path: tuple[str | int, ...]) -> str | None:
        node = self.document.node(path)
        return node.text if node else None

    def _given(self, path: str) -> bool:
        """Whether a setting has a value, in place or as an axis."""
        return path in self.axes or self.document.has(tuple(path.split(".")))

    def _place_of(self, path: str) -> Location:
        """Where a setting is given: its axis where there is one."""
        return ("vary", path) if path in self.axes else tuple(path.split("."))

    def _words(self, path: str) -> list[tuple[Location, str]]:
        """Return the texts in use for a setting with their locations: of its axis, else of its key."""
        if path in self.axes:
            items = self.axes[path].items or []
            return [(("vary", path, i), item.text.strip()) for i, item in enumerate(items) if item.text]
        location = tuple(path.split("."))
        text = self._text(location)
        return [(location, text.strip())] if text else []

    def _cases(self) -> Iterator[Fault]:
        count = 1
        lengths = []
        for node in self.axes.values():
            lengths.append(max(1, len(node.items or [])))
            count *= lengths[-1]
        if count > MOST_CASES:
            product = " x ".join(map(str, lengths[:10])) + (" x ..." if len(lengths) > 10 else "")
            yield self.document.fault(
                ("vary",),
                f"the axes make {count:,} cases ({product}); "
                f"at most {MOST_CASES:,} are taken, so shorten an axis",
                at_key=True,
            )

    def _frequency(self) -> Iterator[Fault]:
        def value(*location: str | int) -> float | None:
            try:
                return FREQUENCY.parse(self._text(("frequency", *location)))
            except RefusedError:
                return None

        start, stop = value("start"), value("stop")
        if start is not None and stop is not None and stop < start:
            written = (
                f"{self._text(('frequency', 'stop'))} is below start, {self._text(('frequency', 'start'))}"
            )
            yield self.document.fault(
                ("frequency", "stop"), f"{written}; stop takes a frequency from start upwards"
            )
            return
        node = self.document.node(("frequency", "spots"))
        items = (node.items or []) if node else []
        if len(items) > MOST_SPOTS:
            message = f"there are {len(items)} spots; at most {MOST_SPOTS} are taken"
            yield self.document.fault(("frequency", "spots"), message, at_key=True)
            return
        seen: list[tuple[float, int]] = []
        for index, item in enumerate(items):
            spot = value("spots", index)
            if spot is None:
                continue
            text = shown(item.text or "")
            location: Location = ("frequency", "spots", index)
            if start is not None and stop is not None and not start <= spot <= stop:
                ends = f"{self._text(('frequency', 'start'))} to {self._text(('frequency', 'stop'))}"
                yield self.document.fault(
                    location, f"{text} lies outside start..stop; spots lie within {ends}"
                )
            twice = next((i for other, i in seen if abs(other - spot) <= SPOT_MATCH * spot), None)
            if twice is not None:
                yield self.document.fault(location, f"{text} is among the spots twice; remove one of them")
            seen.append((spot, index))

    def _topology(self) -> Iterator[Fault]:
        if not self._given("stage.topology"):
            known = listed(STAGES)
            yield self.document.fault(("stage",), f"topology is missing; give one of {known}", at_key=True)
        if not self.topologies:
            return
        in_use = " and ".join(topology.name for topology in self.topologies)
        known_parts = [
            part
            for part in self.vocabulary.parts
            if any(part in topology.parts for topology in self.topologies)
        ]
        for path in self._paths("stage.parts"):
            name = path.removeprefix("stage.parts.")
            instance, dot, parameter = name.partition(".")
            location = self._place_of(path)
            if dot and parameter in OPAMP_PARAMETERS and instance in self.vocabulary.instances:
                if instance not in self.instances:
                    has = listed(self.instances) or "none"
                    message = f"the {in_use} stage has no {instance}; its op-amps are {has}"
                    yield self.document.fault(location, message, at_key=True)
            elif name in self.vocabulary.stage_part_kinds and name not in known_parts:
                message = f"the {in_use} stage has no {name}; its parts are {listed(known_parts)}"
                yield self.document.fault(location, message, at_key=True)
        for topology in self.topologies:
            yield from self._required(topology)

    def _paths(self, section: str) -> list[str]:
        node = self.document.node(tuple(section.split(".")))
        placed = [f"{section}.{key}" for key in (node.entries or {} if node else {})]
        return placed + [path for path in self.axes if path.startswith(f"{section}.") and path not in placed]

    def _required(self, topology: Topology) -> Iterator[Fault]:
        gain = self._given("stage.gain")
        both = [part for part in topology.set_by_gain if gain and self._given(f"stage.parts.{part}")]
        for part in both:
            message = (
                f"gain sets {part} of the {topology.name} stage, which is also given; leave one of them out"
            )
            yield self.document.fault(self._place_of(f"stage.parts.{part}"), message, at_key=True)
        set_by_gain = topology.set_by_gain if gain else ()
        missing = [
            part
            for part in topology.required
            if part not in set_by_gain and not self._given(f"stage.parts.{part}")
        ]
        section = self.document.node(("stage", "parts"))
        if missing and (section is None or section.entries is not None):
            instead = ""
            if not gain and any(part in topology.set_by_gain for part in missing):
                instead = f" (or gain, which sets {listed(topology.set_by_gain)})"
            location = ("stage", "parts") if section else ("stage",)
            message = (
                f"the {topology.name} stage needs {listed(missing)}{instead}; give a value for each in parts"
            )
            yield self.document.fault(location, message, at_key=True)

    def _opamps(self) -> Iterator[Fault]:
        one = self._given("stage.opamp")
        each = [path.removeprefix("stage.opamps.") for path in self._paths("stage.opamps")]
        has_each = bool(each) or self.document.has(("stage", "opamps"))
        if one and has_each:
            location = self._place_of("stage.opamp")
            message = "opamp and opamps are both given; leave one of them out"
            yield self.document.fault(location, message, at_key=True)
        # Of an own circuit that could not be read, nobody knows whether it has op-amps.
        told = NETLIST not in self.used or NETLIST in self.vocabulary.topologies
        needed = bool(self.instances) or not self.topologies
        if told and needed and not one and not has_each:
            message = "opamp is missing; name a candidate for every op-amp, or one for each under opamps"
            yield self.document.fault(("stage",), message, at_key=True)
        if not needed and one:
            message = "opamp has no effect, as the stage has no op-amp; remove it"
            yield self.document.fault(self._place_of("stage.opamp"), message, at_key=True)
        for path in ("stage.opamp", *(f"stage.opamps.{instance}" for instance in each)):
            for location, name in self._words(path):
                if self.all_named and name not in self.names and OPAMP_NAME.pattern.fullmatch(name):
                    near = (
                        suggestion(name, self.names)
                        or f"; known candidates: {listed(sorted(self.names)[:20])}"
                    )
                    if not self.names:
                        near = "; give it under opamps or in one of the opamp_files"
                    yield self.document.fault(location, f"there is no op-amp candidate {shown(name)}{near}")
        if not self.topologies or not has_each:
            return
        in_use = " and ".join(topology.name for topology in self.topologies)
        for instance in each:
            if instance in self.vocabulary.instances and instance not in self.instances:
                has = listed(self.instances) or "none"
                message = f"the {in_use} stage has no {instance}; its op-amps are {has}"
                yield self.document.fault(self._place_of(f"stage.opamps.{instance}"), message, at_key=True)
        missing = [instance for instance in self.instances if instance not in each]
        if missing and not one:
            location = ("stage", "opamps") if self.document.has(("stage", "opamps")) else ("stage",)
            needs = f"the {in_use} stage needs op-amps {listed(self.instances)}"
            message = f"{needs}; name one for {listed(missing)} too"
            yield self.document.fault(location, message, at_key=True)

    def _overridden(self) -> Iterator[Fault]:
        for path, parts in SHORTHANDS.items():
            section = path.split(".")[0]
            if self._given(path) and all(self._given(f"{section}.parts.{part}") for part in parts):
                message = (
                    f"this has no effect, as {section}.parts gives {listed(parts)}; leave one of them out"
                )
                yield self.document.fault(self._place_of(path), message, at_key=True)

    def _candidates(self) -> Iterator[Fault]:
        used = {text for path in self._used_paths() for _, text in self._words(path)}
        for path in self.axes:
            section, _, rest = path.partition(".")
            name, _, parameter = rest.rpartition(".")
            if (
                section == "opamps"
                and name in self.names
                and parameter in OPAMP_PARAMETERS
                and name not in used
            ):
                message = f"no op-amp of the stage is {shown(name)}, so this axis has no effect; remove it"
                yield self.document.fault(("vary", path), message, at_key=True)
        node = self.document.node(("opamps",))
        for name, candidate in (node.entries or {} if node else {}).items():
            if candidate.entries is not None:
                axes = {path.rpartition(".")[2] for path in self.axes if path.startswith(f"opamps.{name}.")}
                yield from candidate_faults(self.document, name, candidate.entries, axes)

    def _used_paths(self) -> list[str]:
        return ["stage.opamp", *(f"stage.opamps.{instance}" for instance in self.vocabulary.instances)]


def candidate_faults(
    document: Document, name: str, entries: Mapping[str, Node], axes: Collection[str] = ()
) -> Iterator[Fault]:
    """Yield what is missing or without effect in one candidate.

    Parameters
    ----------
    document
        The file that holds it.
    name
        The candidate's name.
    entries
        Its keys.
    axes
        Parameters of it that axes give.
    """
    yield from imported_faults(document, name, entries)
    for parameter in () if "file" in entries else REQUIRED_PARAMETERS:
        if parameter not in entries and parameter not in axes:
            example = OPAMP_PARAMETERS[parameter].takes
            message = f"{parameter} is missing; it takes {example}"
            yield document.fault(("opamps", name), message, at_key=True)
    for parameter in ("cmrr_corner", "cmrr_sign"):
        if parameter in entries and "cmrr" not in entries and "cmrr" not in axes:
            message = f"{parameter} has no effect without cmrr; give cmrr too, or remove it"
            yield document.fault(("opamps", name, parameter), message, at_key=True)
