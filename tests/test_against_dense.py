"""The tool's macromodels, decks and engine against the dense and the symbolic solution.

Random stages of all four topologies with every non-ideality at once.
"""

import numpy as np
import pytest

from modepair.circuits import COPIES, OUTPUT, BuiltStage, structures
from modepair.reports import ModePair
from modepair.runner.analyses import plan_analyses
from modepair.runner.engine import engine
from modepair.sweeps import Frequency
from tests.dense import solve_dense
from tests.random_stages import TOPOLOGIES, random_parts
from tests.solving import solve
from tests.symbolic import solve_symbolic

SWEEP = Frequency(start=1.0, stop=1e6, points_per_decade=2)

FREQUENCY_HZ = np.geomspace(1, 1e6, 13)

TOLERANCE_DB = 0.002
"""What the tool promises. ngspice's round-off of about 1e-10 V is 0.001 dB of the 1e-6 V that a stage of gain
10 puts out at 140 dB."""

STAGES = 20


def solve_at_each(topology, parts):
    """Each frequency an analysis of its own: pivots chosen at that frequency."""
    return solve(topology, parts, FREQUENCY_HZ)


def solve_in_one_sweep(topology, parts):
    """One sweep over all frequencies, as a run does it: pivots chosen at the first frequency."""
    (structure,) = structures(BuiltStage(topology), parts, 1)
    simulator = engine()
    simulator.load(structure.text(0))
    gains = plan_analyses(SWEEP).solve(simulator, [f"{OUTPUT}_{copy}" for copy in COPIES])
    return ModePair(FREQUENCY_HZ, *gains)


def decibels(ratio):
    return 20 * np.log10(np.abs(ratio))


def deviations(pair, common, differential):
    """CMRR, common-mode gain and differential gain, dB away from the given ones; NaN above 140 dB of CMRR."""
    away = np.array(
        [
            pair.cmrr_db + decibels(common / differential),
            decibels(pair.common_gain / common),
            decibels(pair.differential_gain / differential),
        ]
    )
    away[:, decibels(differential / common) > 140] = np.nan
    return np.abs(away)


@pytest.mark.parametrize("solution", [solve_at_each, solve_in_one_sweep])
@pytest.mark.parametrize("topology", TOPOLOGIES)
def test_random_stages_agree_with_the_dense_solution(topology, solution):
    rng = np.random.default_rng(100 + TOPOLOGIES.index(topology))
    worst, where = 0.0, "nowhere"
    for number in range(STAGES):
        parts = random_parts(topology, rng)
        away = deviations(solution(topology, parts), *solve_dense(topology, parts, FREQUENCY_HZ))
        if np.nanmax(away) > worst:
            worst = np.nanmax(away)
            figure, point = np.unravel_index(np.nanargmax(away), away.shape)
            where = (
                f"{('CMRR', 'common gain', 'differential gain')[figure]} of stage {number} "
                f"at {FREQUENCY_HZ[point]:g} Hz; parts {parts}"
            )
    assert worst <= TOLERANCE_DB, f"worst deviation {worst:.3g} dB: {where}"


@pytest.mark.parametrize("topology", TOPOLOGIES)
def test_a_stage_with_everything_agrees_with_lcapy(topology):
    """Its CMRR stays below 100 dB, so that round-off of 1e-10 V is below 1e-4 dB."""
    parts, common, differential = solve_symbolic(topology, FREQUENCY_HZ)
    away = deviations(solve(topology, parts, FREQUENCY_HZ), common, differential)
    assert np.nanmax(away) <= 1e-3, f"worst deviation {np.nanmax(away):.3g} dB"
