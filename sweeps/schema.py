"""The schema of a spec's sections: stage, source, frequency, op-amp candidates, as frozen models."""

from __future__ import annotations

import math
from collections.abc import Iterable
from pathlib import Path
from typing import Annotated

import numpy as np
from numpy.typing import NDArray
from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    PrivateAttr,
)

from modepair.sweeps.document import Document
from modepair.sweeps.faults import Fault
from modepair.sweeps.imported import PIN, SUBCIRCUIT, SUPPLY
from modepair.sweeps.leaves import Leaf, Reads, ReadsMapping
from modepair.sweeps.parts import OPAMP_PARAMETERS, PARTS, SOURCE_PART_KINDS
from modepair.sweeps.quantities import CAPACITANCE, FREQUENCY, GAIN, INDUCTANCE, NUMBER, RESISTANCE, Kind
from modepair.sweeps.stage_circuits import INSTANCE_NAME, PORT
from modepair.sweeps.vocabulary import STAGES
from modepair.sweeps.words import Choice, Name, Text

SPOT_MATCH = 1e-9
"""Relative distance within which a spot and a grid frequency are the same."""

MOST_SPOTS = 1000
"""Spot frequencies that a spec may have."""


OPAMP_NAME = Name("an op-amp name", "quiet-bipolar")
TITLE = Text(200)
NOTE = Text(500)
FILE_NAME = Text(500)
CAUTION = Choice("a caution", ("medical", "mains", "safety"))
TOPOLOGY = Choice("a topology", STAGES)

OWN_PART_PATTERNS: dict[str, Leaf] = {
    "R(?!REF$)[A-Z0-9_]{1,31}": RESISTANCE,
    "C[A-Z0-9_]{1,31}": CAPACITANCE.with_zero(),
    "L[A-Z0-9_]{1,31}": INDUCTANCE,
    **{f"{INSTANCE_NAME.pattern}\\.{name}": kind for name, kind in OPAMP_PARAMETERS.items()},
}
"""Names that an own circuit may have in `stage.parts`."""

_SR = PARTS["RSP"].kind
_CAP = PARTS["CCP"].kind

OpampName = Annotated[str, Reads(OPAMP_NAME)]
GainValue = Annotated[float, Reads(GAIN)]
FrequencyValue = Annotated[float, Reads(FREQUENCY)]
ResistanceOrZero = Annotated[float, Reads(_SR)]
Capacitance = Annotated[float, Reads(_CAP)]


def _parameter(name: str) -> Reads:
    return Reads(OPAMP_PARAMETERS[name])


