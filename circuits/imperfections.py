"""Nominal imperfections: where a circuit is not symmetric, and what it would be without each of them.

A stage rejects because its two sides are alike. What makes them unlike, and so turns common mode into output even
with every part at its nominal value, is listed here part by part, with the values that would take it away.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

__all__ = ["imperfections", "parts_gone"]

SUBTRACTOR_OPAMP = {"difference": "A1", "buffered-difference": "A3", "two-opamp": "A2", "three-opamp": "A3"}
"""The op-amp that subtracts. It holds its output at nothing against the common mode's current in its feedback, by
its output resistance times this current over its gain."""

LEG_PAIRS = (("RSP", "RSN"), ("CCP", "CCN"), ("RFP", "RFN"), ("CFP", "CFN"), ("RBP", "RBN"))

ALIKE = 1e-12
"""Relative distance within which two values are equal: the round-off of `gain`."""

IDEAL_GAIN, IDEAL_BANDWIDTH_HZ = 1e10, 1e15
"""Gain and gain-bandwidth of an op-amp that lags no more."""

INPUT_PARAMETERS = ("input_resistance_common", "input_capacitance_common")

FOLLOWER_PARAMETERS = (
    "open_loop_gain",
    "gain_bandwidth",
    "phase_margin",
    "input_resistance_differential",
    "input_capacitance_differential",
    *INPUT_PARAMETERS,
    "output_resistance",
)

TWIN_PARAMETERS = {
    "buffered-difference": FOLLOWER_PARAMETERS,
    "three-opamp": FOLLOWER_PARAMETERS,
    "two-opamp": INPUT_PARAMETERS,
}
"""What A1 and A2 must have alike: all where both follow their inputs; else what loads the inputs and the summing
nodes. Between an op-amp's own inputs of the two-op-amp stage there is no common mode, once A1's gain is ideal."""


def _differ(a: float, b: float) -> bool:
    return abs(a - b) > ALIKE * max(abs(a), abs(b))


def imperfections(topology: str, parts: Mapping[str, float]) -> dict[str, dict[str, float]]:
    """List what makes a circuit's two sides unlike.

    Parameters
    ----------
    topology : str
        Its stage. Of an own circuit only the source, the reference and the op-amps' CMRR are known to be one-sided:
        which of its parts stand side by side is not.
    parts : mapping of str to float
        Part values in SI units; zero and a missing key mean that a part is not there.

    Returns
    -------
    dict of str to dict of str to float
        Name of the imperfection to the part values that take it away; zero takes a part out. To take away
        several, take one away and list what is left, since the same part may stand in two of them.

    Notes
    -----
    Balance of the subtractor: R4/R3 = R2/R1, and with capacitors Z4/R3 = Z2/R1, so C4 = C2 R1/R3. Balance of the
    two-op-amp stage, from A_cm = 1 - Z2 Z4/(R1 R3): R4 = R1 R3/R2, and no capacitors. Its first op-amp's finite
    gain delays one side only: rho = (1 + R2/R1)/A(s). Balanced resistors that are not equal side by side load the
    two sides unequally, which source, output and input impedances turn into an error.
    """
    found: dict[str, dict[str, float]] = {}

    def value(name: str) -> float:
        return parts.get(name, 0.0)

    if value("RREF"):
        found["RREF"] = {"RREF": 0.0}
    if value("RI"):
        found["RI"] = {"RI": 0.0}
    for plus, minus in LEG_PAIRS:
        if _differ(value(plus), value(minus)):
            found[f"{plus} against {minus}"] = {minus: value(plus)}
    if topology in SUBTRACTOR_OPAMP:
        found |= _bridge(topology, parts)
    instances = sorted({name.split(".")[0] for name in parts if "." in name})
    for instance in instances:
        cmrr = value(f"{instance}.cmrr")
        if cmrr and np.isfinite(cmrr):
            found[f"{instance}.cmrr"] = {f"{instance}.cmrr": np.inf}
    for parameter in TWIN_PARAMETERS.get(topology, ()):
        first, second = value(f"A1.{parameter}"), value(f"A2.{parameter}")
        if _differ(first, second):
            found[f"A1.{parameter} against A2.{parameter}"] = {f"A2.{parameter}": first}
    subtractor = SUBTRACTOR_OPAMP.get(topology)
    if subtractor and value(f"{subtractor}.output_resistance"):
        found[f"{subtractor}.output_resistance"] = {f"{subtractor}.output_resistance": 0.0}
    return found


def parts_gone(ideal: Mapping[str, float]) -> frozenset[str]:
    """Name the parts that make no more error of their own, whatever their tolerance, once an imperfection is gone.

    Parameters
    ----------
    ideal : mapping of str to float
        Part values that take it away, from `imperfections`.

    Returns
    -------
    frozenset of str
        Those that are taken out or made ideal; not those made equal to others.
    """
    return frozenset(
        name for name, value in ideal.items() if value in (0.0, np.inf, IDEAL_GAIN, IDEAL_BANDWIDTH_HZ)
    )


def _bridge(topology: str, parts: Mapping[str, float]) -> dict[str, dict[str, float]]:
    r1, r2, r3, r4 = (parts[name] for name in ("R1", "R2", "R3", "R4"))
    c2, c4 = parts.get("C2", 0.0), parts.get("C4", 0.0)
    found: dict[str, dict[str, float]] = {}
    if topology == "two-opamp":
        balanced = r1 * r3 / r2
        gain, bandwidth_hz = parts.get("A1.open_loop_gain", 0.0), parts.get("A1.gain_bandwidth", 0.0)
        if gain < IDEAL_GAIN or bandwidth_hz < IDEAL_BANDWIDTH_HZ:
            found["A1's finite gain"] = {
                "A1.open_loop_gain": IDEAL_GAIN,
                "A1.gain_bandwidth": IDEAL_BANDWIDTH_HZ,
                "A1.phase_margin": 0.0,
            }
        for name, capacitance in (("C2", c2), ("C4", c4)):
            if capacitance:
                found[name] = {name: 0.0}
        if _differ(r2, r3):
            # R1 and C2 go along, so that balance, gain and time constant stay.
            found["R2 against R3"] = {"R1": r1 * r3 / r2, "R2": r3, "C2": c2 * r2 / r3}
    else:
        balanced = r2 * r3 / r1
        if _differ(c4, c2 * r1 / r3):
            found["C2 against C4"] = {"C4": c2 * r1 / r3}
        if _differ(r1, r3):
            found["R1 against R3"] = {"R3": r1, "R4": r4 * r1 / r3, "C4": c4 * r3 / r1}
        for first, second in (("RF1", "RF2"), ("CF1", "CF2")):
            one, other = parts.get(first, 0.0), parts.get(second, 0.0)
            if topology == "three-opamp" and _differ(one, other):
                # Their mean, so that the gain stays.
                found[f"{first} against {second}"] = dict.fromkeys((first, second), 0.5 * (one + other))
    if _differ(r4, balanced):
        found["R1 to R4 out of balance"] = {"R4": balanced}
    return found
