"""Scales: ticks, their texts, ranges."""

import numpy as np
import pytest

from modepair.reports.panels import make_panels
from modepair.reports.scales import frequency_axis, level_axis


def one_panel():
    return make_panels(1, 1, room=1.0, height=3.0, width=5.0, title="")[1][0][0]


def labels(panel):
    return [text.get_text() for text in panel.texts if text.get_gid() == "frequency"]


def grid(panel, across):
    """Places of the lines across an axis."""
    found = [c for c in panel.collections if c.get_gid() == "grid"]
    lines = [line for c in found for line in c.get_segments()]
    return [line[0, across] for line in lines if line[0, across] == line[1, across]]


@pytest.mark.parametrize(
    ("low", "high", "ticks"),
    [
        (1.0, 1e6, ["1 Hz", "10 Hz", "100 Hz", "1 kHz", "10 kHz", "100 kHz", "1 MHz"]),
        (20.0, 20e3, ["100 Hz", "1 kHz", "10 kHz"]),
        (40.0, 70.0, ["40 Hz", "50 Hz", "70 Hz"]),
        (1e-3, 1e-1, ["1 mHz", "10 mHz", "100 mHz"]),
        (55.0, 65.0, ["55 Hz", "65 Hz"]),
        (15.0, 150.0, ["20 Hz", "50 Hz", "100 Hz"]),
    ],
)
def test_frequency_ticks(low, high, ticks):
    panel = one_panel()
    frequency_axis(panel, np.geomspace(low, high, 11))
    assert labels(panel) == ticks
    assert panel.get_xlim() == pytest.approx((low, high))
    assert len(grid(panel, across=0)) == len(ticks)


def test_one_frequency_names_itself():
    panel = one_panel()
    frequency_axis(panel, np.array([60.0]))
    assert labels(panel) == ["60 Hz"]


def test_sparse_labels_every_second_decade():
    panel = one_panel()
    frequency_axis(panel, np.geomspace(1, 1e6, 7), sparse=True)
    assert labels(panel) == ["1 Hz", "100 Hz", "10 kHz", "1 MHz"]


@pytest.mark.parametrize(
    "levels", [[0.0, 130.0], [99.9, 100.1], [80.0, 80.0], [-400.0, 300.0], [np.nan, 5.0], [np.nan]]
)
def test_levels_are_in_view_with_a_few_round_ticks(levels):
    panel = one_panel()
    level_axis(panel, [np.array(levels)], "CMRR (dB)", (1, 2, 5, 10, 20, 40))
    low, high = panel.get_ylim()
    known = [level for level in levels if np.isfinite(level)]
    assert all(low < level < high for level in known)
    ticks = grid(panel, across=1)
    assert all(low <= tick <= high for tick in ticks)
    assert 2 <= len(ticks) <= 19
    assert all(tick == round(tick) for tick in ticks)
    assert [
        float(text.get_text().replace("−", "-")) for text in panel.texts if text.get_gid() == "level"
    ] == ticks


def test_zero_has_no_sign():
    panel = one_panel()
    level_axis(panel, [np.array([-0.4, 10.0])], "phase (degrees)", (1, 2, 5))
    assert [text.get_text() for text in panel.texts][:2] == ["0", "2"]


def test_matplotlib_draws_no_ticks_of_its_own():
    panel = one_panel()
    level_axis(panel, [np.array([0.0, 100.0])], "CMRR (dB)", (1, 2, 5, 10, 20, 40))
    frequency_axis(panel, np.geomspace(1, 1e6, 11))
    for axis in (panel.xaxis, panel.yaxis):
        assert not axis.get_visible()
        assert list(axis.get_majorticklocs()) == list(axis.get_minorticklocs()) == []


def test_the_last_panel_names_the_frequency():
    panel = one_panel()
    frequency_axis(panel, np.geomspace(1, 1e6, 11), named=False)
    assert "frequency" not in [text.get_text() for text in panel.texts]
    frequency_axis(panel, np.geomspace(1, 1e6, 11))
    assert "frequency" in [text.get_text() for text in panel.texts]
