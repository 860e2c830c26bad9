"""Parts: their names and kinds, the built-in stages that have them, and how settings give their values.

What a spec may name is its `modepair.sweeps.vocabulary.Vocabulary`: these, and the parts of its own circuit.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from modepair.sweeps.faults import RefusedError
from modepair.sweeps.quantities import (
    ANGLE,
    CAPACITANCE,
    DECIBELS,
    FREQUENCY,
    INDUCTANCE,
    RATIO_DB,
    RESISTANCE,
    SIGN,
    Kind,
    render,
)

Value = float | NDArray[np.float64]
"""One SI value, or one per case: shape (n,)."""

RG_LESS = 1e-9
"""Relative distance from the gain without RG below which RG is left out; far below any tolerance."""


@dataclass(frozen=True)
class Topology:
    """A stage: its op-amps and its parts.

    Parameters
    ----------
    name
        As in the spec.
    opamps
        Its op-amp instances.
    required
        Parts that need a value.
    optional
        Parts that may be absent.
    set_by_gain
        Parts that `gain` sets.
    values
        Pairs of a part and the value that it has where no setting gives one.
    """

    name: str
    opamps: tuple[str, ...]
    required: tuple[str, ...]
    optional: tuple[str, ...]
    set_by_gain: tuple[str, ...]
    values: tuple[tuple[str, float], ...] = ()

    @property
    def parts(self) -> tuple[str, ...]:
        """All its passive parts."""
        return self.required + self.optional


_BRIDGE = ("R1", "R2", "R3", "R4")
_ENDS = ("RREF", "RL")

TOPOLOGIES: dict[str, Topology] = {
    topology.name: topology
    for topology in (
        Topology("difference", ("A1",), _BRIDGE, ("C2", "C4", *_ENDS), ("R2", "R4")),
        Topology("buffered-difference", ("A1", "A2", "A3"), _BRIDGE, ("C2", "C4", *_ENDS), ("R2", "R4")),
        Topology("two-opamp", ("A1", "A2"), _BRIDGE, ("RG", "C2", "C4", *_ENDS), ("RG",)),
        Topology(
            "three-opamp",
            ("A1", "A2", "A3"),
            ("RF1", "RF2", *_BRIDGE),
            ("RG", "CF1", "CF2", "C2", "C4", *_ENDS),
            ("RG",),
        ),
    )
}
"""The built-in stages by name."""

INSTANCES = ("A1", "A2", "A3")
"""Op-amp instances that a built-in stage may have."""

OPAMP_PARAMETERS: dict[str, Kind] = {
    "open_loop_gain": replace(RATIO_DB, noun="an open-loop gain", least=10.0, most=1e12, example="130 dB"),
    "gain_bandwidth": replace(FREQUENCY, example="8 MHz"),
    "phase_margin": replace(ANGLE, noun="a phase margin in degrees", least=20.0, most=89.9, example="60"),
    "cmrr": replace(DECIBELS, noun="a CMRR in dB", example="100 dB"),
    "cmrr_corner": replace(FREQUENCY, example="300 Hz"),
    "cmrr_sign": SIGN,
    "input_resistance_differential": replace(RESISTANCE, example="1M"),
    "input_capacitance_differential": replace(CAPACITANCE.with_zero(), example="3p"),
    "input_resistance_common": replace(RESISTANCE, example="1G"),
    "input_capacitance_common": replace(CAPACITANCE.with_zero(), example="2p"),
    "output_resistance": replace(RESISTANCE.with_zero(), example="50"),
}
"""Parameters of an op-amp's macromodel, each with its kind."""

REQUIRED_PARAMETERS = ("open_loop_gain", "gain_bandwidth")
"""Parameters that every op-amp has."""


@dataclass(frozen=True)
class Part:
    """A passive part.

    Parameters
    ----------
    name
        Its designator, such as ``R1``.
    kind
        What its value is.
    section
        ``stage`` or ``source``.
    topologies
        The stages that have it; for the source's parts, all.
    """

    name: str
    kind: Kind
    section: str
    topologies: tuple[str, ...]


