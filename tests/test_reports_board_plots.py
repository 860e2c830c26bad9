"""Plots of boards: what is drawn, which levels are marked, that labels do not overlap."""

import numpy as np
import pytest
from matplotlib.figure import Figure

from modepair.reports import write_plot
from modepair.reports.board_histograms import BoardSpots, plot_histograms
from modepair.reports.board_plots import MOST_CASES, BoardCurves, plot_boards
from modepair.reports.half_normal import HalfNormal
from tests.test_reports_plots import overlaps, shown_texts, with_gid

MASK = ((1.0, 70.0), (1e3, 70.0), (1e5, 40.0))
F = np.geomspace(1.0, 1e5, 51)


def curves(number: int = 1, **changes) -> BoardCurves:
    fall = -20 * np.log10(np.hypot(1, F / 2e3)) - 4.0 * number
    levels = {1: 75.0, 5: 78.0, 50: 88.0, 95: 108.0, 99: 121.0}
    given = {
        "frequency_hz": F,
        "cmrr_db": {percent: level + fall for percent, level in levels.items()},
        "nominal_db": 100.0 + fall,
        "worst_db": 70.0 + fall,
        "worst_draw": 1000 + number,
        "label": f"case {number}: quiet-bipolar, matching 0.0{number} %",
        "note": "2000 boards, yield 98.3 % (97.6 to 98.8 %)",
    }
    return BoardCurves(**(given | changes))


def board_spots(spots: int = 2, count: int = 2000, offset: complex = 0.0, **changes) -> BoardSpots:
    rho = np.random.default_rng(11).standard_normal((count, spots)) * 1e-4 + offset
    given = {
        "frequency_hz": np.array([50.0, 60.0, 1e3, 4e3, 16e3][:spots]),
        "rho": rho + 0j,
        "nominal": np.full(spots, 2e-5 + 0j),
        "least_db": np.full(spots, 70.0),
    }
    return BoardSpots(**(given | changes))


def in_page_without_overlaps(figure: Figure) -> None:
    texts = shown_texts(figure)
    assert overlaps(texts) == []
    page = figure.bbox
    for text in texts:
        box = text.get_window_extent()
        assert page.x0 - 1 <= box.x0 <= box.x1 <= page.x1 + 1, text.get_text()
        assert page.y0 - 1 <= box.y0 <= box.y1 <= page.y1 + 1, text.get_text()


@pytest.mark.parametrize(("count", "mask"), [(1, ()), (1, MASK), (2, MASK), (3, ()), (MOST_CASES, MASK)])
def test_boards_do_not_overlap(count, mask):
    figure = plot_boards([curves(n) for n in range(1, count + 1)], title="Silo weighing", mask=mask)
    in_page_without_overlaps(figure)
    assert len(figure.axes) == count
    assert len({axes.get_ylim() for axes in figure.axes}) == 1


def test_each_panel_has_bands_curves_and_its_worst_board():
    cases = [curves(1), curves(2), curves(3)]
    figure = plot_boards(cases, mask=MASK)
    for name in ("all-boards", "most-boards", "median", "nominal", "worst", "mask"):
        assert len(with_gid(figure, name)) == 3
    for number, (median, worst) in enumerate(
        zip(with_gid(figure, "median"), with_gid(figure, "worst"), strict=True)
    ):
        assert np.array_equal(median.get_ydata(), cases[number].cmrr_db[50])
        assert np.array_equal(worst.get_ydata(), cases[number].worst_db)
    band = with_gid(figure, "all-boards")[0].get_paths()[0].vertices
    assert band[:, 1].max() == pytest.approx(cases[0].cmrr_db[99].max())
    assert band[:, 1].min() == pytest.approx(cases[0].cmrr_db[1].min())
    written = [text.get_text() for text in with_gid(figure, "curve-label")]
    assert [text for text in written if "draw" in text] == [
        "draw 1001",
        "worst board: draw 1002",
        "draw 1003",
    ]
    assert {"1 % to 99 % of boards", "5 % to 95 %", "median", "nominal", "least CMRR asked for"} <= set(
        written
    )


def test_a_nominal_circuit_at_the_floor_does_not_set_the_scale():
    figure = plot_boards([curves(1, nominal_db=np.full(F.size, 260.0))])
    assert figure.axes[0].get_ylim()[1] < 150.0
    assert "nominal (above the scale)" in [text.get_text() for text in with_gid(figure, "curve-label")]
    in_page_without_overlaps(figure)


def test_long_names_are_broken_to_the_panel():
    figure = plot_boards([curves(1, label="case 1: " + "very-quiet-bipolar, " * 6), curves(2)])
    in_page_without_overlaps(figure)
    assert any(text.get_text().endswith("…") for text in with_gid(figure, "heading"))


