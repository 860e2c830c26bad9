"""An independent solution of every stage: dense nodal analysis with the op-amps as equations.

Shares no code with the tool: the wiring is written down here a second time and nothing is a netlist. A(s)
and k(s) are evaluated as complex numbers at each frequency, so that an op-amp is one exact matrix row
instead of a macromodel. The same equations can be solved with mpmath, which tells how far double precision
itself can be believed.

The method is modified nodal analysis (Ho, Ruehli and Brennan, IEEE Trans. Circuits Syst. 22(6), 1975; from
memory). The current out of an ideal source is of no interest here, so the current sum of the node that it
drives gives its row to the source's own equation, and no branch currents are needed.
"""

import math
from collections.abc import Callable, Iterator, Mapping
from typing import Any

import mpmath  # type: ignore[import-untyped]
import numpy as np
from numpy.typing import ArrayLike, NDArray

ComplexArray = NDArray[np.complex128]

GROUND = "0"

REFINEMENTS = 2


class Network:
    """Elements as stamps, generic in the number type: numpy arrays over frequency, or one mpmath number.

    Parameters
    ----------
    s : complex frequency in rad/s, shape (F,) or one mpmath number.
    parts : mapping
        Part name to SI value.
    lib : module
        numpy or mpmath: whatever computes tan, sqrt and pi for `s`'s number type.
    """

    def __init__(self, s: Any, parts: Mapping[str, float], lib: Any) -> None:
        self.s = s
        self.parts = parts
        self.lib = lib
        self.index: dict[str, int] = {}
        self.current_sums: list[tuple[str, str, Any]] = []
        self.equations: dict[str, tuple[list[tuple[str, Any]], str]] = {}

    def value(self, name: str) -> Any:
        """The part's value in the number type of the solution; zero where the part is absent."""
        number = float(self.parts.get(name, 0.0))
        return mpmath.mpf(number) if self.lib is mpmath else np.longdouble(number)

    def number(self, name: str) -> int:
        return self.index.setdefault(name, len(self.index))

    def admittance(self, a: str, b: str, y: Any) -> None:
        for node, other in ((a, b), (b, a)):
            if node != GROUND:
                self.current_sums.append((node, node, y))
                if other != GROUND:
                    self.current_sums.append((node, other, -y))

    def resistor(self, name: str, a: str, b: str) -> None:
        """A resistor that may be absent (a missing key), but never zero."""
        if name in self.parts:
            if not self.parts[name] > 0:
                raise ValueError(f"{name} must be above zero, not {self.parts[name]!r}")
            self.admittance(a, b, 1 / self.value(name) + 0 * self.s)

    def capacitor(self, name: str, a: str, b: str) -> None:
        if self.value(name) != 0:
            self.admittance(a, b, self.s * self.value(name))

    def inductor(self, name: str, a: str, b: str) -> None:
        self.admittance(a, b, 1 / (self.s * self.value(name)))

    def in_series(self, name: str, a: str, b: str) -> str:
        """Resistor from `a` on to `b`; absent or zero, both are one node. Returns the node reached."""
        if self.value(name) == 0:
            return a
        self.admittance(a, b, 1 / self.value(name) + 0 * self.s)
        return b

    def equation(self, node: str, terms: list[tuple[str, Any]], right: str = "") -> None:
        """Sum of coefficient * voltage = the drive named by `right`; replaces the node's current sum."""
        self.equations[node] = (terms, right)

    def open_loop(self, name: str) -> Any:
        """A(s) of one op-amp."""
        gain, gbw = self.value(f"{name}.open_loop_gain"), self.value(f"{name}.gain_bandwidth")
        two_pi = 2 * self.lib.pi
        answer = gain / (1 + self.s * gain / (two_pi * gbw))
        margin = self.value(f"{name}.phase_margin")
        if margin != 0:
            t = self.lib.tan((90 - margin) * self.lib.pi / 180)
            unity = gbw / self.lib.sqrt(1 + t * t)
            answer = answer / (1 + self.s * t / (two_pi * unity))
        return answer

    def common_mode_error(self, name: str) -> Any:
        """k(s) of one op-amp."""
        cmrr = self.value(f"{name}.cmrr")
        if cmrr == 0 or math.isinf(cmrr):
            return 0 * self.s
        sign = self.value(f"{name}.cmrr_sign") if f"{name}.cmrr_sign" in self.parts else 1
        answer = sign / cmrr + 0 * self.s
        corner = self.value(f"{name}.cmrr_corner")
        if corner != 0:
            answer = answer * (1 + self.s / (2 * self.lib.pi * corner))
        return answer

    def opamp(self, name: str, positive: str, negative: str, out: str) -> None:
        a, k = self.open_loop(name), self.common_mode_error(name)
        source = self.in_series(f"{name}.output_resistance", out, f"{name} e")
        # e/A - (v+ - v-) - k (v+ + v-)/2 = 0, divided by A so that the row's entries are of order one.
        self.equation(source, [(source, 1 / a), (positive, -1 - k / 2), (negative, 1 - k / 2)])
        for kind, ends in (
            ("differential", ((positive, negative),)),
            ("common", ((positive, GROUND), (negative, GROUND))),
        ):
            for one, other in ends:
                if self.value(f"{name}.input_resistance_{kind}") != 0:
                    self.resistor(f"{name}.input_resistance_{kind}", one, other)
                self.capacitor(f"{name}.input_capacitance_{kind}", one, other)


