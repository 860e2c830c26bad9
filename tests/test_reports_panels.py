"""Panels: places and look."""

import numpy as np
import pytest

from modepair.reports.panels import above_left, in_our_look, make_panels


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


def test_texts_above_a_panel_stand_in_inches_from_its_corner():
    figure, ((panel,),) = make_panels(1, 1, room=1.0, height=3.0, width=5.0, title="")
    corner = panel.transAxes.transform((0.0, 1.0))
    moved = above_left(panel, 0.5, 0.25).transform((0.0, 1.0)) - corner
    assert moved / figure.dpi == pytest.approx([0.5, 0.25])
    panel.remove()
    with pytest.raises(ValueError, match="the panel must belong to a figure"):
        above_left(panel)