def kind_of(name: str) -> Kind:
    """Return what the value of a passive part is, which the first letter of its name tells."""
    if name == "RI":
        return replace(RESISTANCE.with_sign(), example="10")
    if name.startswith("C"):
        return CAPACITANCE.with_zero()
    if name.startswith("L"):
        return INDUCTANCE
    if name in ("RREF", "RSP", "RSN", "RFP", "RFN"):
        return RESISTANCE.with_zero()
    return RESISTANCE


def _part(name: str) -> Part:
    source = name in _SOURCE_PARTS
    having = tuple(t.name for t in TOPOLOGIES.values() if source or name in t.parts)
    return Part(name, kind_of(name), "source" if source else "stage", having)


_STAGE_PARTS = ("R1", "R2", "R3", "R4", "RG", "RF1", "RF2", "RREF", "RL", "C2", "C4", "CF1", "CF2")
_SOURCE_PARTS = (
    *("RSP", "RSN", "RI", "CI", "CCP", "CCN", "CCB"),
    *("RFP", "RFN", "CFP", "CFN", "CFB", "RBP", "RBN"),
)

PARTS: dict[str, Part] = {name: _part(name) for name in (*_STAGE_PARTS, *_SOURCE_PARTS)}
"""Every passive part of the source and of the built-in stages, by name."""

SOURCE_PART_KINDS: dict[str, Kind] = {name: PARTS[name].kind for name in _SOURCE_PARTS}
"""What `source.parts` takes."""

SHORTHANDS: dict[str, tuple[str, ...]] = {
    "source.resistance": ("RSP", "RSN"),
    "source.imbalance": ("RI",),
    "source.imbalance_capacitance": ("CI",),
    "source.cable_capacitance": ("CCP", "CCN"),
    "source.between_capacitance": ("CCB",),
    "source.filter.resistance": ("RFP", "RFN"),
    "source.filter.to_ground": ("CFP", "CFN"),
    "source.filter.between": ("CFB",),
    "source.bias_resistance": ("RBP", "RBN"),
    "stage.reference_resistance": ("RREF",),
    "stage.load": ("RL",),
}
"""Keys that give the value of one or two parts, which `source.parts` and `stage.parts` override."""

_SHORTHAND_OF = {part: path for path, parts in SHORTHANDS.items() for part in parts}


def least_gain(topology: str, parts: Mapping[str, Value]) -> Value:
    """Return the gain a stage has without RG, the least that `gain` can ask for.

    Three-op-amp: R2/R1; two-op-amp: 1 + R4/R3; for all others any gain above 0 is in reach.

    Parameters
    ----------
    topology
        Name of the stage.
    parts
        Part values in ohm: floats or arrays of shape (n,).

    Returns
    -------
    float or ndarray of shape (n,)
        The gain as a ratio.
    """
    if topology == "three-opamp":
        return parts["R2"] / parts["R1"]
    if topology == "two-opamp":
        return 1.0 + parts["R4"] / parts["R3"]
    return 0.0


def parts_for_gain(topology: str, gain: Value, parts: Mapping[str, Value]) -> dict[str, Value]:
    """Return the values of the parts that set a stage's gain.

    The closed forms are the stages' ideal differential gain solved for the part: difference
    G = R2/R1 = R4/R3; three-op-amp G = (1 + (RF1 + RF2)/RG) R2/R1; two-op-amp G = 1 + R4/R3 + 2 R4/RG (for
    R1 = R4, R2 = R3).

    Parameters
    ----------
    topology
        Name of the stage.
    gain
        Ideal differential gain, a ratio: float or shape (n,).
    parts
        The other parts' values in ohm: floats or shape (n,).

    Returns
    -------
    dict of str to float or ndarray of shape (n,)
        In ohm. Infinite where the gain is the one without RG; below that gain NaN. No parts of a stage that is not
        built in.
    """
    if topology not in TOPOLOGIES:
        return {}
    if topology in ("difference", "buffered-difference"):
        return {"R2": gain * parts["R1"], "R4": gain * parts["R3"]}
    least = np.asarray(least_gain(topology, parts), dtype=np.float64)
    excess = np.asarray(gain, dtype=np.float64) / least - 1.0
    excess = np.where(np.abs(excess) <= RG_LESS, 0.0, excess)
    excess = np.where(excess < 0, np.nan, excess)
    if topology == "three-opamp":
        numerator = np.asarray(parts["RF1"] + parts["RF2"], dtype=np.float64)
    else:
        numerator = np.asarray(2.0 * parts["R4"], dtype=np.float64) / least
    with np.errstate(divide="ignore"):
        resistance = numerator / excess
    return {"RG": float(resistance) if resistance.ndim == 0 else resistance}


