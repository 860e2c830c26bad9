"""The reader: from a YAML file to a spec, with every fault of the file in one go."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from modepair.sweeps.axes import Axis, read_axis, settings
from modepair.sweeps.cases import expand, gain_faults
from modepair.sweeps.coherence import Coherence, candidate_faults
from modepair.sweeps.document import Document, Location, parse_document, read_document
from modepair.sweeps.faults import (
    LONGEST_PATH,
    Fault,
    RefusedError,
    SeveralRefusedError,
    SpecError,
    form_of,
    shown,
)
from modepair.sweeps.imported import SUBCIRCUIT, ineffective_faults
from modepair.sweeps.interference import interference_faults
from modepair.sweeps.leaves import Leaf, UnknownKeyError
from modepair.sweeps.limits import limit_faults
from modepair.sweeps.measured import Measurement, measured_faults, read_measurements
from modepair.sweeps.parts import REQUIRED_PARAMETERS
from modepair.sweeps.schema import FILE_NAME, OPAMP_NAME, Opamp
from modepair.sweeps.spec import CandidateFile, Spec
from modepair.sweeps.stage_circuits import NETLIST, ReadCircuit, StageCircuit, read_ports, unread
from modepair.sweeps.tolerances import tolerance_faults, varied_faults
from modepair.sweeps.vocabulary import Vocabulary
from modepair.sweeps.words import listed, suggestion

_MISSING = {
    "stage": "the stage is missing; give stage with topology, parts and opamp",
    "frequency": "the frequencies are missing; give frequency, such as {start: 1, stop: 1M, spots: [50, 60]}",
    "start": "start is missing; it takes a frequency, such as 1 Hz",
    "stop": "stop is missing; it takes a frequency, such as 1 MHz",
    "opamps": "opamps is missing; the file takes a mapping of op-amp candidates by name",
}


Nested = Mapping[Location, tuple[Fault, ...]]
"""Faults of other files, by the location that names the file."""


def load_spec(
    path: str | Path, candidates: Mapping[str, Opamp] = {}, read_circuit: ReadCircuit | None = None
) -> Spec:
    """Read a sweep spec.

    Parameters
    ----------
    path
        The YAML file.
    candidates
        Built-in op-amp candidates by name; those in the spec's files, and those given in it, go before them.
    read_circuit
        Reads the stage's own circuit; without it a spec that has one is refused.

    Returns
    -------
    Spec
        Frozen, every value in SI units.

    Raises
    ------
    SpecError
        With every fault of the spec, its candidate files and its circuit's file, in file order; where there is
        none, with every fault of its measurements' files.
    """
    document = read_document(path)
    from_files, nested = _read_files(document)
    circuit, its_faults = _read_circuit(document, read_circuit)
    spec, known = _read_spec(document, candidates, from_files, nested, circuit, its_faults)
    return spec.with_measurements(read_measurements(document, spec.measured, spec.axes, known))


def restore_spec(
    text: str,
    file: str,
    candidates: Mapping[str, Opamp],
    measurements: Iterable[Measurement] = (),
    circuit: StageCircuit | None = None,
) -> Spec:
    """Read a spec that was kept as text, without the files that it names.

    Parameters
    ----------
    text
        The spec's text.
    file
        Its file's name, for messages.
    candidates
        Every op-amp candidate that it uses, those of its `opamp_files` among them.
    measurements
        Its measurements, as they were read when it was kept.
    circuit
        Its own circuit, as it was read then.

    Returns
    -------
    Spec
        As `load_spec` returned it then.

    Raises
    ------
    SpecError
        With every fault of the text, in file order.
    """

    def kept(folder: Path, name: str, subcircuit: str) -> StageCircuit:
        if circuit is None:
            raise SpecError([Fault("", 0, 0, "file", f"{shown(name)} was not kept with the spec")])
        return circuit

    document = parse_document(text, file)
    found, its_faults = _read_circuit(document, kept)
    spec, _ = _read_spec(document, candidates, {}, {}, found, its_faults)
    return spec.with_measurements(tuple(measurements))


def _read_circuit(document: Document, read: ReadCircuit | None) -> tuple[StageCircuit | None, Nested]:
    """Read the stage's own circuit, where one is in use; return it, or faults by the location that they are about."""
    axis = document.node(("vary", "stage.topology"))
    given = document.node(("stage", "topology"))
    words = [item.text for item in axis.items or []] if axis else [given.text if given else None]
    if NETLIST not in [(word or "").strip() for word in words]:
        return None, {}
    texts = []
    for key, leaf in (("file", FILE_NAME), ("subcircuit", SUBCIRCUIT)):
        node = document.node(("stage", key))
        try:
            texts.append(leaf.parse(node.raw if node else None))
        except RefusedError:
            return None, {}
    file, subcircuit = texts
    location: Location = ("stage", "file")
    if not file:
        return None, {location: (document.fault(location, "no value is given; a file name is needed"),)}
    if read is None:
        return None, {location: (document.fault(location, unread(file)),)}
    try:
        return read(Path(document.file).parent, file, subcircuit), {}
    except SpecError as error:
        nested: dict[Location, tuple[Fault, ...]] = {}
        for fault in error.faults:
            place = location if fault.line else ("stage", fault.key or "file")
            one = fault if fault.line else document.fault(place, fault.message)
            nested[place] = (*nested.get(place, ()), one)
        return None, nested


