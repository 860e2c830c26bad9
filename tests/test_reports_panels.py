"""Panels: ticks, ranges and places."""

import numpy as np
import pytest

from modepair.reports.panels import frequency_axis, in_our_look, level_axis, make_panels


def one_panel():
    return make_panels(1, 1, room=1.0, height=3.0, width=5.0, title="")[1][0][0]


def labels(axis):
    return [text for text in axis.get_major_formatter().format_ticks(axis.get_majorticklocs()) if text]


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
    assert labels(panel.xaxis) == ticks
    assert panel.get_xlim() == pytest.approx((low, high))


def test_one_frequency_names_itself():
    panel = one_panel()
    frequency_axis(panel, np.array([60.0]))
    assert labels(panel.xaxis) == ["60 Hz"]


def test_sparse_labels_every_second_decade():
    panel = one_panel()
    frequency_axis(panel, np.geomspace(1, 1e6, 7), sparse=True)
    assert labels(panel.xaxis) == ["1 Hz", "100 Hz", "10 kHz", "1 MHz"]


@pytest.mark.parametrize(
    "levels", [[0.0, 130.0], [99.9, 100.1], [80.0, 80.0], [-400.0, 300.0], [np.nan, 5.0], [np.nan]]
)
def test_levels_are_in_view_with_a_few_round_ticks(levels):
    panel = one_panel()
    level_axis(panel, [np.array(levels)], "CMRR (dB)", (1, 2, 5, 10, 20, 40))
    low, high = panel.get_ylim()
    known = [level for level in levels if np.isfinite(level)]
    assert all(low < level < high for level in known)
    ticks = [tick for tick in panel.yaxis.get_majorticklocs() if low <= tick <= high]
    assert 2 <= len(ticks) <= 19
    assert all(tick == round(tick) for tick in ticks)


def test_places_are_in_inches():
    figure, panels = make_panels(2, 2, room=1.5, height=3.0, width=4.0, title="x", lower_height=2.0)
    width, height = figure.get_size_inches()
    sizes = [
        [(p.get_position().width * width, p.get_position().height * height) for p in row] for row in panels
    ]
    assert np.array(sizes) == pytest.approx(np.array([[(4.0, 3.0)] * 2, [(4.0, 2.0)] * 2]))
    assert width - panels[0][1].get_position().x1 * width == pytest.approx(1.5 + 0.15)


def test_settings_are_put_back_after_an_error():
    import matplotlib as mpl

    @in_our_look
    def draw() -> None:
        assert mpl.rcParams["svg.hashsalt"] == "modepair"
        raise RuntimeError("stop")

    before = mpl.rcParams["svg.hashsalt"]
    with pytest.raises(RuntimeError, match="stop"):
        draw()
    assert mpl.rcParams["svg.hashsalt"] == before