def resolve_parts(
    stage: Topology, opamps: Mapping[str, str], settings: Mapping[str, Value]
) -> dict[str, Value]:
    """Resolve the value of every part of a circuit.

    Parameters
    ----------
    stage
        The stage.
    opamps
        Candidate's name by instance: ``{"A1": "quiet-bipolar"}``.
    settings
        SI values by dotted path, such as ``stage.parts.R1``, ``source.imbalance``,
        ``opamps.quiet-bipolar.cmrr``; floats or arrays of shape (n,).

    Returns
    -------
    dict of str to float or ndarray of shape (n,)
        SI values by part name; absent parts have no key. RG is infinite in rows whose gain needs none, and
        has no key where no row has it.

    Raises
    ------
    RefusedError
        When a gain is below the least that the stage can have, or needs a part out of any range.
    """
    parts: dict[str, Value] = {}
    own = dict(stage.values)
    for section, name in (*(("stage", n) for n in stage.parts), *(("source", n) for n in _SOURCE_PARTS)):
        value = settings.get(f"{section}.parts.{name}")
        if value is None and name in _SHORTHAND_OF:
            value = settings.get(_SHORTHAND_OF[name])
        if value is None:
            value = own.get(name)
        if value is not None:
            parts[name] = value
    gain = settings.get("stage.gain")
    if gain is not None:
        parts.update(_checked_gain(stage.name, gain, parts))
    for instance in stage.opamps:
        for parameter in OPAMP_PARAMETERS:
            value = settings.get(f"stage.parts.{instance}.{parameter}")
            if value is None:
                value = settings.get(f"opamps.{opamps[instance]}.{parameter}")
            if value is not None:
                parts[f"{instance}.{parameter}"] = value
    return parts


def _checked_gain(topology: str, gain: Value, parts: Mapping[str, Value]) -> dict[str, Value]:
    given = parts_for_gain(topology, gain, parts)
    for refusal in gain_refusals(topology, gain, parts, given).values():
        raise refusal
    return {name: value for name, value in given.items() if not np.all(np.isinf(value))}


def gain_refusals(
    topology: str, gain: Value, parts: Mapping[str, Value], given: Mapping[str, Value]
) -> dict[float, RefusedError]:
    """Return why gains cannot be had, by gain.

    Parameters
    ----------
    topology
        Name of the stage.
    gain
        Gains asked for: float or shape (n,).
    parts
        The parts' values in ohm that are given.
    given
        What `parts_for_gain` returned.

    Returns
    -------
    dict of float to RefusedError
        One refusal for each distinct gain that some row cannot have.
    """
    refusals: dict[float, RefusedError] = {}
    for name, value in given.items():
        values, gains, least = np.broadcast_arrays(
            np.asarray(value, dtype=np.float64),
            np.asarray(gain, dtype=np.float64),
            np.asarray(least_gain(topology, parts), dtype=np.float64),
        )
        kind = PARTS[name].kind
        bad = np.isnan(values) | (np.isfinite(values) & ((values < kind.least) | (values > kind.most)))
        for row in np.flatnonzero(bad):
            asked = float(gains.flat[row])
            if asked in refusals:
                continue
            if np.isnan(values.flat[row]):
                refusals[asked] = RefusedError(
                    f"a gain of {asked:g} is below {float(least.flat[row]):.6g}, the least that the "
                    f"{topology} stage has with these resistors (without RG)"
                )
            else:
                refusals[asked] = RefusedError(
                    f"a gain of {asked:g} needs {name} = {render(float(values.flat[row]), 'Ω')}, "
                    f"out of range; {name} takes {kind.limits}"
                )
    return refusals
