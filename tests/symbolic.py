"""Transfer functions of all four topologies from lcapy, a general-purpose symbolic circuit library.

The netlists are written out by hand in lcapy's syntax, translated neither from the tool's decks nor from
the dense solver. lcapy sets up the s-domain equations; sympy solves them exactly for the output. Values are
numbers of few digits, so that the answer is a rational function of s with rational coefficients, found in
seconds; frequencies are therefore given in rad/s and handed to the tool over 2 pi.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from math import atan, degrees, pi, sqrt
from typing import Any

import mpmath  # type: ignore[import-untyped]
import numpy as np
import sympy  # type: ignore[import-untyped]
from numpy.typing import ArrayLike, NDArray
from sympy.polys.matrices import DomainMatrix  # type: ignore[import-untyped]

DIGITS = 60
"""For evaluating the rational functions, whose terms cancel over tens of decades."""

SOURCE = """
Vp gp 0 s {plus}
Vm gm 0 s {minus}
RSP gp sp 350
RI sp cp 20
CI sp cp 47e-9
RSN gm cn 351
CCP cp 0 3e-9
CCN cn 0 3.1e-9
CCB cp cn 1e-9
RFP cp plus 1000
RFN cn minus 1002
CFP plus 0 1e-10
CFN minus 0 1.02e-10
CFB plus minus 1e-9
RBP plus 0 1e7
RBN minus 0 1.01e7
"""
SOURCE_PARTS = {
    "RSP": 350.0, "RSN": 351.0, "RI": 20.0, "CI": 47e-9,
    "CCP": 3e-9, "CCN": 3.1e-9, "CCB": 1e-9,
    "RFP": 1000.0, "RFN": 1002.0, "CFP": 1e-10, "CFN": 1.02e-10, "CFB": 1e-9,
    "RBP": 1e7, "RBN": 1.01e7,
}  # fmt: skip

DIFFERENCE = """
R1 {minus} n1 10000
R2 n1 out 40040
R3 {plus} p1 9980
R4 p1 ref 40010
RREF ref 0 2
C2 n1 out 10e-12
C4 p1 ref 11e-12
RL out 0 5000
"""
DIFFERENCE_PARTS = {
    "R1": 10000.0, "R2": 40040.0, "R3": 9980.0, "R4": 40010.0, "RREF": 2.0,
    "C2": 10e-12, "C4": 11e-12, "RL": 5000.0,
}  # fmt: skip

THREE_OPAMP = """
RF1 o1 s1 10010
CF1 o1 s1 5e-12
RG s1 s2 500
RF2 s2 o2 9990
CF2 s2 o2 6e-12
"""
THREE_OPAMP_PARTS = {"RF1": 10010.0, "CF1": 5e-12, "RG": 500.0, "RF2": 9990.0, "CF2": 6e-12}

TWO_OPAMP = """
RREF ref 0 1
R1 ref s1 20000
R2 s1 o1 2002
C2 s1 o1 20e-12
R3 o1 s2 1998
R4 s2 out 20030
C4 s2 out 3e-12
RG s1 s2 400
RL out 0 5000
"""
TWO_OPAMP_PARTS = {
    "RREF": 1.0, "R1": 20000.0, "R2": 2002.0, "C2": 20e-12, "R3": 1998.0, "R4": 20030.0, "C4": 3e-12,
    "RG": 400.0, "RL": 5000.0,
}  # fmt: skip


@dataclass(frozen=True)
class SymbolicOpamp:
    """An op-amp in numbers of few digits; frequencies in rad/s.

    The open-loop gain is an admittance Ya = (1 + s/w1)(1 + s/w2)/A0 fed with a current of one ampere per volt
    of v+ - v- and of k(s)(v+ + v-)/2, the latter from an impedance Zk = k(s)/2 in megohms. A Norton source of
    gain 1/Ro is the output; where Ro is 0 a voltage source of gain one. lcapy's G drives its current into the
    first node named, unlike SPICE's.
    """

    gain: int
    pole: int
    second_pole: int
    cmrr: int
    cmrr_corner: int
    input_resistance: float
    input_capacitance: float
    common_resistance: float
    common_capacitance: float
    output_resistance: int

    def netlist(self, i: int, positive: str, negative: str, out: str) -> str:
        ro = self.output_resistance
        output = (
            f"Go{i} {out} 0 a{i} 0 {{1/{ro}}}\nRo{i} {out} 0 {ro}\n" if ro else f"Eo{i} {out} 0 a{i} 0 1\n"
        )
        return f"""
