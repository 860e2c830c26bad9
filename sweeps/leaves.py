"""Leaves: what reads one value of a spec, and how pydantic is told to."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

from pydantic import GetCoreSchemaHandler, GetJsonSchemaHandler, ValidationInfo
from pydantic_core import CoreSchema, core_schema

from modepair.sweeps.faults import RefusedError, SeveralRefusedError, form_of, shown
from modepair.sweeps.vocabulary import BUILT_IN, Vocabulary
from modepair.sweeps.words import listed, suggestion

__all__ = ["Leaf", "Reads", "ReadsInContext", "ReadsMapping", "UnknownKeyError"]


class Leaf(Protocol):
    """What reads one value: a kind of quantity, a choice, a name or free text."""

    @property
    def takes(self) -> str:
        """What is taken, for messages."""

    def parse(self, written: object) -> Any:
        """Return the value, or raise `RefusedError`."""

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the value."""


@dataclass(frozen=True)
class Reads:
    """Annotation that makes pydantic read a field by a `Leaf`."""

    leaf: Leaf

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(self.leaf.parse)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        return self.leaf.json_schema()


@dataclass(frozen=True)
class ReadsInContext:
    """Annotation that makes pydantic read a field by a `Leaf` that the spec's vocabulary decides.

    The vocabulary is the context of the validation; without one it is that of a spec without an own circuit.

    Parameters
    ----------
    leaf
        Gives the leaf for a vocabulary.
    """

    leaf: Callable[[Vocabulary], Leaf]

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        def read(written: object, info: ValidationInfo) -> Any:
            return self.leaf(vocabulary_of(info)).parse(written)

        return core_schema.with_info_plain_validator_function(read)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        return self.leaf(BUILT_IN).json_schema()


def vocabulary_of(info: ValidationInfo) -> Vocabulary:
    """Return the vocabulary that a validation was given."""
    return info.context if isinstance(info.context, Vocabulary) else BUILT_IN


@dataclass(frozen=True, eq=False)
class ReadsMapping:
    """Annotation that makes pydantic read a mapping whose keys are known, each by its own leaf.

    Parameters
    ----------
    leaves
        What each key takes, for a vocabulary.
    noun
        What a key is, in the plural: ``parts``.
    patterns
        What keys take that are known to this vocabulary or another, by a pattern, for editors.
    """

    leaves: Callable[[Vocabulary], Mapping[str, Leaf]]
    noun: str
    patterns: Mapping[str, Leaf] = field(default_factory=dict)

    def parse(self, written: object, known: Mapping[str, Leaf]) -> dict[str, Any]:
        """Return the values by key; raise `SeveralRefusedError` for all that are refused."""
        if not isinstance(written, Mapping):
            raise RefusedError(form_of(written), f"a mapping of {self.noun}")
        values: dict[str, Any] = {}
        refusals: list[tuple[tuple[str | int, ...], RefusedError]] = []
        for key, value in written.items():
            try:
                if key not in known:
                    raise UnknownKeyError(unknown(str(key), known, self.noun))
                values[str(key)] = known[key].parse(value)
            except RefusedError as refusal:
                refusals.append(((str(key),), refusal))
        if refusals:
            raise SeveralRefusedError(refusals)
        return values

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        def read(written: object, info: ValidationInfo) -> dict[str, Any]:
            return self.parse(written, self.leaves(vocabulary_of(info)))

        return core_schema.with_info_plain_validator_function(read)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        found: dict[str, Any] = {"type": "object", "additionalProperties": False}
        found["properties"] = {key: leaf.json_schema() for key, leaf in self.leaves(BUILT_IN).items()}
        if self.patterns:
            found["patternProperties"] = {
                f"^{pattern}$": leaf.json_schema() for pattern, leaf in self.patterns.items()
            }
        return found


class UnknownKeyError(RefusedError):
    """A refusal of the key itself, not of its value."""


def unknown(key: str, known: Mapping[str, Any], noun: str) -> str:
    """Word the refusal of an unknown key, with the nearest known one."""
    near = suggestion(key, known)
    if not near:
        short = [item for item in known if "." not in item]
        near = f"; known {noun}: {listed(short)}"
    return f"{shown(key)} is not among the known {noun}{near}"
