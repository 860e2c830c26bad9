"""Cases: the product of a spec's axes, with every part's value resolved, for all cases at once."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from modepair.sweeps.axes import Axis
from modepair.sweeps.faults import Fault, RefusedError, SpecError
from modepair.sweeps.parts import Topology, Value, gain_refusals, parts_for_gain, resolve_parts
from modepair.sweeps.spec import Spec
from modepair.sweeps.stage_circuits import NETLIST

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, eq=False)
class Block:
    """Cases that share their stage and their op-amps' names.

    Parameters
    ----------
    topology
        Name of the stage.
    opamps
        Candidate's name by instance.
    case
        Numbers of the cases, from 1, ascending, shape (n,).
    parts
        SI values by part name: one float for all cases, or one per case, shape (n,).
    tolerances
        Values of the tolerance section by their path, such as ``tolerance.parts[0].matching``, likewise.
    """

    topology: str
    opamps: dict[str, str]
    case: NDArray[np.int64]
    parts: dict[str, Value]
    tolerances: dict[str, Value] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Sweep:
    """All cases of a spec.

    Parameters
    ----------
    spec
        The spec.
    axes
        Its axes, in file order.
    count
        Number of cases: the product of the axes' lengths.
    blocks
        The cases, grouped by what is not a number; by their first case.
    """

    spec: Spec
    axes: tuple[Axis, ...]
    count: int
    blocks: tuple[Block, ...]

    @cached_property
    def own_circuit(self) -> NDArray[np.bool_]:
        """Whether each case's stage is the spec's own circuit, shape (count,), by case number from 1."""
        own = np.zeros(self.count, dtype=np.bool_)
        for block in self.blocks:
            own[block.case - 1] = block.topology == NETLIST
        return own

    def frame(self) -> pd.DataFrame:
        """Return a table with one row per case: ``case``, then a column per axis (SI numbers, or names)."""
        import pandas as pd

        columns: dict[str, object] = {"case": np.arange(1, self.count + 1)}
        for axis, position in zip(self.axes, _positions(self.axes, self.count), strict=True):
            dtype = np.float64 if axis.numeric else object
            columns[axis.path] = np.array(axis.values, dtype=dtype)[position]
        return pd.DataFrame(columns).astype({axis.path: str for axis in self.axes if not axis.numeric})

    def axis_labels(self, case: int) -> dict[str, str]:
        """Return the axes' values of one case as they were written, by path.

        Raises
        ------
        IndexError
            When there is no such case.
        """
        if not 1 <= case <= self.count:
            raise IndexError(f"case must be from 1 to {self.count}, not {case}")
        labels: dict[str, str] = {}
        rest = case - 1
        for axis in reversed(self.axes):
            rest, position = divmod(rest, len(axis.values))
            labels[axis.path] = axis.labels[position]
        return dict(reversed(labels.items()))


def expand(spec: Spec) -> Sweep:
    """Expand a spec to its cases.

    Parameters
    ----------
    spec
        A spec as `load_spec` returns it.

    Returns
    -------
    Sweep
        Cases in the order of the axes' product, the last axis fastest; case 1 first.

    Raises
    ------
    SpecError
        When a gain cannot be had; a spec from `load_spec` has passed that already.
    """
    try:
        blocks = [
            block
            for topology, opamps, case, settings in _raw_blocks(spec)
            for block in _resolved(spec.vocabulary.topologies[topology], opamps, case, settings)
        ]
    except RefusedError as refusal:
        raise SpecError(gain_faults(spec) or [Fault(spec.path, 0, 0, "", str(refusal))]) from refusal
    blocks.sort(key=lambda block: int(block.case[0]))
    return Sweep(spec, spec.axes, _count(spec.axes), tuple(blocks))


def _count(axes: tuple[Axis, ...]) -> int:
    count = 1
    for axis in axes:
        count *= len(axis.values)
    return count


def _positions(axes: tuple[Axis, ...], count: int) -> list[NDArray[np.int64]]:
    """Return each axis' index of every case, shape (count,)."""
    cases = np.arange(count, dtype=np.int64)
    positions = []
    stride = count
    for axis in axes:
        stride //= len(axis.values)
        positions.append(cases // stride % len(axis.values))
    return positions


def base_settings(spec: Spec) -> dict[str, float]:
    """Return the values that a spec gives in place, in SI units, by dotted path."""
    found: dict[str, float] = {}
    for section, model in (("stage", spec.stage), ("source", spec.source)):
        _flatten(model.model_dump(exclude_none=True), section, found)
    for index, entry in enumerate(spec.tolerance.parts if spec.tolerance else ()):
        _flatten(entry.model_dump(exclude_none=True), f"tolerance.parts[{index}]", found)
    for name, candidate in spec.candidates.items():
        found.update({f"opamps.{name}.{key}": value for key, value in candidate.parameters.items()})
    return found


def _flatten(values: dict[str, object], prefix: str, found: dict[str, float]) -> None:
    for key, value in values.items():
        if isinstance(value, dict):
            _flatten(value, f"{prefix}.{key}", found)
        elif isinstance(value, float):
            found[f"{prefix}.{key}"] = value


RawBlock = tuple[str, dict[str, str], NDArray[np.int64], dict[str, Value]]


def _raw_blocks(spec: Spec, *, by_topology_only: bool = False) -> Iterator[RawBlock]:
    """Yield stage, op-amps, case numbers and settings of each combination of the axes of names."""
    axes = spec.axes
    count = _count(axes)
    positions = _positions(axes, count)
    base = base_settings(spec)
    numeric = [(axis, position) for axis, position in zip(axes, positions, strict=True) if axis.numeric]
    named = [(axis, position) for axis, position in zip(axes, positions, strict=True) if not axis.numeric]
    if by_topology_only:
        named = [(axis, position) for axis, position in named if axis.path == "stage.topology"]
    values = {axis.path: np.array(axis.values, dtype=np.float64) for axis, _ in numeric}
    group = np.zeros(count, dtype=np.int64)
    for axis, position in named:
        group = group * len(axis.values) + position
    order = np.argsort(group, kind="stable")
    ends = np.flatnonzero(np.diff(group[order])) + 1
    for rows in np.split(order, ends):
        names = {axis.path: str(axis.values[position[rows[0]]]) for axis, position in named}
        topology = names.get("stage.topology", spec.stage.topology)
        settings: dict[str, Value] = {
            **base,
            **{axis.path: values[axis.path][position[rows]] for axis, position in numeric},
        }
        yield topology, _instances(spec, topology, names), rows + 1, settings


def _instances(spec: Spec, topology: str, names: dict[str, str]) -> dict[str, str]:
    given = spec.stage.opamps or {}
    every = names.get("stage.opamp", spec.stage.opamp or "")
    return {
        instance: names.get(f"stage.opamps.{instance}", given.get(instance, every))
        for instance in spec.vocabulary.topologies[topology].opamps
    }


def _resolved(
    stage: Topology, opamps: dict[str, str], case: NDArray[np.int64], settings: dict[str, Value]
) -> Iterator[Block]:
    """Yield the block, or two where some of its cases have no RG."""
    parts = resolve_parts(stage, opamps, settings)
    tolerances = {path: value for path, value in settings.items() if path.startswith("tolerance.")}
    without = np.isinf(parts.get("RG", 0.0))
    if not np.any(without):
        yield Block(stage.name, opamps, case, parts, tolerances)
        return
    for rows, absent in ((~without, ()), (without, ("RG",))):
        chosen = {name: _taken(value, rows) for name, value in parts.items() if name not in absent}
        yield Block(
            stage.name,
            opamps,
            case[rows],
            chosen,
            {path: _taken(value, rows) for path, value in tolerances.items()},
        )


def _taken(value: Value, rows: NDArray[np.bool_]) -> Value:
    return value[rows] if isinstance(value, np.ndarray) else value


def gain_faults(spec: Spec) -> list[Fault]:
    """Return a fault for each gain that a spec asks for and its stage cannot have.

    Parameters
    ----------
    spec
        A spec whose keys are valid one by one.

    Returns
    -------
    list of Fault
        At the key ``stage.gain``, or at the values of its axis.
    """
    axis = next((axis for axis in spec.axes if axis.path == "stage.gain"), None)
    if axis is None and spec.stage.gain is None:
        return []
    faults: dict[Fault, None] = {}
    for topology, _, _, settings in _raw_blocks(spec, by_topology_only=True):
        parts = {
            path.removeprefix("stage.parts."): value
            for path, value in settings.items()
            if path.startswith("stage.parts.") and path.count(".") == 2
        }
        gain = settings["stage.gain"]
        refusals = gain_refusals(topology, gain, parts, parts_for_gain(topology, gain, parts))
        for asked, refusal in refusals.items():
            location = (
                ("stage", "gain")
                if axis is None
                else ("vary", axis.path, next(i for i, value in enumerate(axis.values) if value == asked))
            )
            faults[spec.document.fault(location, refusal.what)] = None
    return list(faults)
