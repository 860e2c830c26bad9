"""The budget's arithmetic: the worst vertex of complex contributions, root-sum-square, decibels."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from modepair.reports.budget import decibels, root_sum_square, worst_signs

Complex = NDArray[np.complex128]

PARTS = st.integers(-20, 20).map(lambda n: n / 4)
PHASORS = st.builds(complex, PARTS, PARTS)


def largest(nominal: complex, contributions: Complex) -> float:
    """By full enumeration of the vertices."""
    signs = np.array(list(product((-1.0, 1.0), repeat=len(contributions)))).reshape(-1, len(contributions))
    return float(np.abs(nominal + signs @ contributions).max())


@settings(max_examples=300, deadline=None)
@given(nominal=PHASORS, contributions=st.lists(PHASORS, min_size=1, max_size=9))
def test_the_first_vertex_is_the_worst_of_all(nominal: complex, contributions: list[complex]) -> None:
    """On a coarse grid of phasors, so that zeros, equal ones and right angles are common. To round-off."""
    array = np.array(contributions, complex)
    signs = worst_signs(nominal, array)
    sizes = np.abs(nominal + signs @ array)
    assert sizes[0] == pytest.approx(largest(nominal, array), rel=1e-12, abs=1e-12)
    assert np.all(np.diff(sizes) <= 1e-12 * max(1.0, sizes[0]))
    assert set(np.unique(signs)) <= {-1.0, 1.0}


@pytest.mark.parametrize("seed", range(5))
def test_twelve_phasors_of_any_phase(seed: int) -> None:
    rng = np.random.default_rng(seed)
    contributions = 10 ** rng.uniform(-7, -3, 12) * np.exp(2j * np.pi * rng.random(12))
    nominal = 1e-4 * np.exp(2j * np.pi * rng.random())
    signs = worst_signs(nominal, contributions)
    assert len(signs) <= 24
    size = abs(nominal + signs[0] @ contributions)
    assert size == pytest.approx(largest(nominal, contributions), rel=1e-12)


@pytest.mark.parametrize(
    ("nominal", "first"), [(1e-6, [1, -1, 1]), (-1e-6, [-1, 1, -1]), (-1e-3, [-1, 1, -1])]
)
def test_real_contributions_all_go_the_nominals_way(nominal: float, first: list[float]) -> None:
    signs = worst_signs(nominal, np.array([1e-5, -2e-5, 3e-6], complex))
    assert signs[0].tolist() == first


def test_no_tolerances_make_one_board_without_signs() -> None:
    assert worst_signs(1e-3, np.array([], complex)).shape == (1, 0)


def test_root_sum_square_of_a_3_4_5_triangle() -> None:
    """Contributions at right angles to each other and to the nominal count by their sizes alone."""
    total = root_sum_square(np.array([1j, 0]), np.array([[3, 3j], [4j, -4]]))
    np.testing.assert_allclose(total, [6.0, 5.0])


def test_decibels() -> None:
    np.testing.assert_allclose(decibels([1e-5, -1e-3j, 10]), [100.0, 60.0, -20.0])
    assert decibels(0.0) == np.inf