class Section(BaseModel):
    """Base of all sections: frozen, unknown keys refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", arbitrary_types_allowed=True)


class Opamp(Section):
    """An op-amp candidate: a small-signal macromodel, or a model imported from a file with declared values beside it.

    Every value is in SI units, ratios plain. An imported model has `file`, `subcircuit` and `pins`.

    Parameters
    ----------
    file
        A SPICE file in the folder of the file that gives the candidate, or below it; None: a macromodel.
    subcircuit
        Name of its subcircuit.
    pins
        What each of the subcircuit's ports is connected to, in order.
    supplies
        Positive and negative supply, V.
    open_loop_gain
        Gain at dc, V/V.
    gain_bandwidth
        Open-loop gain times the first pole, Hz.
    phase_margin
        Of the unity-gain loop, degrees; None: one pole.
    cmrr
        At dc, V/V; None: none modelled.
    cmrr_corner
        Where the op-amp's own CMRR has fallen 3 dB, Hz; None: flat.
    cmrr_sign
        1 or -1; None: 1.
    input_resistance_differential, input_resistance_common
        Ohm; the latter from each input to ground. None: none.
    input_capacitance_differential, input_capacitance_common
        Farad; the latter from each input to ground. None: none.
    output_resistance
        Ohm; None: none.
    note
        Free text for comparisons.
    unit_price
        Free number for comparisons.
    """

    file: Annotated[str, Reads(FILE_NAME)] | None = None
    subcircuit: Annotated[str, Reads(SUBCIRCUIT)] | None = None
    pins: tuple[Annotated[str, Reads(PIN)], ...] | None = None
    supplies: tuple[Annotated[float, Reads(SUPPLY)], ...] | None = None
    open_loop_gain: Annotated[float, _parameter("open_loop_gain")] | None = None
    gain_bandwidth: Annotated[float, _parameter("gain_bandwidth")] | None = None
    phase_margin: Annotated[float, _parameter("phase_margin")] | None = None
    cmrr: Annotated[float, _parameter("cmrr")] | None = None
    cmrr_corner: Annotated[float, _parameter("cmrr_corner")] | None = None
    cmrr_sign: Annotated[float, _parameter("cmrr_sign")] | None = None
    input_resistance_differential: Annotated[float, _parameter("input_resistance_differential")] | None = None
    input_capacitance_differential: Annotated[float, _parameter("input_capacitance_differential")] | None = (
        None
    )
    input_resistance_common: Annotated[float, _parameter("input_resistance_common")] | None = None
    input_capacitance_common: Annotated[float, _parameter("input_capacitance_common")] | None = None
    output_resistance: Annotated[float, _parameter("output_resistance")] | None = None
    note: Annotated[str, Reads(NOTE)] = ""
    unit_price: Annotated[float, Reads(NUMBER)] | None = None

    _name: str = PrivateAttr(default="")
    _document: Document | None = PrivateAttr(default=None)

    def named(self, name: str, document: Document) -> Opamp:
        """Return the candidate with its name and the file that gives it."""
        bound = self.model_copy()
        bound._name = name
        bound._document = document
        return bound

    @property
    def folder(self) -> Path:
        """The folder in which its model's file lies."""
        return Path(self._document.file).parent if self._document else Path()

    def fault(self, key: str, message: str) -> Fault:
        """Return a fault at one of its keys."""
        if self._document is None:
            return Fault("", 0, 0, f"opamps.{self._name}.{key}", message)
        return self._document.fault(("opamps", self._name, key), message)

    @property
    def parameters(self) -> dict[str, float]:
        """The macromodel's parameters that are given, SI values by name; none of an imported model."""
        return {} if self.file is not None else self.declared

    @property
    def declared(self) -> dict[str, float]:
        """The values given under the names of parameters, SI values by name."""
        values = {name: getattr(self, name) for name in OPAMP_PARAMETERS}
        return {name: value for name, value in values.items() if value is not None}


class Stage(Section):
    """The amplifier stage.

    Parameters
    ----------
    topology
        difference, buffered-difference, two-opamp, three-opamp, or netlist for an own circuit. Where only an
        axis gives it, its first value.
    file
        The own circuit's SPICE file, in the spec's folder or below it.
    subcircuit
        Name of its subcircuit.
    ports
        What each of the subcircuit's ports is, in order.
    supplies
        Voltages of its ports that are supplies, the positive one first, V.
    parts
        SI values by part name, as given; op-amp parameters as ``A1.gain_bandwidth``. Of an own circuit they
        go before the values in its file.
    gain
        Ideal differential gain, a ratio; sets RG, or R2 and R4.
    opamp
        One candidate's name for every instance.
    opamps
        Candidates' names by instance; instead of `opamp`.
    reference_resistance
        From the reference node to ground, ohm.
    load
        From the output to ground, ohm.
    """

    topology: Annotated[str, Reads(TOPOLOGY)]
    file: Annotated[str, Reads(FILE_NAME)] | None = None
    subcircuit: Annotated[str, Reads(SUBCIRCUIT)] | None = None
    ports: tuple[Annotated[str, Reads(PORT)], ...] | None = None
    supplies: tuple[Annotated[float, Reads(SUPPLY)], ...] | None = None
    parts: Annotated[
        dict[str, float],
        ReadsMapping(lambda known: known.stage_part_kinds, "parts of the stage", OWN_PART_PATTERNS),
    ] = Field(default_factory=dict)
    gain: GainValue | None = None
    opamp: OpampName | None = None
    opamps: (
        Annotated[
            dict[str, str],
            ReadsMapping(
                lambda known: dict.fromkeys(known.instances, OPAMP_NAME),
                "instances",
                {INSTANCE_NAME.pattern: OPAMP_NAME},
            ),
        ]
        | None
    ) = None
    reference_resistance: ResistanceOrZero | None = None
    load: Annotated[float, Reads(PARTS["RL"].kind)] | None = None


