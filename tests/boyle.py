"""A bipolar macromodel of the Boyle type, worked out from data-sheet values by its published design equations.

Boyle, Cohn, Pederson, Solomon: Macromodeling of integrated circuit operational amplifiers, IEEE J. Solid-State
Circuits SC-9(6), 1974; structure and equations from memory. The values are invented.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

THERMAL_VOLT = 1.380649e-23 * 300.15 / 1.602176634e-19
"""kT/q at 27 degrees Celsius, the temperature ngspice takes."""


@dataclass(frozen=True)
class Boyle:
    """What the macromodel is designed for.

    Parameters
    ----------
    gain : open-loop gain at DC, V/V.
    unity_hz : frequency at which the gain of the dominant pole alone is one.
    margin_deg : phase margin at that frequency.
    cmrr : at DC, V/V.
    slew : volts per second.
    beta : current gain of the input transistors.
    compensation : farad.
    output_ohm : resistance at DC, one third of it in the second stage.
    """

    gain: float = 2e5
    unity_hz: float = 1e6
    margin_deg: float = 60.0
    cmrr: float = 3e4
    slew: float = 5e5
    beta: float = 120.0
    compensation: float = 30e-12
    output_ohm: float = 150.0

    @property
    def collector_current(self) -> float:
        return 0.5 * self.slew * self.compensation

    @property
    def transconductance(self) -> float:
        return self.collector_current / THERMAL_VOLT

    @property
    def collector_ohm(self) -> float:
        return 1.0 / (2 * math.pi * self.unity_hz * self.compensation)

    @property
    def emitter_ohm(self) -> float:
        return self.beta / (1 + self.beta) * (self.collector_ohm - 1 / self.transconductance)

    @property
    def tail_ohm(self) -> float:
        return 200.0 / self.tail_current

    @property
    def tail_current(self) -> float:
        return 2 * self.collector_current * (self.beta + 1) / self.beta

    @property
    def second_pole_hz(self) -> float:
        return self.unity_hz / math.tan(math.radians(90.0 - self.margin_deg))

    @property
    def first_stage_farad(self) -> float:
        """Across the collectors: C1 = (C2/2) tan(90 deg - margin)."""
        return 0.5 * self.compensation * math.tan(math.radians(90.0 - self.margin_deg))

    def figures(self) -> dict[str, float]:
        """What the equations predict, under the names of op-amp parameters."""
        # With the second pole, the gain of one comes before unity_hz: |A| = (fu/f) / sqrt(1 + (f/f2)^2).
        u, p = self.unity_hz**2, self.second_pole_hz**2
        unity = math.sqrt(0.5 * p * (math.sqrt(1 + 4 * u / p) - 1))
        return {
            "open_loop_gain": self.gain,
            "gain_bandwidth": self.unity_hz,
            "unity_gain_frequency": unity,
            "phase_margin": 90.0 - math.degrees(math.atan(unity / self.second_pole_hz)),
            "cmrr": self.cmrr,
            "input_resistance_differential": 2
            * (self.beta / self.transconductance + (self.beta + 1) * self.emitter_ohm),
            # In parallel, the 1e-12 S that ngspice puts across each junction.
            "input_resistance_common": 1 / (0.5 / ((self.beta + 1) * self.tail_ohm) + 1e-12),
            "output_resistance": self.output_ohm,
        }

    def text(self, name: str = "boyle") -> str:
        """The model; ports: plus, minus, positive supply, negative supply, output."""
        second_ohm, second_load = 1e5, self.output_ohm / 3
        gain_b = self.gain * self.collector_ohm / (second_ohm * second_load)
        return f"""* Boyle-type macromodel; values invented
.subckt {name} inp inn vcc vee out
q1 c1 inn e1 qx
q2 c2 inp e2 qx
rc1 vcc c1 {self.collector_ohm!r}
rc2 vcc c2 {self.collector_ohm!r}
c1 c1 c2 {self.first_stage_farad!r}
re1 e1 ee {self.emitter_ohm!r}
re2 e2 ee {self.emitter_ohm!r}
ree ee mid {self.tail_ohm!r}
iee ee vee dc {self.tail_current!r}
* half-way between the supplies
emid mid 0 poly(2) vcc 0 vee 0 0 0.5 0.5
ga b mid c1 c2 {1 / self.collector_ohm!r}
gcm mid b ee mid {1 / self.collector_ohm / self.cmrr!r}
r2 b mid {second_ohm!r}
ccomp b o2 {self.compensation!r}
gb o2 mid b mid {gain_b!r}
ro2 o2 mid {second_load!r}
ro1 o2 out {self.output_ohm - second_load!r}
* clamps of the output's swing
dc out hi dx
vc vcc hi dc 2
de lo out dx
ve lo vee dc 2
rp vcc vee 20k
.model qx npn(is=8e-16 bf={self.beta!r})
.model dx d(is=8e-16)
.ends {name}
"""