OF_CIRCUIT = ("stage.parts.", "stage.opamps.", "tolerance.parts[", "measured[")
"""Beginnings of the keys whose faults may only come of a circuit that could not be read."""


def _may_come_of_circuit(fault: Fault) -> bool:
    key = fault.key.removeprefix("vary.")
    return key.startswith(OF_CIRCUIT)


def _read_spec(
    document: Document,
    candidates: Mapping[str, Opamp],
    from_files: Mapping[str, Opamp],
    nested: Nested,
    circuit: StageCircuit | None,
    circuit_faults: Nested,
) -> tuple[Spec, dict[str, Leaf]]:
    """Read a spec but for its measurements; return also what each setting takes."""
    raw: dict[str, Any] = document.root.raw  # type: ignore[assignment]
    in_place = raw.get("opamps")
    written = [*candidates, *from_files, *(in_place if isinstance(in_place, dict) else ())]
    names = [name for name in dict.fromkeys(written) if OPAMP_NAME.pattern.fullmatch(name)]
    faults = list(document.faults)
    vocabulary = Vocabulary(circuit, read_ports(document)) if circuit else Vocabulary()
    known = settings(names, vocabulary)
    axes, axis_faults = _read_axes(document, raw.get("vary", {}), known)
    faults += [fault for fault in axis_faults if not nested or not fault.key.startswith("vary.opamps.")]
    if isinstance(raw.get("vary"), dict):
        _fill(raw, axes)
        raw["vary"] = {axis.path: axis.labels for axis in axes}
    spec: Spec | None = None
    try:
        spec = Spec.model_validate(raw, context=vocabulary)
    except ValidationError as error:
        faults += model_faults(document, Spec, error)
    coherence = Coherence(document, names, all_named=not nested, vocabulary=vocabulary)
    faults += coherence.faults()
    faults += tolerance_faults(document, coherence.topologies, coherence.axes, vocabulary)
    faults += limit_faults(document)
    faults += interference_faults(document)
    faults += measured_faults(document, axes, known)
    if NETLIST in coherence.used and circuit is None:
        # What the circuit has is not known, so nothing can be said of what is asked of it.
        faults = [fault for fault in faults if not _may_come_of_circuit(fault)]
    ordered = _in_order(document, faults, {**nested, **circuit_faults})
    if ordered:
        raise SpecError(ordered)
    if spec is None or (NETLIST in coherence.used and circuit is None):
        raise SpecError([Fault(document.file, 0, 0, "", "the file cannot be read as a spec")])
    in_place_ones = {name: opamp.named(name, document) for name, opamp in spec.opamps.items()}
    bound = spec.bind(document, {**candidates, **from_files, **in_place_ones}, axes, vocabulary)
    faults = [*gain_faults(bound), *ineffective_faults(bound)]
    if spec.tolerance and not faults:
        sweep = expand(bound)
        results = sweep.count * int(spec.tolerance.draws)
        faults = list(varied_faults(document, spec.tolerance, sweep.blocks, results))
    faults.sort(key=lambda fault: (fault.line, fault.column))
    if faults:
        raise SpecError(faults)
    return bound, known


def read_candidates(path: str | Path) -> dict[str, Opamp]:
    """Read a file of op-amp candidates, whose only key is ``opamps``.

    Parameters
    ----------
    path
        The YAML file.

    Returns
    -------
    dict of str to Opamp
        The candidates by name, in file order.

    Raises
    ------
    SpecError
        With every fault of the file, in file order.
    """
    document = read_document(path)
    faults = list(document.faults)
    node = document.node(("opamps",))
    for name, candidate in (node.entries or {} if node else {}).items():
        if candidate.entries is not None:
            faults += candidate_faults(document, name, candidate.entries)
    try:
        read = CandidateFile.model_validate(document.root.raw)
    except ValidationError as error:
        faults += model_faults(document, CandidateFile, error)
        read = None
    ordered = _in_order(document, faults, {})
    if ordered or read is None:
        raise SpecError(ordered)
    return {name: opamp.named(name, document) for name, opamp in read.opamps.items()}


def _read_files(document: Document) -> tuple[dict[str, Opamp], dict[Location, tuple[Fault, ...]]]:
    """Read the spec's candidate files; return candidates, and faults by the location that names the file."""
    found: dict[str, Opamp] = {}
    source: dict[str, str] = {}
    nested: dict[Location, tuple[Fault, ...]] = {}
    node = document.node(("opamp_files",))
    for index, item in enumerate((node.items or []) if node else []):
        location: Location = ("opamp_files", index)
        try:
            written = FILE_NAME.parse(item.raw)
        except RefusedError:
            continue
        if not written:
            nested[location] = (document.fault(location, "no value is given; a file name is needed"),)
            continue
        path = Path(document.file).parent / written
        try:
            read = read_candidates(path)
        except SpecError as error:
            nested[location] = tuple(
                fault
                if fault.line
                else document.fault(
                    location,
                    f"{shown(written)} cannot be used: {fault.message} "
                    f"(looked for {shown(str(path), LONGEST_PATH)}; paths start at the spec's folder)",
                )
                for fault in error.faults
            )
            continue
        for name in read:
            if name in found:
                both = f"{shown(written)} and in {shown(source[name])}"
                message = f"{name} is in {both}; rename or remove one of them"
                nested[location] = (*nested.get(location, ()), document.fault(location, message))
            found[name] = read[name]
            source[name] = written
    return found, nested