def test_one_frequency_and_absent_curves():
    one = BoardCurves(np.array([50.0]), {p: np.array([80.0 + p]) for p in (1, 5, 50, 95, 99)})
    in_page_without_overlaps(plot_boards([one]))


def test_boards_refuse():
    with pytest.raises(ValueError, match="boards of 1 to 6 cases fit one picture, not 7"):
        plot_boards([curves()] * 7)
    with pytest.raises(ValueError, match="absent: 1, 99"):
        curves(cmrr_db={5: F, 50: F, 95: F})
    with pytest.raises(ValueError, match=r"worst_db must have the shape \(51,\), not \(3,\)"):
        curves(worst_db=np.ones(3))


@pytest.mark.parametrize("nominal", [1e-13, 1.02e-4, 1e-6])
def test_histograms_do_not_overlap(nominal):
    least_db = np.array([10.0, 60.0, 79.9, 100.0, np.nan])
    made = board_spots(5, least_db=least_db, nominal=np.full(5, nominal + 0j), label="case 2: quiet-bipolar")
    in_page_without_overlaps(plot_histograms(made, title="Silo weighing"))


def test_a_histogram_counts_the_boards():
    made = board_spots(1)
    (histogram,) = with_gid(plot_histograms(made), "histogram")
    values, edges, _ = histogram.get_data()
    level_db = -20 * np.log10(np.abs(made.rho[:, 0]))
    inside = np.mean((level_db >= edges[0]) & (level_db <= edges[-1]))
    assert np.sum(values * np.diff(edges)) == pytest.approx(100 * inside)
    assert 0.99 <= inside <= 1.0


def test_marks_stand_at_their_levels():
    made = board_spots(1)
    figure = plot_histograms(made)
    level_db = np.sort(-20 * np.log10(np.abs(made.rho[:, 0])))
    places = {
        line.get_gid(): line.get_xdata()[0]
        for line in with_gid(figure, "mark-")
        if hasattr(line, "get_xdata")
    }
    assert places == pytest.approx(
        {
            "mark-1-line": level_db[19],
            "mark-50-line": level_db[999],
            "mark-nominal-line": -20 * np.log10(2e-5),
            "mark-least-line": 70.0,
        }
    )


def test_marks_beyond_the_scale_point_there():
    figure = plot_histograms(board_spots(1, least_db=np.array([20.0]), nominal=np.array([1e-12 + 0j])))
    written = {text.get_text() for text in with_gid(figure, "mark-") if hasattr(text, "get_text")}
    assert {"← asked for: 20.0 dB", "nominal: 240.0 dB →"} <= written


def test_a_nominal_circuit_above_the_floor_is_a_bound():
    figure = plot_histograms(board_spots(1, nominal=np.array([1e-15 + 0j]), floor_db=np.array([220.0])))
    assert "nominal: > 220 dB →" in [text.get_text() for text in with_gid(figure, "mark-nominal")]


def test_the_law_is_drawn_where_it_holds():
    made = board_spots(1)
    figure = plot_histograms(made)
    (line,) = with_gid(figure, "half-normal")
    law = HalfNormal(float(np.sqrt(np.mean(np.abs(made.rho) ** 2))))
    assert line.get_ydata() == pytest.approx(100 * law.density(line.get_xdata()))
    (note,) = [t.get_text() for t in with_gid(figure, "heading-note") if "half" in t.get_text()]
    assert note.startswith("line: half-normal |rho|, sigma ")


@pytest.mark.parametrize(
    ("made", "why"),
    [
        (board_spots(1, offset=2e-4), "mean of rho off zero"),
        (board_spots(1, count=20), "fewer than 50 boards"),
        (board_spots(1, rho=np.full((100, 1), 1e-4 + 0j)), "rho does not vary"),
    ],
)
def test_where_the_law_does_not_hold_the_picture_says_so(made, why):
    figure = plot_histograms(made)
    assert with_gid(figure, "half-normal") == []
    assert any(f"not half-normal: {why}" in text.get_text() for text in with_gid(figure, "heading-note"))
    in_page_without_overlaps(figure)


def test_histograms_refuse():
    with pytest.raises(ValueError, match=r"rho must have the shape \(n, 2\) with n at least 1, not \(3, 1\)"):
        board_spots(2, rho=np.ones((3, 1), complex))
    with pytest.raises(ValueError, match=r"least_db must have the shape \(2,\), not \(1,\)"):
        board_spots(2, least_db=np.ones(1))


def test_files_are_the_same_each_time(tmp_path):
    for name in ("one", "two"):
        write_plot(plot_boards([curves(1), curves(2)], mask=MASK), tmp_path / f"{name}-boards")
        write_plot(plot_histograms(board_spots(2)), tmp_path / f"{name}-histograms")
    for file in ("boards.png", "boards.svg", "histograms.png", "histograms.svg"):
        assert (tmp_path / f"one-{file}").read_bytes() == (tmp_path / f"two-{file}").read_bytes()
