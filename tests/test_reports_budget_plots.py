"""Plots of the error budget: bars, their figures and directions, shares over frequency."""

import numpy as np
import pytest

from modepair.reports import write_plot
from modepair.reports.budget import Contribution
from modepair.reports.budget_plots import (
    MOST_CAUSES,
    MOST_SHARES,
    SpotContributions,
    plot_budget_shares,
    plot_budget_spots,
)
from tests.test_reports_board_plots import in_page_without_overlaps
from tests.test_reports_plots import with_gid

F = np.geomspace(1.0, 1e5, 51)


def at_spot(name: str, kind: str, rho: complex) -> Contribution:
    return Contribution(name, kind, np.array([rho]))


def spot(*contributions: Contribution, frequency_hz: float = 50.0) -> SpotContributions:
    return SpotContributions(frequency_hz, contributions, abs(sum(one.rho[0] for one in contributions)))


def many(count: int, frequency_hz: float = 50.0) -> SpotContributions:
    turned = np.exp(1j * frequency_hz / 1e4)
    made = [
        at_spot(f"A{i % 3 + 1}.gain_bandwidth {i}", ("tolerance", "nominal")[i % 2], 9e-5 * 0.8**i * turned)
        for i in range(count)
    ]
    return spot(*made, frequency_hz=frequency_hz)


def texts(figure, gid: str) -> list[str]:
    return [text.get_text() for text in with_gid(figure, gid)]


@pytest.mark.parametrize(("spots", "causes"), [(1, 1), (1, 30), (2, 3), (3, 8), (6, 30)])
def test_bars_do_not_overlap(spots, causes):
    asked = [many(causes, f) for f in (50.0, 60.0, 1e3, 4e3, 16e3, 150e3)[:spots]]
    figure = plot_budget_spots(asked, title="Silo weighing", subtitle="case 3: quiet-bipolar, imbalance 100")
    in_page_without_overlaps(figure)
    assert len(figure.axes) == spots
    assert len(with_gid(figure, "bar-")) == spots * min(causes, MOST_CAUSES + 1)


def test_bars_are_as_long_as_rho_in_order_and_the_rest_is_one_sum():
    asked = many(20)
    (panel,) = plot_budget_spots([asked]).axes
    bars = [bar.get_width() for bar in panel.patches]
    sizes = [abs(one.rho[0]) for one in asked.contributions]
    assert bars[:MOST_CAUSES] == pytest.approx([1e6 * size for size in sizes[:MOST_CAUSES]])
    assert bars[MOST_CAUSES] == pytest.approx(1e6 * sum(sizes[MOST_CAUSES:]))  # all of one phase
    assert panel.get_yticklabels()[MOST_CAUSES].get_text() == "12 others"
    assert panel.get_xlabel() == "|rho| (µV/V)"


def test_a_cause_against_the_sum_stands_left_of_zero():
    asked = spot(
        at_spot("R1", "tolerance", 3e-4),
        at_spot("RREF", "nominal", -1e-4),
        at_spot("CCP", "nominal", 1e-5j),
    )
    figure = plot_budget_spots([asked])
    (panel,) = figure.axes
    assert [bar.get_width() for bar in panel.patches] == pytest.approx([300.0, -100.0, 10.0])
    assert panel.get_xlabel() == "|rho| (µV/V), left of 0 against the sum"
    assert texts(figure, "figures-0") == ["±300 µV/V", "70.5", "−3°"]
    assert texts(figure, "figures-1") == ["100 µV/V", "80.0", "177°"]
    assert texts(figure, "figures-2") == ["10.0 µV/V", "100.0", "87°"]


def test_kinds_differ_in_hatch_and_in_lightness():
    asked = spot(at_spot("R1", "tolerance", 3e-4), at_spot("RREF", "nominal", 1e-4))
    figure = plot_budget_spots([asked])
    (tolerance,), (nominal,) = with_gid(figure, "bar-tolerance"), with_gid(figure, "bar-nominal")
    assert tolerance.get_hatch()
    assert not nominal.get_hatch()
    grey = np.array([0.2126, 0.7152, 0.0722])
    assert grey @ np.array(tolerance.get_facecolor()[:3]) - grey @ np.array(nominal.get_facecolor()[:3]) > 0.4
    assert sorted(texts(figure, "key")) == [
        "error of the nominal circuit",
        "tolerance, at the worst board's edge",
    ]
    assert len(texts(plot_budget_spots([spot(at_spot("R1", "tolerance", 3e-4))]), "key")) == 1


@pytest.mark.parametrize(("size", "unit"), [(3e-8, "nV/V"), (3e-5, "µV/V"), (3e-2, "mV/V"), (3.0, "V/V")])
def test_units_suit_the_size(size, unit):
    (panel,) = plot_budget_spots([spot(at_spot("R1", "nominal", size))]).axes
    assert panel.get_xlabel() == f"|rho| ({unit})"
    assert panel.patches[0].get_width() == pytest.approx({"V/V": 3.0, "mV/V": 30.0}.get(unit, 30.0))


