"""The engine lets no stale, partial or non-finite result pass as a curve."""

from __future__ import annotations

import multiprocessing
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from modepair.runner.engine import Engine, engine, locate_library
from modepair.runner.errors import EngineDeadError, EngineMissingError, SimulationError

GOOD = """.title modepair
.option noopac
.save v(out)
V1 in 0 DC 0 AC 1
R1 in out 1000.0
R2 out 0 1000.0
"""
GRID = np.geomspace(1, 1e3, 31)
SWEEP = "ac dec 10 1.0 1000.0"

# Circuits of which ngspice says too little, or says it where PySpice does not look, or goes on with an older
# circuit. Each was run after a good one.
BROKEN = {
    "unknown subcircuit": "X1 in out nothere",
    "wrong port count": ".subckt two a b\nR1 a b 1\n.ends\nX1 in out 0 two",
    "controlled source without gain": "E1 out 0 in 0",
    "missing include": ".include nowhere.lib",
    "unknown model": "D1 out 0 nomodel",
    "wrong model type": ".model m npn\nD1 out 0 m",
    "duplicate device": "R1 out 0 5",
    "unknown dot card": ".frobnicate",
    "unknown element letter": "?1 out 0 1",
    "voltage source loop": "V2 in 0 DC 0 AC 2",
    "missing value parse": "R9 out 0 abc",
    "unknown controlling source": "F1 out 0 Vnone 1",
    "unknown function": "B1 out 0 v=nofunction(v(in))",
    "nothing at the saved node": None,
}


@pytest.fixture(scope="module")
def simulator() -> Engine:
    return engine()


def solve(simulator: Engine, netlist: str, command: str = SWEEP, grid: np.ndarray = GRID) -> np.ndarray:
    simulator.load(netlist)
    return simulator.analyse(command, grid, ["out"])


def test_a_divider_halves(simulator: Engine) -> None:
    np.testing.assert_allclose(solve(simulator, GOOD)[0], 0.5, rtol=1e-12)


@pytest.mark.parametrize("name", BROKEN)
def test_a_broken_circuit_after_a_good_one_fails_and_the_next_is_right(simulator: Engine, name: str) -> None:
    solve(simulator, GOOD)
    card = BROKEN[name]
    broken = GOOD.replace("out", "other").replace("v(other)", "v(out)") if card is None else f"{GOOD}{card}\n"
    with pytest.raises(SimulationError, match=r"\w"):
        solve(simulator, broken)
    np.testing.assert_allclose(solve(simulator, GOOD)[0], 0.5, rtol=1e-12)


def test_a_failed_load_leaves_no_older_circuit_to_simulate(simulator: Engine) -> None:
    solve(simulator, GOOD)
    with pytest.raises(SimulationError, match="refused|unknown|nothere|loaded"):
        solve(simulator, GOOD + "X1 in out nothere\n")
    with pytest.raises(SimulationError, match="no vector|circuit|refused"):
        solve(simulator, "")


def test_a_result_at_other_frequencies_is_refused(simulator: Engine) -> None:
    simulator.load(GOOD)
    with pytest.raises(SimulationError, match="frequencies"):
        simulator.analyse("ac dec 10 1.0 2000.0", GRID, ["out"])
    with pytest.raises(SimulationError, match="frequencies"):
        simulator.analyse(SWEEP, GRID * (1 + 1e-6), ["out"])


def test_a_vector_that_is_not_there_is_refused(simulator: Engine) -> None:
    simulator.load(GOOD)
    with pytest.raises(SimulationError, match="no vector"):
        simulator.analyse(SWEEP, GRID, ["elsewhere"])
    np.testing.assert_allclose(simulator.analyse(SWEEP, GRID, ["out"])[0], 0.5, rtol=1e-12)


def test_a_result_that_is_not_finite_is_refused(simulator: Engine) -> None:
    simulator.load(GOOD + "G2 0 far in 0 1e200\nR3 far 0 1e200\nG3 0 out far 0 1.0\n")
    with pytest.raises(SimulationError, match="finite|singular|aborted"):
        simulator.analyse(SWEEP, GRID, ["out"])


def test_altering_something_unknown_is_an_error(simulator: Engine) -> None:
    simulator.load(GOOD)
    with pytest.raises(SimulationError, match="r77|device|found"):
        simulator.alter(["alter r77 = 5.0"])


def test_altered_values_count_and_long_lists_are_split(simulator: Engine) -> None:
    simulator.load(GOOD)
    simulator.alter([f"alter r2 = {value!r}" for value in np.linspace(1, 3000, 300).tolist()])
    np.testing.assert_allclose(simulator.analyse(SWEEP, GRID, ["out"])[0], 0.75, rtol=1e-12)


def _kill_the_instance() -> str:
    simulator = engine()
    solve(simulator, GOOD)
    try:
        simulator.load(GOOD + "R5 out 0 {nothing_defined}\n")
    except EngineDeadError as error:
        return f"dead: {error}"
    return "alive"


def test_an_undefined_parameter_is_known_to_kill_the_instance() -> None:
    with ProcessPoolExecutor(1, multiprocessing.get_context("spawn")) as pool:
        assert pool.submit(_kill_the_instance).result().startswith("dead: ")


def test_no_library_is_said_plainly(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("NGSPICE_LIBRARY_PATH", raising=False)
    monkeypatch.setattr("modepair.runner.engine.find_library", lambda name: None)
    monkeypatch.setattr("modepair.runner.engine.MACOS_PLACES", ())
    with pytest.raises(EngineMissingError, match="apt-get install libngspice0.*NGSPICE_LIBRARY_PATH"):
        locate_library()


def test_a_named_library_is_taken(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NGSPICE_LIBRARY_PATH", str(Path("somewhere") / "libngspice.so"))
    assert locate_library() == str(Path("somewhere") / "libngspice.so")
