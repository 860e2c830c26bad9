"""Axes: the settings that a spec varies, found by their dotted paths."""

from __future__ import annotations

import re
import typing
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import UnionType
from typing import Any

from pydantic import BaseModel

from modepair.sweeps.faults import RefusedError, SeveralRefusedError, form_of, shown
from modepair.sweeps.leaves import Leaf, Reads, ReadsMapping, UnknownKeyError
from modepair.sweeps.parts import OPAMP_PARAMETERS
from modepair.sweeps.schema import Source, Stage
from modepair.sweeps.stage_circuits import CIRCUIT_KEYS
from modepair.sweeps.tolerances import ToleranceEntry
from modepair.sweeps.vocabulary import BUILT_IN, Vocabulary
from modepair.sweeps.words import suggestion

MOST_CASES = 200_000
"""Cases that the product of the axes may have."""


@dataclass(frozen=True)
class Axis:
    """One axis of a sweep.

    Parameters
    ----------
    path
        Dotted path of the setting it varies.
    values
        SI floats, or names.
    labels
        The values as they were written.
    """

    path: str
    values: tuple[float, ...] | tuple[str, ...]
    labels: tuple[str, ...]

    @property
    def numeric(self) -> bool:
        """Whether the values are numbers."""
        return not isinstance(self.values[0], str)


def _leaves(model: type[BaseModel], prefix: str, vocabulary: Vocabulary) -> dict[str, Leaf]:
    """Return what each path below a model takes; list items stand as ``[]``."""
    found: dict[str, Leaf] = {}
    for name, information in model.model_fields.items():
        _collect(information.annotation, information.metadata, f"{prefix}.{name}", found, vocabulary)
    return found


def _collect(
    annotation: Any, metadata: Iterable[Any], path: str, found: dict[str, Leaf], vocabulary: Vocabulary
) -> None:
    for marker in metadata:
        if isinstance(marker, Reads):
            found[path] = marker.leaf
            return
        if isinstance(marker, ReadsMapping):
            found.update({f"{path}.{key}": leaf for key, leaf in marker.leaves(vocabulary).items()})
            return
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        found.update(_leaves(annotation, path, vocabulary))
        return
    origin, arguments = typing.get_origin(annotation), typing.get_args(annotation)
    if origin is typing.Annotated:
        _collect(arguments[0], arguments[1:], path, found, vocabulary)
    elif origin in (tuple, list):
        _collect(arguments[0], (), f"{path}[]", found, vocabulary)
    elif origin in (typing.Union, UnionType):
        for argument in arguments:
            if argument is not type(None):
                _collect(argument, (), path, found, vocabulary)


@lru_cache(maxsize=16)
def _fixed_settings(vocabulary: Vocabulary) -> dict[str, Leaf]:
    entry = _leaves(ToleranceEntry, "tolerance.parts[]", vocabulary)
    varied = {
        path: entry[path] for path in entry if path.rpartition(".")[2] in ("absolute", "matching", "least")
    }
    stage = _leaves(Stage, "stage", vocabulary)
    one = {f"stage.{key}" for key in CIRCUIT_KEYS}
    # A spec has one circuit, so what says which it is cannot vary.
    stage = {path: leaf for path, leaf in stage.items() if path.removesuffix("[]") not in one}
    return {**stage, **_leaves(Source, "source", vocabulary), **varied}


def settings(candidates: Iterable[str] = (), vocabulary: Vocabulary = BUILT_IN) -> dict[str, Leaf]:
    """Return every setting that an axis can vary, by dotted path.

    Parameters
    ----------
    candidates
        Names of the op-amp candidates; each gives paths such as ``opamps.quiet-bipolar.cmrr``.
    vocabulary
        What the spec may name.

    Returns
    -------
    dict of str to Leaf
        What each setting takes. List indexes stand as ``[]``.
    """
    known = dict(_fixed_settings(vocabulary))
    for name in candidates:
        known.update({f"opamps.{name}.{parameter}": kind for parameter, kind in OPAMP_PARAMETERS.items()})
    return known


def setting_at(path: str, known: Mapping[str, Leaf]) -> Leaf:
    """Return what the setting at `path` takes.

    Parameters
    ----------
    path
        Dotted path; list indexes in brackets.
    known
        The settings, from `settings`.

    Returns
    -------
    Leaf

    Raises
    ------
    RefusedError
        With the nearest known path, when there is no such setting.
    """
    leaf = known.get(re.sub(r"\[[0-9]+\]", "[]", path))
    if leaf is None and path.partition("stage.")[2] in CIRCUIT_KEYS:
        raise UnknownKeyError(
            f"{path} cannot vary, as a spec has one circuit; write a spec for each, and compare their runs"
        )
    if leaf is None:
        near = (
            suggestion(path, known) or "; paths are such as stage.opamp, stage.parts.R1 or source.imbalance"
        )
        raise UnknownKeyError(f"there is no setting {shown(path)} to vary{near}")
    return leaf


def read_axis(path: str, written: object, known: Mapping[str, Leaf]) -> Axis:
    """Read one axis.

    Parameters
    ----------
    path
        Dotted path of the setting.
    written
        Its values as text, in a list.
    known
        The settings, from `settings`.

    Returns
    -------
    Axis

    Raises
    ------
    RefusedError
        When the path is unknown or there is no list of values.
    SeveralRefusedError
        One for each value that is refused or given twice, located by its index.
    """
    leaf = setting_at(path, known)
    if not isinstance(written, list | tuple):
        raise RefusedError(form_of(written), "a list of values, such as [a, b]")
    if not written:
        raise RefusedError("the list is empty", "at least one value")
    values: dict[Any, int] = {}
    labels: list[str] = []
    refusals: list[tuple[tuple[str | int, ...], RefusedError]] = []
    for index, item in enumerate(written):
        try:
            value = leaf.parse(item)
            if value in values:
                first = written[values[value]]
                same = "" if first == item else f" (as {shown(str(first))})"
                raise RefusedError(f"{shown(str(item))} is on this axis twice{same}; remove one of them")
            values[value] = index
            labels.append(str(item).strip())
        except RefusedError as refusal:
            refusals.append(((index,), RefusedError(refusal.what, refusal.takes)))
    if refusals:
        raise SeveralRefusedError(refusals)
    return Axis(path, tuple(values), tuple(labels))