def _source_leg(network: Network, leg: str, imbalance: Any) -> tuple[str, str]:
    """One leg from its generator to the stage's input; returns the cable's node and the input's node."""
    start = f"generator {leg}"
    network.equation(start, [(start, 1 + 0 * network.s)], right=leg)
    node = network.in_series(f"RS{leg}", start, f"source {leg}")
    if imbalance != 0:
        network.admittance(node, f"cable {leg}", 1 / imbalance + network.s * network.value("CI"))
        node = f"cable {leg}"
    cable = node
    network.capacitor(f"CC{leg}", cable, GROUND)
    node = network.in_series(f"RF{leg}", cable, f"filter {leg}")
    network.capacitor(f"CF{leg}", node, GROUND)
    network.resistor(f"RB{leg}", node, GROUND)
    return cable, node


def _source(network: Network) -> tuple[str, str]:
    imbalance = network.value("RI")
    plus_cable, plus = _source_leg(network, "P", max(imbalance, 0))
    minus_cable, minus = _source_leg(network, "N", max(-imbalance, 0))
    network.capacitor("CCB", plus_cable, minus_cable)
    network.capacitor("CFB", plus, minus)
    return plus, minus


def _reference(network: Network) -> str:
    """The reference's node: ground itself, or a node behind RREF."""
    return network.in_series("RREF", GROUND, "ref")


def _difference(network: Network, opamp: str, plus: str, minus: str, ref: str) -> None:
    network.resistor("R1", minus, "n1")
    network.resistor("R2", "n1", "out")
    network.resistor("R3", plus, "p1")
    network.resistor("R4", "p1", ref)
    network.capacitor("C2", "n1", "out")
    network.capacitor("C4", "p1", ref)
    network.opamp(opamp, "p1", "n1", "out")


Wiring = Callable[[Network, str, str, str], None]
"""Puts a stage's elements into a network, given the nodes of its inputs and of its reference; its output is "out"."""


def _stage(network: Network, topology: str | Wiring) -> None:
    plus, minus = _source(network)
    ref = _reference(network)
    match topology:
        case wiring if callable(wiring):
            wiring(network, plus, minus, ref)
        case "difference":
            _difference(network, "A1", plus, minus, ref)
        case "buffered-difference":
            network.opamp("A1", plus, "o1", "o1")
            network.opamp("A2", minus, "o2", "o2")
            _difference(network, "A3", "o1", "o2", ref)
        case "three-opamp":
            network.opamp("A1", plus, "s1", "o1")
            network.opamp("A2", minus, "s2", "o2")
            network.resistor("RF1", "o1", "s1")
            network.resistor("RF2", "o2", "s2")
            network.resistor("RG", "s1", "s2")
            network.capacitor("CF1", "o1", "s1")
            network.capacitor("CF2", "o2", "s2")
            _difference(network, "A3", "o1", "o2", ref)
        case "two-opamp":
            network.opamp("A1", minus, "s1", "o1")
            network.resistor("R1", ref, "s1")
            network.resistor("R2", "s1", "o1")
            network.opamp("A2", plus, "s2", "out")
            network.resistor("R3", "o1", "s2")
            network.resistor("R4", "s2", "out")
            network.resistor("RG", "s1", "s2")
            network.capacitor("C2", "s1", "o1")
            network.capacitor("C4", "s2", "out")
        case _:
            raise ValueError(f"no such topology: {topology!r}")
    network.resistor("RL", "out", GROUND)


def _entries(network: Network) -> Iterator[tuple[int, int, Any]]:
    """(row, column, value) of the matrix; a driven node's current sum is replaced by its equation."""
    for node, other, y in network.current_sums:
        if node not in network.equations:
            yield network.number(node), network.number(other), y
    for node, (terms, _) in network.equations.items():
        for other, coefficient in terms:
            if other != GROUND:
                yield network.number(node), network.number(other), coefficient


