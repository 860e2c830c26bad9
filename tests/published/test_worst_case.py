"""Four resistors at the edges of their tolerance, difference stage, ideal op-amp.

Source: CMRR = (1 + G)/(4 t), Sedra and Smith, Microelectronic Circuits, a problem on the difference
amplifier, with its worked figures; unity-gain figures: Jung (ed.), Op Amp Applications Handbook, 2005 (from
memory).
At the vertex R1, R4 high and R2, R3 low the exact gains give CMRR = (1 + G - t^2 (G - 1))/(4 t) (derivation).
"""

from itertools import product

import numpy as np
import pytest

from tests.published.parts import difference
from tests.solving import solve

FREQUENCY_HZ = np.array([1.0])


def cmrr_db(gain, factors):
    parts = difference(gain)
    for name, factor in zip(("R1", "R2", "R3", "R4"), factors, strict=True):
        parts[name] *= factor
    return solve("difference", parts, FREQUENCY_HZ).cmrr_db[0]


def worst_vertex_db(gain, tolerance):
    up, down = 1 + tolerance, 1 - tolerance
    return cmrr_db(gain, (up, down, down, up))


@pytest.mark.parametrize("gain", [1.0, 10.0, 100.0])
@pytest.mark.parametrize("tolerance", [1e-4, 1e-3, 1e-2, 5e-2])
def test_exact_vertex(gain, tolerance):
    """Tolerance 1e-4 dB: round-off of 1e-10 V in A_cm of at least 1e-4."""
    exact = (1 + gain - tolerance**2 * (gain - 1)) / (4 * tolerance)
    assert worst_vertex_db(gain, tolerance) == pytest.approx(20 * np.log10(exact), abs=1e-4)
    assert exact == pytest.approx((1 + gain) / (4 * tolerance), rel=tolerance**2)


def test_no_other_vertex_is_worse():
    """All 16; the opposite vertex gives the same magnitude, so the bound is met twice."""
    figures = [cmrr_db(10.0, factors) for factors in product((0.99, 1.01), repeat=4)]
    worst = worst_vertex_db(10.0, 0.01)
    assert min(figures) == pytest.approx(worst, abs=1e-4)
    assert sum(figure < worst + 1e-3 for figure in figures) == 2


@pytest.mark.parametrize(
    ("gain", "tolerance", "figure_db"),
    [(100.0, 0.01, 68), (100.0, 0.0025, 80), (1.0, 0.01, 34), (1.0, 0.001, 54), (1.0, 0.0001, 74)],
)
def test_printed_figures(gain, tolerance, figure_db):
    """The sources print whole decibels, so half of one is the tolerance."""
    assert worst_vertex_db(gain, tolerance) == pytest.approx(figure_db, abs=0.5)


def test_eighty_decibels_needs_a_quarter_per_cent():
    """The same problem's second figure: at 0.25 % the stage of gain 100 still has 80 dB, at 0.26 % no
    more."""
    assert worst_vertex_db(100.0, 0.0025) > 80 > worst_vertex_db(100.0, 0.0026)
