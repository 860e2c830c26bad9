"""Plots: what is drawn, that labels do not overlap."""

import itertools
import sys

import numpy as np
import pytest
from matplotlib.figure import Figure
from matplotlib.text import Text
from matplotlib.transforms import Bbox

from modepair.reports.axis_labels import axis_columns
from modepair.reports.case_curves import CaseCurves
from modepair.reports.pairs import ModePair
from modepair.reports.plots import MOST_CURVES, plot_cmrr, plot_gains
from modepair.sweeps.measured import Measurement
from tests.synthetic_cases import Made, one_pole_cases

SIZES = [(1, 1), (2, 1), (4, 2), (4, 6), (3, 10), (4, 15)]


def labels_of(made: Made) -> dict[str, list[str]]:
    return axis_columns(made.cases, made.axes)


def curves_of(made: Made, **said) -> CaseCurves:
    return CaseCurves(made.pair, labels_of(made), **said)


def with_gid(figure: Figure, start: str) -> list:
    return figure.findobj(lambda artist: (artist.get_gid() or "").startswith(start))


def shown_texts(figure: Figure) -> list[Text]:
    """Every text that is drawn; matplotlib keeps its own tick labels outside the view but does not draw them."""
    figure.canvas.draw()
    outside = set()
    for axes in figure.axes:
        for axis in (axes.xaxis, axes.yaxis):
            low, high = axis.get_view_interval()
            for tick in (*axis.get_major_ticks(), *axis.get_minor_ticks()):
                if not low <= tick.get_loc() <= high:
                    outside |= {id(tick.label1), id(tick.label2)}
    texts = figure.findobj(Text)
    return [t for t in texts if t.get_visible() and t.get_text().strip() and id(t) not in outside]


def overlaps(texts: list[Text]) -> list[tuple[str, str]]:
    boxes = [(text.get_text(), text.get_window_extent()) for text in texts]
    found = []
    for (one, a), (other, b) in itertools.combinations(boxes, 2):
        both = Bbox.intersection(a, b)
        if both is not None and both.width > 0.5 and both.height > 0.5:
            found.append((one, other))
    return found


@pytest.mark.parametrize("plot", [plot_cmrr, plot_gains])
@pytest.mark.parametrize(("opamps", "imbalances"), SIZES)
def test_no_text_overlaps_or_leaves_the_page(plot, opamps, imbalances):
    made = one_pole_cases(opamps, imbalances, perfect=(2,))
    figure = plot(curves_of(made, title="Silo weighing, bridge front end"))
    texts = shown_texts(figure)
    assert overlaps(texts) == []
    page = figure.bbox
    for text in texts:
        box = text.get_window_extent()
        assert page.x0 - 1 <= box.x0 <= box.x1 <= page.x1 + 1, text.get_text()
        assert page.y0 - 1 <= box.y0 <= box.y1 <= page.y1 + 1, text.get_text()


@pytest.mark.parametrize(("opamps", "imbalances"), SIZES[:-1])
def test_a_line_and_a_label_per_case(opamps, imbalances):
    made = one_pole_cases(opamps, imbalances)
    figure = plot_cmrr(curves_of(made))
    curves = with_gid(figure, "curve-")
    lines = [c for c in curves if c.get_gid() != "curve-label"]
    assert len(lines) == len(made.cases)
    for row, line in enumerate(lines):
        assert np.array_equal(line.get_ydata(), made.pair.cmrr_db[row])
    written = [c.get_text() for c in curves if c.get_gid() == "curve-label"]
    assert len(set(written)) == len(written) == (len(made.cases) if len(made.cases) > 1 else 0)


def test_labels_stand_in_the_order_of_their_curves():
    made = one_pole_cases(4, 2)
    figure = plot_cmrr(curves_of(made))
    places = {t.get_text(): t.get_position()[1] for t in with_gid(figure, "curve-label")}
    ends = {f"{r['stage.opamp']}, imbalance {r['source.imbalance']:g}": made.pair.cmrr_db[i, -1]
            for i, (_, r) in enumerate(made.cases.iterrows())}  # fmt: skip
    assert sorted(places, key=places.get) == sorted(ends, key=ends.get)