def _built(
    topology: str | Wiring, parts: Mapping[str, float], s: Any, lib: Any
) -> tuple[Network, int, dict[str, int]]:
    network = Network(s, parts, lib)
    _stage(network, topology)
    for node, other, _ in network.current_sums:
        network.number(node), network.number(other)
    for node, (terms, _) in network.equations.items():
        for other in (node, *(name for name, _ in terms)):
            if other != GROUND:
                network.number(other)
    rows = {right: network.number(node) for node, (_, right) in network.equations.items() if right}
    return network, len(network.index), rows


def _solve_double(
    topology: str | Wiring,
    parts: Mapping[str, float],
    frequency_hz: NDArray[np.float64],
    drives: list[tuple[complex, complex]],
) -> ComplexArray:
    # Where long double is wider than double (x86, not everywhere) the equations are written with it and two
    # steps of iterative refinement bring the answer close to that precision; elsewhere they do no harm.
    wide = frequency_hz.astype(np.longdouble)
    network, size, rows = _built(
        topology, parts, np.clongdouble(2j) * (4 * np.arctan(np.longdouble(1))) * wide, np
    )
    matrix = np.zeros((frequency_hz.size, size, size), dtype=np.clongdouble)
    for row, column, value in _entries(network):
        matrix[:, row, column] += value
    right = np.zeros((frequency_hz.size, size, len(drives)), dtype=np.clongdouble)
    for which, (plus, minus) in enumerate(drives):
        right[:, rows["P"], which] = plus
        right[:, rows["N"], which] = minus
    # Rows of current sums have the size of their largest conductance, driven rows that of one: all are
    # brought to one. The unknowns are voltages of order one and need no scaling of their own.
    scale = np.abs(matrix).max(axis=2, keepdims=True)
    matrix, right = matrix / scale, right / scale
    double = matrix.astype(complex)
    voltages = np.linalg.solve(double, right.astype(complex)).astype(np.clongdouble)
    for _ in range(REFINEMENTS):
        residual = right - matrix @ voltages
        voltages = voltages + np.linalg.solve(double, residual.astype(complex))
    return voltages[:, network.index["out"], :].T.astype(complex)


def _solve_precise(
    topology: str | Wiring,
    parts: Mapping[str, float],
    frequency_hz: NDArray[np.float64],
    drives: list[tuple[complex, complex]],
    digits: int,
) -> ComplexArray:
    answer = np.empty((len(drives), frequency_hz.size), dtype=complex)
    with mpmath.workdps(digits):
        for point, frequency in enumerate(frequency_hz):
            s = mpmath.mpc(0, 2 * mpmath.pi * mpmath.mpf(float(frequency)))
            network, size, rows = _built(topology, parts, s, mpmath)
            matrix = mpmath.zeros(size)
            for row, column, value in _entries(network):
                matrix[row, column] += value
            for which, (plus, minus) in enumerate(drives):
                right = mpmath.zeros(size, 1)
                right[rows["P"]] = mpmath.mpmathify(plus)
                right[rows["N"]] = mpmath.mpmathify(minus)
                answer[which, point] = complex(mpmath.lu_solve(matrix, right)[network.index["out"]])
    return answer


def _solve(
    topology: str | Wiring,
    parts: Mapping[str, float],
    frequency_hz: ArrayLike,
    drives: list[tuple[complex, complex]],
    digits: int | None,
) -> ComplexArray:
    frequency = np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    if digits is None:
        return _solve_double(topology, parts, frequency, drives)
    return _solve_precise(topology, parts, frequency, drives, digits)


def solve_dense(
    topology: str | Wiring, parts: Mapping[str, float], frequency_hz: ArrayLike, digits: int | None = None
) -> tuple[ComplexArray, ComplexArray]:
    """Common-mode and differential gain of a stage behind its source.

    Parameters
    ----------
    topology : str, or callable
        difference, buffered-difference, two-opamp or three-opamp, or the wiring of another stage.
    parts : mapping
        Part name to SI value; op-amp parameters as `A1.gain_bandwidth`. A missing key is an absent part, and
        so is a zero capacitor, source, imbalance, filter or reference resistance and a zero op-amp parameter.
    frequency_hz : array_like, shape (F,)
    digits : int, optional
        Solve with mpmath to so many decimal digits; absent: double precision.

    Returns
    -------
    common_gain, differential_gain : ndarray of complex, shape (F,)
        Output per volt on both generators, and per volt between them (half a volt each way).
    """
    common, differential = _solve(topology, parts, frequency_hz, [(1.0, 1.0), (0.5, -0.5)], digits)
    return common, differential


def solve_dense_drives(
    topology: str | Wiring,
    parts: Mapping[str, float],
    frequency_hz: ArrayLike,
    plus: complex,
    minus: complex,
    digits: int | None = None,
) -> ComplexArray:
    """Output voltage, shape (F,), with the generators at `plus` and `minus` volts."""
    answer: ComplexArray = _solve(topology, parts, frequency_hz, [(plus, minus)], digits)[0]
    return answer
