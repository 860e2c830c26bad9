"""A sweep spec: what is asked of the simulator, validated and frozen, with the places of its keys."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import Annotated, Any

from pydantic import Field, GetCoreSchemaHandler, GetJsonSchemaHandler, PrivateAttr
from pydantic_core import CoreSchema, core_schema

from modepair.sweeps.axes import Axis, settings
from modepair.sweeps.document import Document, Node, Place, split_path
from modepair.sweeps.faults import RefusedError, SeveralRefusedError
from modepair.sweeps.interference import Interference
from modepair.sweeps.leaves import Reads, UnknownKeyError
from modepair.sweeps.limits import Limits
from modepair.sweeps.measured import Measured, Measurement
from modepair.sweeps.schema import (
    CAUTION,
    FILE_NAME,
    OPAMP_NAME,
    OWN_PART_PATTERNS,
    TITLE,
    Frequency,
    Opamp,
    Section,
    Source,
    Stage,
)
from modepair.sweeps.stage_circuits import INSTANCE_NAME, StageCircuit
from modepair.sweeps.tolerances import Tolerance
from modepair.sweeps.vocabulary import BUILT_IN, Vocabulary


class _NameKeys:
    """Annotation that checks the names of candidates before their values are read."""

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_wrap_validator_function(self._check, handler(source))

    @staticmethod
    def _check(written: object, inner: core_schema.ValidatorFunctionWrapHandler) -> Any:
        if isinstance(written, Mapping):
            refusals: list[tuple[tuple[str | int, ...], RefusedError]] = []
            for name in written:
                try:
                    OPAMP_NAME.parse(name)
                except RefusedError as refusal:
                    message = f"{refusal.what}; a candidate takes {refusal.takes}"
                    refusals.append(((str(name),), UnknownKeyError(message)))
            if refusals:
                raise SeveralRefusedError(refusals)
        return inner(written)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        inner = handler(schema["schema"])
        return {
            "type": "object",
            "additionalProperties": False,
            "patternProperties": {OPAMP_NAME.json_schema()["pattern"]: inner["additionalProperties"]},
        }


class _VarySchema:
    """Annotation that gives editors the known paths of axes."""

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        def axis(item: dict[str, Any]) -> dict[str, Any]:
            return {"type": "array", "items": item, "minItems": 1}

        fixed = {path: axis(leaf.json_schema()) for path, leaf in settings().items()}
        prefix = "opamps.x."
        named = {
            f"^opamps\\.[a-z0-9][a-z0-9_-]*\\.{path.removeprefix(prefix)}$": axis(leaf.json_schema())
            for path, leaf in settings(["x"]).items()
            if path.startswith(prefix)
        }
        named |= {
            f"^stage\\.parts\\.{pattern}$": axis(leaf.json_schema())
            for pattern, leaf in OWN_PART_PATTERNS.items()
        }
        named[f"^stage\\.opamps\\.{INSTANCE_NAME.pattern}$"] = axis(OPAMP_NAME.json_schema())
        return {
            "type": "object",
            "additionalProperties": False,
            "properties": fixed,
            "patternProperties": named,
        }


Candidates = Annotated[dict[str, Opamp], _NameKeys()]


class CandidateFile(Section):
    """A file of op-amp candidates: its only key is ``opamps``."""

    opamps: Candidates


class Spec(Section):
    """A sweep spec.

    Parameters
    ----------
    title
        One line of text.
    cautions
        Ways in which the circuit can hurt people, of which its reports warn: medical, mains, safety.
    stage
        The amplifier stage.
    source
        The source network; by default two ideal generators.
    frequency
        Frequencies at which every case is solved.
    vary
        The axes: values as written, by dotted path, in file order.
    opamps
        Candidates given in place.
    opamp_files
        Files of candidates, relative to the spec's folder.
    interference
        The common-mode voltage whose errors are worked out; None: none.
    limits
        What every case must keep; None: nothing is judged.
    measured
        Measurements of the circuit, to be laid over its curves.
    tolerance
        What varies from board to board; None: nominal runs only.
    """

    title: Annotated[str, Reads(TITLE)] = ""
    cautions: tuple[Annotated[str, Reads(CAUTION)], ...] = ()
    stage: Stage
    source: Source = Field(default_factory=Source)
    frequency: Frequency
    vary: Annotated[dict[str, tuple[str, ...]], _VarySchema()] = Field(default_factory=dict)
    opamps: Candidates = Field(default_factory=dict)
    opamp_files: tuple[Annotated[str, Reads(FILE_NAME)], ...] = ()
    interference: Interference | None = None
    limits: Limits | None = None
    measured: tuple[Measured, ...] = ()
    tolerance: Tolerance | None = None

    _document: Document = PrivateAttr(
        default_factory=lambda: Document("", "", Node(Place(1, 1), entries={}), (), frozenset())
    )
    _candidates: dict[str, Opamp] = PrivateAttr(default_factory=dict)
    _axes: tuple[Axis, ...] = PrivateAttr(default=())
    _measurements: tuple[Measurement, ...] = PrivateAttr(default=())
    _vocabulary: Vocabulary = PrivateAttr(default=BUILT_IN)

    def bind(
        self,
        document: Document,
        candidates: Mapping[str, Opamp],
        axes: tuple[Axis, ...],
        vocabulary: Vocabulary,
    ) -> Spec:
        """Return the spec with what the reader found besides it: its document, all candidates, axes, vocabulary."""
        wanted = [section.frequency_hz for section in (self.limits, self.interference) if section]
        frequency = self.frequency.solving_too(hz for section in wanted for hz in section)
        bound = self.model_copy(update={"frequency": frequency})
        bound._document = document
        bound._candidates = dict(candidates)
        bound._axes = axes
        bound._vocabulary = vocabulary
        return bound

    @property
    def path(self) -> str:
        """The spec's file, as given."""
        return self._document.file

    @property
    def text(self) -> str:
        """The spec's text."""
        return self._document.text

    @property
    def digest(self) -> str:
        """SHA-256 of the spec's text, in hexadecimal."""
        return hashlib.sha256(self.text.encode("utf-8")).hexdigest()

    @property
    def candidates(self) -> dict[str, Opamp]:
        """All op-amp candidates by name: built-in ones, then files, then those given in place."""
        return dict(self._candidates)

    @property
    def axes(self) -> tuple[Axis, ...]:
        """The axes in file order."""
        return self._axes

    @property
    def vocabulary(self) -> Vocabulary:
        """What it may name: the built-in stages with their parts, and its own circuit's."""
        return self._vocabulary

    @property
    def circuit(self) -> StageCircuit | None:
        """Its own circuit, where a stage in use is one."""
        return self._vocabulary.circuit

    @property
    def measurements(self) -> tuple[Measurement, ...]:
        """The measurements, read from their files."""
        return self._measurements

    def with_measurements(self, measurements: tuple[Measurement, ...]) -> Spec:
        """Return the spec with its measurements, which the reader found in their files."""
        bound = self.model_copy()
        bound._measurements = measurements
        return bound

    @property
    def document(self) -> Document:
        """The file as it was read, for messages about its keys."""
        return self._document

    def where(self, key_path: str) -> str:
        """Return ``file:line:column`` of a key, such as ``stage.parts.R1`` or ``vary.stage.opamp[2]``.

        A setting that only an axis gives is found there; else the nearest key above it that exists.
        """
        location = split_path(key_path)
        if not self._document.has(location) and self._document.has(("vary", key_path)):
            location = ("vary", key_path)
        place = self._document.key_place(location)
        return f"{self.path}:{place.line}:{place.column}"

    @property
    def topologies(self) -> tuple[str, ...]:
        """The stages in use: of the axis where there is one, else of the stage."""
        for axis in self._axes:
            if axis.path == "stage.topology":
                return tuple(str(value) for value in axis.values)
        return (self.stage.topology,)

    @property
    def instances(self) -> tuple[str, ...]:
        """The op-amp instances that at least one stage in use has."""
        stages = [self._vocabulary.topologies[name] for name in self.topologies]
        return tuple(sorted({instance for stage in stages for instance in stage.opamps}))


def json_schema() -> dict[str, Any]:
    """Return the JSON Schema of a spec, by which editors complete and check it.

    Returns
    -------
    dict
        JSON Schema, draft 2020-12. Values that an axis may give instead are not listed as required.
    """
    schema = Spec.model_json_schema()
    definitions = schema["$defs"]
    for name in ("Stage", "Opamp"):
        definitions[name].pop("required", None)
    for definition in (schema, *definitions.values()):
        definition["description"] = str(definition.get("description", "")).split("\n")[0]
        for item in definition.get("properties", {}).values():
            item.pop("default", None)
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        **schema,
        "title": "modepair sweep spec",
    }