def _read_axes(
    document: Document, written: object, known: Mapping[str, Any]
) -> tuple[tuple[Axis, ...], list[Fault]]:
    axes: list[Axis] = []
    faults: list[Fault] = []
    if not isinstance(written, dict):
        return (), []
    for path, values in written.items():
        location: Location = ("vary", path)
        try:
            axes.append(read_axis(path, values, known))
        except UnknownKeyError as refusal:
            faults.append(document.fault(location, refusal.what, at_key=True))
        except RefusedError as refusal:
            faults.append(document.fault(location, refusal.message("an axis")))
        except SeveralRefusedError as refusals:
            name = path.rpartition(".")[2]
            faults += [
                document.fault((*location, *where), one.message(name)) for where, one in refusals.refusals
            ]
    return tuple(axes), faults


def _fill(raw: dict[str, Any], axes: Sequence[Axis]) -> None:
    """Put the first value of an axis where the model requires a value that only the axis gives."""
    for axis in axes:
        section, _, rest = axis.path.partition(".")
        name, _, parameter = rest.rpartition(".")
        if axis.path == "stage.topology" and isinstance(raw.get("stage"), dict):
            raw["stage"].setdefault("topology", axis.labels[0])
        elif section == "opamps" and parameter in REQUIRED_PARAMETERS:
            in_place = raw.get("opamps")
            candidate = in_place.get(name) if isinstance(in_place, dict) else None
            if isinstance(candidate, dict):
                candidate.setdefault(parameter, axis.labels[0])


def model_faults(document: Document, model: type[BaseModel], error: ValidationError) -> Iterator[Fault]:
    """Turn pydantic's errors into faults of the document, in our own words."""
    for item in error.errors(include_url=False, include_input=False):
        location: Location = item["loc"]
        name = str(next((token for token in reversed(location) if isinstance(token, str)), ""))
        raised = item.get("ctx", {}).get("error")
        if isinstance(raised, SeveralRefusedError):
            for where, refusal in raised.refusals:
                inner = (*location, *where)
                at_key = isinstance(refusal, UnknownKeyError)
                yield document.fault(inner, refusal.message(str(inner[-1])), at_key=at_key)
        elif isinstance(raised, RefusedError):
            yield document.fault(location, raised.message(name))
        elif item["type"] == "missing":
            if name in _MISSING and location[0] != "measured":
                yield document.fault(location[:-1], _MISSING[name], at_key=True)
        elif item["type"] == "too_short":
            # pydantic counts only items that it could read; a list that is empty has a fault of its section's own.
            continue
        elif item["type"] == "extra_forbidden":
            known = _fields_at(model, location[:-1])
            near = suggestion(name, known) or f"; known keys: {listed(known)}"
            yield document.fault(location, f"{shown(name)} is not a known key{near}", at_key=True)
        else:
            yield document.fault(location, _form_message(document, location, name, item["type"]))


def _form_message(document: Document, location: Location, name: str, problem: str) -> str:
    node = document.node(location)
    what = form_of(node.raw if node else None)
    wanted = "a list" if problem in ("tuple_type", "list_type") else "a mapping of keys"
    return f"{what}; {name or 'this'} takes {wanted}"


def _fields_at(model: type[BaseModel], location: Location) -> list[str]:
    """Return the keys that the section at `location` takes."""
    current = model
    for token in location:
        information = _by_key(current).get(token) if isinstance(token, str) else None
        if information is None:
            continue
        for candidate in (information.annotation, *getattr(information.annotation, "__args__", ())):
            if isinstance(candidate, type) and issubclass(candidate, BaseModel):
                current = candidate
    return list(_by_key(current))


def _by_key(model: type[BaseModel]) -> dict[str, FieldInfo]:
    return {field.alias or name: field for name, field in model.model_fields.items()}


def _in_order(document: Document, faults: Sequence[Fault], nested: Nested) -> list[Fault]:
    """Sort faults as they stand in the file, those of another file where it is named; drop doubles."""
    placed = [((f.line, f.column), f) for f in faults if not _is_unread(document, f)]
    for location, others in nested.items():
        place = document.value_place(location)
        placed += [((place.line, place.column), fault) for fault in others]
    placed.sort(key=lambda pair: pair[0])
    return list(dict.fromkeys(fault for _, fault in placed))


def _is_unread(document: Document, fault: Fault) -> bool:
    """Whether a fault is about a value that the document's reader already refused."""
    here = any(place.line == fault.line and place.column == fault.column for place in document.unread)
    return here and fault not in document.faults