def test_frequency_ticks():
    made = one_pole_cases(2, 1)
    figure = plot_cmrr(curves_of(made))
    ticks = [t.get_text() for t in with_gid(figure, "frequency") if t.get_gid() == "frequency"]
    assert ticks == ["1 Hz", "10 Hz", "100 Hz", "1 kHz", "10 kHz", "100 kHz", "1 MHz"]
    assert [t.get_text() for t in with_gid(figure, "frequency-name")] == ["frequency"]
    assert [t.get_text() for t in with_gid(figure, "level-name")] == ["CMRR (dB)"]


def cut(pair: ModePair, part: slice) -> ModePair:
    return ModePair(pair.frequency_hz[part], pair.common_gain[:, part], pair.differential_gain[:, part])


def test_ticks_of_a_narrow_band():
    made = one_pole_cases(2, 1)
    band = cut(made.pair, slice(45, 60))
    figure = plot_cmrr(CaseCurves(band, labels_of(made)))
    ticks = [t.get_text() for t in with_gid(figure, "frequency") if t.get_gid() == "frequency"]
    assert ticks == ["200 Hz", "500 Hz"]


@pytest.mark.parametrize("plot", [plot_cmrr, plot_gains])
def test_a_single_frequency_is_marked(plot):
    made = one_pole_cases(2, 1)
    figure = plot(CaseCurves(cut(made.pair, slice(0, 1)), labels_of(made)))
    assert {line.get_marker() for line in with_gid(figure, "curve-") if line.get_gid() != "curve-label"} == {
        "o"
    }
    assert overlaps(shown_texts(figure)) == []


def test_many_cases_show_their_spread():
    made = one_pole_cases(4, 15)
    assert len(made.cases) > MOST_CURVES
    figure = plot_cmrr(curves_of(made, case=range(101, 161)))
    assert with_gid(figure, "curve-1") == []
    assert {a.get_gid() for a in with_gid(figure, "")} >= {
        "all-cases",
        "most-cases",
        "median",
        "lowest",
        "highest",
    }
    (median,) = with_gid(figure, "median")
    assert median.get_ydata() == pytest.approx(np.median(made.pair.cmrr_db, axis=0))
    lowest = int(made.pair.cmrr_db.min(axis=1).argmin())
    (drawn,) = with_gid(figure, "lowest")
    assert np.array_equal(drawn.get_ydata(), made.pair.cmrr_db[lowest])
    written = [t.get_text() for t in with_gid(figure, "curve-label")]
    assert any(t.startswith(f"lowest: case {101 + lowest}\n") for t in written)
    assert "all 60 cases" in written


def test_a_choice_of_cases_says_so():
    made = one_pole_cases(4, 15)
    figure = plot_cmrr(curves_of(made, total=20_000))
    assert "60 of 20000 cases" in [t.get_text() for t in with_gid(figure, "curve-label")]


def test_a_case_above_the_floor_is_never_the_highest():
    made = one_pole_cases(4, 15, perfect=(7, 33))
    figure = plot_cmrr(curves_of(made))
    (text,) = [t.get_text() for t in with_gid(figure, "curve-label") if t.get_text().startswith("highest")]
    assert text.startswith("highest below the floor: case ")
    assert "case 7\n" not in text
    assert "case 33\n" not in text


def test_rank_chooses_the_extremes():
    made = one_pole_cases(4, 15)
    figure = plot_cmrr(curves_of(made, rank_db=np.arange(60.0)[::-1]))
    written = " ".join(t.get_text() for t in with_gid(figure, "curve-label"))
    assert "lowest: case 60" in written
    assert "highest: case 1\n" in written


def test_floor_zone_only_where_curves_touch_it():
    made = one_pole_cases(2, 2)
    assert with_gid(plot_cmrr(curves_of(made)), "floor") == []
    touched = one_pole_cases(2, 2, perfect=(2,))
    figure = plot_cmrr(curves_of(touched))
    assert [t.get_text() for t in with_gid(figure, "floor-name")] == [
        "above the numerical floor of the solve"
    ]
    (line,) = with_gid(figure, "curve-2")
    assert np.all(np.isnan(line.get_ydata()))  # a bound is drawn thin, never as a curve
    (bound,) = with_gid(figure, "bound-2")
    assert bound.get_linewidth() < line.get_linewidth()
    written = [t.get_text() for t in with_gid(figure, "curve-label")]
    assert "quiet-bipolar, imbalance 20 (above the floor)" in written


