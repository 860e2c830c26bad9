"""Labels moved apart: no overlaps, inside, as little as possible."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import minimize

from modepair.reports.placement import spread

labels = st.lists(st.tuples(st.floats(0, 10), st.floats(0.05, 0.4)), min_size=1, max_size=20)


@given(labels)
def test_apart_and_inside(items):
    wanted = sorted(centre for centre, _ in items)
    heights = np.array([height for _, height in items])
    at = spread(wanted, heights, 0.0, 10.0)
    edges = np.column_stack([at - heights / 2, at + heights / 2])
    assert np.all(edges[1:, 0] >= edges[:-1, 1] - 1e-9)
    assert edges.min() >= -1e-9
    assert edges.max() <= 10 + 1e-9


def test_labels_with_room_stay():
    assert spread([1.0, 3.0, 5.0], [1.0, 1.0, 1.0], 0.0, 6.0) == pytest.approx([1.0, 3.0, 5.0])


def test_equal_wishes_spread_evenly():
    assert spread([5.0, 5.0, 5.0], [1.0, 1.0, 1.0], 0.0, 10.0) == pytest.approx([4.0, 5.0, 6.0])


def test_least_squares():
    # Against a general optimiser; its tolerance is 1e-9 on the sum of squares, so about 1e-4 on places.
    wanted, heights = np.array([0.2, 0.3, 2.0, 2.1, 2.2, 9.9]), np.array([1.0, 0.5, 1.0, 1.5, 0.5, 1.0])
    gaps = (heights[:-1] + heights[1:]) / 2
    found = minimize(
        lambda x: np.sum((x - wanted) ** 2),
        np.linspace(1, 9, 6),
        bounds=[(0.5, 9.5)] * 6,
        constraints={"type": "ineq", "fun": lambda x: np.diff(x) - gaps},
        options={"ftol": 1e-12},
    )
    assert spread(wanted, heights, 0.0, 10.0) == pytest.approx(found.x, abs=1e-4)


def test_nothing_to_place():
    assert spread([], [], 0.0, 1.0).size == 0


def test_refuses():
    with pytest.raises(ValueError, match="labels need 3, but there are 2"):
        spread([0.0, 1.0, 2.0], [1.0, 1.0, 1.0], 0.0, 2.0)
    with pytest.raises(ValueError, match="wanted must ascend"):
        spread([1.0, 0.0], [0.1, 0.1], 0.0, 2.0)
