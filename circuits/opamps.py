"""The op-amp macromodel: linear, small-signal, two nodes at the most.

The model is ::

    e    = A(s) ((v+ - v-) + k(s) (v+ + v-)/2)
    A(s) = A0 / ((1 + s/w1) (1 + s/w2)),   w1 = 2 pi GBW / A0
    k(s) = (sign / CMRR) (1 + s/wc),       wc = 2 pi cmrr_corner

behind the output resistance, with the input impedances at its inputs. The zero of k(s) needs no node of its
own: over the first pole it is a constant plus a one-pole term, ::

    (1 + s/wc)/(1 + s/w1) = a + (1 - a)/(1 + s/w1),   a = w1/wc

so the term in `a` passes the gain node by, and the rest goes through it.
"""

from __future__ import annotations

import numpy as np

from modepair.circuits.elements import GROUND, Element, Kind, Parts, Values

__all__ = ["opamp_elements", "second_pole_hz"]

GAIN_NODE_OHM = 1e9
"""Load of the gain nodes: large, with a small transconductance, which keeps the round-off of the solve low."""


def second_pole_hz(gain_bandwidth_hz: Values, phase_margin_deg: Values) -> Values:
    """Second pole that leaves a unity-gain loop the given phase margin.

    Parameters
    ----------
    gain_bandwidth_hz : ndarray, shape (n,)
        Open-loop gain times the first pole.
    phase_margin_deg : ndarray, shape (n,)
        Phase margin of the loop closed at unity gain, in degrees, between 0 and 90.

    Returns
    -------
    ndarray, shape (n,)
        Frequency of the second pole, in hertz.

    Notes
    -----
    With t = tan(90 deg - PM), the loop gain is one at ft = GBW/sqrt(1 + t^2) and f2 = ft/t: from
    |A(j ft)| = (GBW/ft)/sqrt(1 + (ft/f2)^2) = 1 and arctan(ft/f2) = 90 deg - PM, first pole far below.
    """
    t = np.tan(np.radians(90.0 - phase_margin_deg))
    return np.asarray(gain_bandwidth_hz / np.sqrt(1.0 + t * t) / t)


def _input_impedances(name: str, plus: str, minus: str, parts: Parts) -> list[Element]:
    places: tuple[tuple[str, Kind, str, str, str], ...] = (
        ("differential", "R", "id", plus, minus),
        ("differential", "C", "id", plus, minus),
        ("common", "R", "icp", plus, GROUND),
        ("common", "C", "icp", plus, GROUND),
        ("common", "R", "icn", minus, GROUND),
        ("common", "C", "icn", minus, GROUND),
    )
    quantity = {"R": "resistance", "C": "capacitance"}
    elements = []
    for mode, kind, suffix, node_a, node_b in places:
        values = parts.get(f"{name}.input_{quantity[kind]}_{mode}")
        if values is not None:
            elements.append(Element(f"{kind}{name}{suffix}", kind, (node_a, node_b), values))
    return elements


def opamp_elements(name: str, plus: str, minus: str, out: str, parts: Parts) -> list[Element]:
    """Elements of one op-amp.

    Parameters
    ----------
    name : str
        Instance name, such as "A1".
    plus, minus, out : str
        Its nodes.
    parts : mapping of str to ndarray, shape (n,)
        Part values; those that start with `name` and a dot are used. `open_loop_gain` and
        `gain_bandwidth` must be there, the others may be absent.

    Returns
    -------
    list of Element
        Controlled sources, resistors and capacitors only, so that no operating point can fail.
    """

    def of(parameter: str) -> Values | None:
        return parts.get(f"{name}.{parameter}")

    gain = parts[f"{name}.open_loop_gain"]
    bandwidth = parts[f"{name}.gain_bandwidth"]
    cmrr, corner, sign = of("cmrr"), of("cmrr_corner"), of("cmrr_sign")
    phase_margin, output_resistance = of("phase_margin"), of("output_resistance")

    g, h = f"{name}g", f"{name}h"
    transconductance = gain / GAIN_NODE_OHM
    ones = np.ones_like(gain)
    elements = [
        Element(f"R{name}g", "R", (g, GROUND), ones * GAIN_NODE_OHM),
        Element(f"C{name}g", "C", (g, GROUND), transconductance / (2 * np.pi * bandwidth)),
    ]

    error = None if cmrr is None else (ones if sign is None else sign) / cmrr
    bypass = None  # volts at the output per volt of (v+ + v-), past the gain node
    if error is not None:
        if corner is not None:
            bypass = 0.5 * error * bandwidth / corner
            error = error * (1.0 - bandwidth / gain / corner)
        elements += [
            Element(f"G{name}p", "G", (g, GROUND, plus, GROUND), transconductance * (1 + 0.5 * error)),
            Element(f"G{name}n", "G", (g, GROUND, GROUND, minus), transconductance * (1 - 0.5 * error)),
        ]
    else:
        elements.append(Element(f"G{name}d", "G", (g, GROUND, plus, minus), transconductance))

    # The node that carries e: the gain node, or one behind it for a second pole or where an ideal output
    # leaves no resistance to sum in. `unit` is the resistance that turns a current into e.
    if phase_margin is not None or output_resistance is None:
        source, unit = h, ones * GAIN_NODE_OHM
        elements += [
            Element(f"G{name}h", "G", (h, GROUND, g, GROUND), 1 / unit),
            Element(f"R{name}h", "R", (h, GROUND), unit),
        ]
    else:
        source, unit = g, output_resistance
    if phase_margin is not None:
        pole = second_pole_hz(bandwidth, phase_margin)
        elements.append(Element(f"C{name}h", "C", (h, GROUND), 1 / (2 * np.pi * pole * GAIN_NODE_OHM)))
    if output_resistance is None:
        elements.append(Element(f"E{name}o", "E", (out, GROUND, source, GROUND), ones))
    else:
        elements += [
            Element(f"G{name}o", "G", (out, GROUND, source, GROUND), 1 / output_resistance),
            Element(f"R{name}o", "R", (out, GROUND), output_resistance),
        ]
    if bypass is not None:
        into = h if source == h else out
        elements += [
            Element(f"G{name}bp", "G", (into, GROUND, plus, GROUND), bypass / unit),
            Element(f"G{name}bn", "G", (into, GROUND, minus, GROUND), bypass / unit),
        ]
    return elements + _input_impedances(name, plus, minus, parts)
