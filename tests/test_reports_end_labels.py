"""Labels at the ends of curves: in order, joined to their curves, with room."""

import numpy as np
import pytest
from matplotlib.colors import to_hex

from modepair.reports.end_labels import EndLabel, label_height, label_room, write_labels
from modepair.reports.panels import in_our_look, make_panels


def lines_of(figure, name):
    (found,) = figure.findobj(lambda artist: artist.get_gid() == name)
    return found


@in_our_look
def written(ends, height=3.0):
    figure, ((panel,),) = make_panels(1, 1, label_room(ends), height, 4.0, "")
    panel.set_ylim(0, 100)
    write_labels(panel, ends)
    return figure, panel


def test_a_label_with_room_stands_level_with_its_curve():
    figure, panel = written([EndLabel(25.0, "low", "#000000"), EndLabel(75.0, "high", "#000000")])
    box = panel.get_position()
    assert [t.get_position()[1] for t in figure.texts] == pytest.approx(
        [box.y0 + 0.25 * box.height, box.y0 + 0.75 * box.height]
    )


def test_leaders_start_at_the_curves_and_end_at_the_labels():
    figure, panel = written([EndLabel(50.0, f"case {n}", "#000000", order=(n,)) for n in range(4)])
    box = panel.get_position()
    height = figure.get_size_inches()[1]
    leaders = np.array(lines_of(figure, "leaders").get_segments())[..., 1] / height
    assert leaders.shape == (4, 3)
    assert leaders[:, 0] == pytest.approx([box.y0 + box.height / 2] * 4)
    assert leaders[:, -1] == pytest.approx([t.get_position()[1] for t in figure.texts])
    assert [t.get_text() for t in figure.texts] == [f"case {n}" for n in range(4)]
    assert np.all(np.diff([t.get_position()[1] for t in figure.texts]) > 0)


def test_a_curve_out_of_view_is_named_at_the_edge():
    figure, panel = written([EndLabel(-50.0, "far", "#000000")])
    box = panel.get_position()
    assert box.y0 < figure.texts[0].get_position()[1] < box.y0 + 0.1 * box.height


def test_samples_show_the_dashes():
    figure, _ = written(
        [EndLabel(50.0, "a", "#112233", (5.0, 2.0), width=2.0), EndLabel(60.0, "b", "#445566", width=4.0)]
    )
    samples = lines_of(figure, "samples")
    assert [to_hex(colour) for colour in samples.get_colors()] == ["#112233", "#445566"]
    assert list(samples.get_linewidths()) == [2.0, 4.0]
    (_, dashed), (_, solid) = samples.get_linestyles()
    # Lengths are in widths of the line.
    assert dashed == pytest.approx([10.0, 4.0])
    assert solid is None


def test_room_grows_with_the_text():
    short, long = [EndLabel(0, "a", "#000000")], [EndLabel(0, "a much longer text", "#000000")]
    assert label_room(long) > label_room(short) > label_room([])
    assert label_height([*short, *long]) == pytest.approx(2 * label_height(short))
    assert label_height([EndLabel(0, "two\nlines", "#000000")]) == pytest.approx(2 * label_height(short))


def test_nothing_to_write():
    figure, _ = written([])
    assert figure.texts == []


def test_a_panel_without_a_figure_is_refused():
    _, panel = written([])
    panel.remove()
    with pytest.raises(ValueError, match="the panel must belong to a figure"):
        write_labels(panel, [EndLabel(0.0, "a", "#000000")])
