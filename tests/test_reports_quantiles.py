"""Quantiles over draws: order statistics, in whatever pieces the draws come and the file is read."""

from __future__ import annotations

from fractions import Fraction
from math import ceil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

from modepair.reports import ModePair, quantiles
from modepair.reports.quantiles import CMRR_PERCENTS, GAIN_PERCENTS, DrawQuantiles

FREQUENCY_HZ = np.geomspace(1, 1e6, 13)


def pairs(draws: int, seed: int = 3) -> ModePair:
    """Random gains over several decades."""
    rng = np.random.default_rng(seed)
    shape = (2, draws, FREQUENCY_HZ.size)
    common, differential = rng.normal(size=shape) + 1j * rng.normal(size=shape)
    return ModePair(FREQUENCY_HZ, common * 10 ** rng.uniform(-6, 0, shape[1:]), differential)


def part(pair: ModePair, rows: NDArray[np.int64]) -> ModePair:
    return ModePair(FREQUENCY_HZ, pair.common_gain[rows], pair.differential_gain[rows])


def gathered(folder: Path, pair: ModePair, cuts: int = 1, case: int = 1) -> pd.DataFrame:
    draws = np.arange(len(pair.common_gain))
    with DrawQuantiles(FREQUENCY_HZ, folder / "draws") as found:
        for rows in np.array_split(draws, cuts):
            found.add(rows + 1, part(pair, rows))
        return found.finish(case)


def order_statistic(values: NDArray[np.float64], percent: int) -> NDArray[np.float64]:
    """The smallest value that at least so many per cent of the draws do not exceed."""
    rank = max(1, ceil(Fraction(percent, 100) * len(values)))
    found: NDArray[np.float64] = np.sort(values, axis=0)[rank - 1]
    return found


@pytest.mark.parametrize("draws", [1, 2, 19, 20, 21, 99, 100, 101, 1000, 2000])
def test_a_quantile_is_a_board_that_was_drawn(draws: int, tmp_path: Path) -> None:
    pair = pairs(draws)
    table = gathered(tmp_path, pair)
    for percent in CMRR_PERCENTS:
        np.testing.assert_array_equal(table[f"cmrr_db_p{percent}"], order_statistic(pair.cmrr_db, percent))
    for percent in GAIN_PERCENTS:
        expected = order_statistic(np.abs(pair.differential_gain), percent)
        np.testing.assert_array_equal(table[f"differential_gain_p{percent}"], expected)
    np.testing.assert_array_equal(table["cmrr_db_lowest"], pair.cmrr_db.min(axis=0))
    np.testing.assert_array_equal(table["lowest_draw"], pair.cmrr_db.argmin(axis=0) + 1)


def test_columns_and_their_order(tmp_path: Path) -> None:
    table = gathered(tmp_path, pairs(30), case=12)
    assert list(table) == [
        "case", "frequency_hz", "cmrr_db_p1", "cmrr_db_p5", "cmrr_db_p50", "cmrr_db_p95", "cmrr_db_p99",
        "cmrr_db_lowest", "lowest_draw", "differential_gain_p1", "differential_gain_p50", "differential_gain_p99",
    ]  # fmt: skip
    assert (table["case"] == 12).all()
    np.testing.assert_array_equal(table["frequency_hz"], FREQUENCY_HZ)


@pytest.mark.parametrize("block_values", [1, 100, 700, 10_000])
@pytest.mark.parametrize("cuts", [1, 2, 7, 50])
def test_pieces_change_nothing(
    block_values: int, cuts: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Neither those in which draws come nor those in which the file is read, down to one column and one row."""
    expected = gathered(tmp_path, pairs(50))
    monkeypatch.setattr(quantiles, "BLOCK_VALUES", block_values)
    pd.testing.assert_frame_equal(gathered(tmp_path, pairs(50), cuts), expected, check_exact=True)


def test_a_case_leaves_nothing_to_the_next(tmp_path: Path) -> None:
    first, second = pairs(40, seed=1), pairs(15, seed=2)
    with DrawQuantiles(FREQUENCY_HZ, tmp_path / "draws") as found:
        for case, pair in ((1, first), (2, second)):
            found.add(np.arange(len(pair.common_gain)) + 1, pair)
            table = found.finish(case)
    pd.testing.assert_frame_equal(table, gathered(tmp_path, second, case=2), check_exact=True)


def test_of_equal_boards_the_first_is_the_lowest(tmp_path: Path) -> None:
    pair = pairs(4)
    same = part(pair, np.array([2, 2, 2, 2]))
    assert (gathered(tmp_path, same, cuts=2)["lowest_draw"] == 1).all()


def test_draw_numbers_are_those_given(tmp_path: Path) -> None:
    pair = pairs(3)
    with DrawQuantiles(FREQUENCY_HZ, tmp_path / "draws") as found:
        found.add(np.array([5, 9, 700]), pair)
        table = found.finish(1)
    np.testing.assert_array_equal(table["lowest_draw"], np.array([5, 9, 700])[pair.cmrr_db.argmin(axis=0)])


def test_boards_above_the_floor_count_at_the_floor(tmp_path: Path) -> None:
    """With |A_dm| = 1 nothing is above 200 dB."""
    one = np.ones((10, FREQUENCY_HZ.size), complex)
    common = one * np.r_[np.zeros(6), np.full(4, 1e-5)][:, np.newaxis]
    table = gathered(tmp_path, ModePair(FREQUENCY_HZ, common, one))
    np.testing.assert_allclose(table["cmrr_db_p50"], 200.0)
    np.testing.assert_allclose(table["cmrr_db_p1"], 100.0)


def test_without_draws_there_is_no_table_and_the_file_goes(tmp_path: Path) -> None:
    with DrawQuantiles(FREQUENCY_HZ, tmp_path / "draws") as found:
        found.add(np.array([], np.int64), part(pairs(2), np.array([], np.int64)))
        assert found.finish(1).empty
    assert not list(tmp_path.iterdir())