def test_what_the_sum_leaves_is_told():
    one = at_spot("R1", "tolerance", 3e-4)
    notes = texts(plot_budget_spots([SpotContributions(50.0, [one], 3.3e-4)]), "heading-note")
    assert notes == ["worst board, solved: 69.6 dB, 330 µV/V; sum of causes: 300 µV/V"]
    notes = texts(plot_budget_spots([SpotContributions(50.0, [one], 3e-4)]), "heading-note")
    assert notes == ["worst board, solved: 70.5 dB, 300 µV/V"]
    notes = texts(plot_budget_spots([spot(at_spot("RREF", "nominal", 1e-4))]), "heading-note")
    assert notes == ["nominal circuit, solved: 80.0 dB, 100 µV/V"]


def test_nothing_contributes():
    for asked in (SpotContributions(50.0, [], 0.0), spot(at_spot("R1", "tolerance", 0.0))):
        figure = plot_budget_spots([asked])
        in_page_without_overlaps(figure)


def test_causes_that_only_rounding_tells_apart_stand_by_name():
    asked = spot(*(at_spot(f"R{i}", "tolerance", 9e-5 * (1 + i * 1e-7)) for i in (3, 1, 4, 2)))
    (panel,) = plot_budget_spots([asked]).axes
    assert [label.get_text() for label in panel.get_yticklabels()] == ["R1", "R2", "R3", "R4"]


def over_band(count: int) -> list[Contribution]:
    return [
        Contribution(
            f"R{i + 1}", ("tolerance", "nominal")[i % 2], 1e-5 * (1 + i) * (1 + 1j * F / 10.0 ** (i % 5))
        )
        for i in range(count)
    ]


@pytest.mark.parametrize("count", [1, 2, 7, 8, 25])
def test_shares_fill_the_panel_and_do_not_overlap(count):
    figure = plot_budget_shares(F, over_band(count), title="Silo weighing", subtitle="case 1")
    in_page_without_overlaps(figure)
    areas = [area for area in with_gid(figure, "share-") if area.get_gid() != "share-label"]
    assert len(areas) <= MOST_SHARES + 1
    assert len(areas) == len(texts(figure, "share-label")) + len(texts(figure, "curve-label"))
    edges = np.array(
        [[v[:, 1].min(), v[:, 1].max()] for v in (area.get_paths()[0].vertices for area in areas)]
    )
    assert edges[0, 0] == 0.0
    assert edges[-1, 1] == pytest.approx(100.0)


def test_a_share_is_that_of_magnitudes():
    made = [
        Contribution("R1", "tolerance", np.full(51, 3e-5j)),
        Contribution("R2", "tolerance", np.full(51, -1e-5)),
    ]
    figure = plot_budget_shares(F, made)
    first = with_gid(figure, "share-1")[0].get_paths()[0].vertices[:, 1]
    assert first.max() == pytest.approx(75.0)
    assert texts(figure, "share-label") == ["R1", "R2"]


def test_names_tell_kinds_apart_where_both_are_shown():
    both = [Contribution("A1.cmrr", kind, np.full(51, 1e-5 + 0j)) for kind in ("tolerance", "nominal")]
    assert sorted(texts(plot_budget_shares(F, both), "share-label")) == ["A1.cmrr", "A1.cmrr, tolerance"]


def test_small_causes_are_others():
    made = [
        Contribution("R1", "nominal", np.full(51, 1e-3 + 0j)),
        *over_band(1),
        Contribution("C2", "nominal", 0 * F),
    ]
    made[1] = Contribution("RI", "nominal", np.full(51, 1e-6 + 0j))
    assert texts(plot_budget_shares(F, made), "curve-label") == ["2 others"]


def test_refuses():
    with pytest.raises(ValueError, match="a budget has at least one spot to plot, not 0"):
        plot_budget_spots([])
    with pytest.raises(ValueError, match=r"R1: rho must have the shape \(1,\), not \(51,\)"):
        SpotContributions(50.0, over_band(1), 1.0)
    with pytest.raises(ValueError, match="one cause at least and two frequencies at least"):
        plot_budget_shares(F, [])
    with pytest.raises(ValueError, match=r"R1: rho must have the shape \(50,\), not \(51,\)"):
        plot_budget_shares(F[1:], over_band(1))


def test_files_are_the_same_each_time(tmp_path):
    for name in ("one", "two"):
        write_plot(plot_budget_spots([many(12), many(12, 1e3)]), tmp_path / f"{name}-budget")
        write_plot(plot_budget_shares(F, over_band(12)), tmp_path / f"{name}-shares")
    for file in ("budget.png", "budget.svg", "shares.png", "shares.svg"):
        assert (tmp_path / f"one-{file}").read_bytes() == (tmp_path / f"two-{file}").read_bytes()