@pytest.mark.parametrize(("opamps", "imbalances"), [(2, 2), (4, 15)])
def test_all_cases_above_the_floor(opamps, imbalances):
    made = one_pole_cases(opamps, imbalances, perfect=tuple(range(1, opamps * imbalances + 1)))
    for plot in (plot_cmrr, plot_gains):
        assert overlaps(shown_texts(plot(curves_of(made)))) == []


def test_gains_have_magnitude_and_phase():
    made = one_pole_cases(2, 1)
    figure = plot_gains(curves_of(made))
    assert [t.get_text() for t in with_gid(figure, "level-name")] == [
        "differential gain A_dm (dB)", "common-mode gain A_cm (dB)",
        "phase of A_dm (degrees)", "phase of A_cm (degrees)",
    ]  # fmt: skip
    drawn = [[line.get_ydata() for line in axes.lines] for axes in figure.axes]
    assert drawn[0][0] == pytest.approx(20 * np.log10(np.abs(made.pair.differential_gain[0])))
    # One pole: -atan(f / pole), in degrees; exact but for rounding.
    assert drawn[2][0] == pytest.approx(-np.degrees(np.arctan(made.pair.frequency_hz / 1e4)), abs=1e-9)


@pytest.mark.parametrize("rounding", [1e-9j, -1e-9j])
def test_phase_of_an_inverted_gain_starts_at_180(rounding):
    f = np.geomspace(1, 1e6, 61)
    common = np.full((1, 61), -1e-3 + rounding)
    figure = plot_gains(CaseCurves(ModePair(f, common, np.ones((1, 61))), {}))
    assert figure.axes[3].lines[0].get_ydata() == pytest.approx(np.full(61, 180.0), abs=1e-3)


def test_phase_below_the_floor_is_not_drawn():
    made = one_pole_cases(1, 2, perfect=(2,))
    figure = plot_gains(curves_of(made))
    assert np.all(np.isnan(figure.axes[3].lines[1].get_ydata()))
    assert not np.any(np.isnan(figure.axes[3].lines[0].get_ydata()))


def test_mask_and_baseline():
    made = one_pole_cases(2, 2)
    figure = plot_cmrr(curves_of(made), mask=[(1.0, 90.0), (1e3, 90.0), (1e6, 30.0)], baseline=made.pair)
    (mask,) = with_gid(figure, "mask")
    assert mask.get_ydata().tolist() == [90.0, 90.0, 30.0]
    assert len(with_gid(figure, "baseline")) == 4
    written = [t.get_text() for t in with_gid(figure, "curve-label")]
    assert {"baseline", "least CMRR asked for"} <= set(written)
    assert overlaps(shown_texts(figure)) == []


def test_texts_are_not_taken_for_mathematics():
    made = one_pole_cases(2, 1)
    labels = {"stage.opamp": ["a $x_1$", "b $\\frac$"]}
    figure = plot_cmrr(CaseCurves(made.pair, labels, title="5 $ or $6_x"))
    figure.canvas.draw()
    assert {"a $x_1$", "b $\\frac$", "5 $ or $6_x"} <= {t.get_text() for t in figure.findobj(Text)}


def test_the_users_settings_do_not_leak_in_or_out():
    import matplotlib as mpl

    made = one_pole_cases(1, 2)
    with mpl.rc_context({"font.size": 30.0, "axes.facecolor": "black"}):
        figure = plot_cmrr(curves_of(made))
        assert mpl.rcParams["font.size"] == 30.0
    assert figure.axes[0].get_facecolor() == (1.0, 1.0, 1.0, 1.0)
    pyplot = sys.modules.get("matplotlib.pyplot")
    assert pyplot is None or not pyplot.get_fignums()  # never registered with pyplot


def test_measurements_lie_over_the_curves_as_points():
    made = one_pole_cases(2, 1)
    frequency_hz = np.array([0.5, 50.0, 1e3])  # the first lies outside the solved band
    bench = Measurement("board 3 $x$", frequency_hz, np.array([90.0, 95.0, 70.0]), np.full(3, np.inf), {})
    figure = plot_cmrr(curves_of(made), measured=[bench])
    (points,) = [line for line in figure.axes[0].lines if line.get_gid() == "measured-1"]
    np.testing.assert_array_equal(points.get_xydata(), [[50.0, 95.0], [1e3, 70.0]])
    assert "measured: board 3 $x$" in [text.get_text() for text in shown_texts(figure)]