Rd{i} {positive} {negative} {self.input_resistance:g}
Cd{i} {positive} {negative} {self.input_capacitance:g}
Rp{i} {positive} 0 {self.common_resistance:g}
Rn{i} {negative} 0 {self.common_resistance:g}
Cp{i} {positive} 0 {self.common_capacitance:g}
Cn{i} {negative} 0 {self.common_capacitance:g}
Gk{i} k{i} 0 {positive} 0 1e-6
Gl{i} k{i} 0 {negative} 0 1e-6
Zk{i} k{i} 0 {{1000000*(1+s/{self.cmrr_corner})/(2*({self.cmrr}))}}
Ga{i} a{i} 0 {positive} {negative} 1
Gc{i} a{i} 0 k{i} 0 1
Ya{i} a{i} 0 {{(1+s/{self.pole})*(1+s/{self.second_pole})/{self.gain}}}
{output}"""

    def parts(self, name: str) -> dict[str, float]:
        """The same op-amp in the tool's terms.

        The phase margin is found backwards: f2 = GBW/(t sqrt(1 + t^2)) is solved for t^2, and the margin is
        90 degrees less arctan t.
        """
        gbw = self.gain * self.pole / (2 * pi)
        ratio = self.second_pole / (2 * pi) / gbw
        t = sqrt((sqrt(1 + 4 / ratio**2) - 1) / 2)
        return {
            f"{name}.open_loop_gain": float(self.gain),
            f"{name}.gain_bandwidth": gbw,
            f"{name}.phase_margin": 90 - degrees(atan(t)),
            f"{name}.cmrr": float(abs(self.cmrr)),
            f"{name}.cmrr_sign": 1.0 if self.cmrr > 0 else -1.0,
            f"{name}.cmrr_corner": self.cmrr_corner / (2 * pi),
            f"{name}.input_resistance_differential": self.input_resistance,
            f"{name}.input_capacitance_differential": self.input_capacitance,
            f"{name}.input_resistance_common": self.common_resistance,
            f"{name}.input_capacitance_common": self.common_capacitance,
            f"{name}.output_resistance": float(self.output_resistance),
        }


OPAMPS = (
    SymbolicOpamp(1_000_000, 50, 80_000_000, 300_000, 2000, 3e5, 8e-12, 1e9, 2e-12, 50),
    SymbolicOpamp(300_000, 100, 40_000_000, -200_000, 5000, 1e12, 3e-12, 1e10, 4e-12, 0),
    SymbolicOpamp(100_000, 600, 90_000_000, 50_000, 9000, 2e6, 1e-12, 2e9, 3e-12, 100),
)


def stage(topology: str) -> tuple[str, dict[str, float]]:
    """lcapy's netlist of the stage and its source ({plus} and {minus} drives open), and the same as parts."""
    a1, a2, a3 = OPAMPS
    match topology:
        case "difference":
            text = DIFFERENCE.format(plus="plus", minus="minus") + a1.netlist(1, "p1", "n1", "out")
            parts = DIFFERENCE_PARTS | a1.parts("A1")
        case "buffered-difference":
            text = DIFFERENCE.format(plus="o1", minus="o2")
            text += a1.netlist(1, "plus", "o1", "o1") + a2.netlist(2, "minus", "o2", "o2")
            text += a3.netlist(3, "p1", "n1", "out")
            parts = DIFFERENCE_PARTS | a1.parts("A1") | a2.parts("A2") | a3.parts("A3")
        case "three-opamp":
            text = THREE_OPAMP + DIFFERENCE.format(plus="o1", minus="o2")
            text += a1.netlist(1, "plus", "s1", "o1") + a2.netlist(2, "minus", "s2", "o2")
            text += a3.netlist(3, "p1", "n1", "out")
            parts = THREE_OPAMP_PARTS | DIFFERENCE_PARTS | a1.parts("A1") | a2.parts("A2") | a3.parts("A3")
        case "two-opamp":
            text = TWO_OPAMP + a1.netlist(1, "minus", "s1", "o1") + a2.netlist(2, "plus", "s2", "out")
            parts = TWO_OPAMP_PARTS | a1.parts("A1") | a2.parts("A2")
        case _:
            raise ValueError(f"no such topology: {topology!r}")
    return text, SOURCE_PARTS | parts


@cache
def transfers(topology: str) -> tuple[Any, Any]:
    """Common-mode and differential transfer function: elements of the field of rational functions QQ(s)."""
    from lcapy import Circuit  # type: ignore[import-untyped]

    text, _ = stage(topology)
    sides = []
    for plus, minus in (("1", "1"), ("{1/2}", "{-1/2}")):
        equations = Circuit(SOURCE.format(plus=plus, minus=minus) + text).subcircuits["s"].mna
        sides.append(sympy.Matrix(equations.Z))
    matrix = sympy.Matrix(equations.A)
    output = [str(unknown) for unknown in equations.X].index("Vnout(s)")
    (s,) = matrix.free_symbols
    augmented = DomainMatrix.from_Matrix(sympy.Matrix.hstack(matrix, *sides))
    reduced, pivots = augmented.convert_to(sympy.QQ.frac_field(s)).to_sparse().rref()
    if pivots != tuple(range(matrix.rows)):
        raise ValueError(f"lcapy's equations of {topology} are singular")
    common, differential = (reduced[output, matrix.cols + which].element for which in range(2))
    return common, differential


def evaluate(function: Any, frequency_hz: ArrayLike) -> NDArray[np.complex128]:
    """A rational function of s at s = j 2 pi f; shape (F,)."""
    with mpmath.workdps(DIGITS):
        numerator, denominator = (
            [mpmath.mpf(c.numerator) / c.denominator for c in side.to_dense()]
            for side in (function.numer, function.denom)
        )
        points = [mpmath.mpc(0, 2 * mpmath.pi * float(f)) for f in np.atleast_1d(np.asarray(frequency_hz))]
        return np.array(
            [complex(mpmath.polyval(numerator, p) / mpmath.polyval(denominator, p)) for p in points]
        )


def solve_symbolic(
    topology: str, frequency_hz: ArrayLike
) -> tuple[Mapping[str, float], NDArray[np.complex128], NDArray[np.complex128]]:
    """The stage's parts, common-mode gain (F,) and differential gain (F,) by lcapy."""
    common, differential = transfers(topology)
    return stage(topology)[1], evaluate(common, frequency_hz), evaluate(differential, frequency_hz)