class Filter(Section):
    """The filter in front of the stage.

    Parameters
    ----------
    resistance
        In series with each leg, ohm.
    to_ground
        Each leg to ground, farad.
    between
        Leg to leg, farad.
    """

    resistance: ResistanceOrZero | None = None
    to_ground: Capacitance | None = None
    between: Capacitance | None = None


class Source(Section):
    """The source network.

    Parameters
    ----------
    resistance
        Of each leg, ohm.
    imbalance
        Added to the plus leg, ohm; negative: to the minus leg.
    imbalance_capacitance
        Across the imbalance, farad.
    cable_capacitance
        Each leg to ground, farad.
    between_capacitance
        Leg to leg, farad.
    bias_resistance
        Each stage input to ground, ohm; None: none.
    filter
        Filter in front of the stage.
    parts
        SI values by part name, which override the keys above.
    """

    resistance: ResistanceOrZero | None = None
    imbalance: Annotated[float, Reads(PARTS["RI"].kind)] | None = None
    imbalance_capacitance: Capacitance | None = None
    cable_capacitance: Capacitance | None = None
    between_capacitance: Capacitance | None = None
    bias_resistance: Annotated[float, Reads(PARTS["RBP"].kind)] | None = None
    filter: Filter = Field(default_factory=Filter)
    parts: Annotated[dict[str, float], ReadsMapping(lambda _: SOURCE_PART_KINDS, "parts of the source")] = (
        Field(default_factory=dict)
    )


_POINTS = Kind("points per decade", prefixes="", least=1, most=1000, example="20", whole=True)


class Frequency(Section):
    """The frequencies at which every case is solved.

    Parameters
    ----------
    start, stop
        Ends of the logarithmic grid, Hz; equal: one point.
    points_per_decade
        Density of the grid.
    spots
        Further frequencies that are solved exactly, Hz, within start..stop.
    """

    start: FrequencyValue
    stop: FrequencyValue
    points_per_decade: Annotated[float, Reads(_POINTS)] = 20.0
    spots: tuple[FrequencyValue, ...] = ()

    _further_hz: tuple[float, ...] = PrivateAttr(default=())

    def solving_too(self, frequency_hz: Iterable[float]) -> Frequency:
        """Return the same frequencies with further ones, Hz, that are solved exactly but are no spots."""
        more = self.model_copy()
        more._further_hz = tuple(sorted({*self._further_hz, *frequency_hz}))
        return more

    @property
    def exact_hz(self) -> NDArray[np.float64]:
        """The frequencies that are solved at their exact values, ascending, Hz: spots and further ones."""
        exact = sorted(self.spots)
        for further in self._further_hz:
            if not any(abs(further - spot) <= SPOT_MATCH * spot for spot in exact):
                exact.append(further)
        return np.array(sorted(exact), dtype=np.float64)

    @property
    def grid_hz(self) -> NDArray[np.float64]:
        """The logarithmic grid, Hz, shape (G,), both ends included.

        It has max(1, floor(points_per_decade log10(stop/start))) equal steps in log f, as ngspice's
        ``ac dec`` has; 1e-9 is added before rounding down, so that whole decades are not lost to round-off. Ends that
        are the same by `SPOT_MATCH` make one point.
        """
        if self.stop <= self.start * (1.0 + SPOT_MATCH):
            return np.array([self.start])
        steps = max(1, math.floor(self.points_per_decade * math.log10(self.stop / self.start) + 1e-9))
        return np.geomspace(self.start, self.stop, steps + 1)

    @property
    def off_grid_spots_hz(self) -> tuple[float, ...]:
        """The spots and further frequencies that are not on the grid, ascending, Hz."""
        grid = self.grid_hz
        return tuple(
            spot for spot in self.exact_hz.tolist() if not np.any(np.abs(grid - spot) <= SPOT_MATCH * spot)
        )

    @property
    def frequency_hz(self) -> NDArray[np.float64]:
        """Grid, spots and further frequencies, ascending, Hz, shape (F,); exact ones go first."""
        grid = self.grid_hz
        spots = self.exact_hz
        if spots.size:
            near = np.abs(grid[:, None] - spots[None, :]) <= SPOT_MATCH * spots[None, :]
            grid = grid[~near.any(axis=1)]
        return np.sort(np.concatenate([grid, spots]))
