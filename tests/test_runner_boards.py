"""Draws of a run: what the boards did, from the kept curves to quantiles, yield and the table of cases."""

from __future__ import annotations

from fractions import Fraction
from math import ceil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

from modepair.reports.yields import Yield
from modepair.runner import Run, plans
from modepair.runner.plans import drawn_case, plan_draws
from modepair.sweeps import Streams, Sweep, boards
from tests.drawing import run_without_pages, swept

DRAWS = 260
"""More than two batches of a case."""

SPEC = f"""\
title: Boards of a difference stage
stage:
  topology: difference
  parts: {{R1: 10k, R3: 10k}}
  gain: 10
  opamp: good
frequency: {{start: 10, stop: 100k, points_per_decade: 3, spots: [50, 1k]}}
vary:
  tolerance.parts[0].matching: [0.05 %, 0.02 %]
  source.imbalance: [0, 5]
opamps: {{good: {{open_loop_gain: 140 dB, gain_bandwidth: 10M, cmrr: 100 dB, output_resistance: 50}}}}
tolerance:
  draws: {DRAWS}
  seed: 7
  keep: curves
  parts:
    - {{of: [R1, R2, R3, R4], absolute: 1 %, matching: 0.1 %, distribution: normal}}
    - {{of: [A1.cmrr], least: 90 dB}}
    - {{of: [A1.gain_bandwidth], absolute: 30 %}}
    - {{of: [RI], absolute: 10 %}}
limits:
  cmrr: [[50, 89 dB], [1k, 89 dB], [10k, 83 dB]]
"""


@pytest.fixture(scope="module")
def sweep(tmp_path_factory: pytest.TempPathFactory) -> Sweep:
    return swept(tmp_path_factory.mktemp("specs"), SPEC)


@pytest.fixture(scope="module")
def result(sweep: Sweep, tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run_without_pages(sweep.spec, tmp_path_factory.mktemp("runs") / "boards", jobs=1)


@pytest.fixture(scope="module")
def quantiles(result: Run) -> pd.DataFrame:
    return pd.read_parquet(result.folder / "quantiles.parquet")


@pytest.fixture(scope="module")
def drawn(result: Run) -> pd.DataFrame:
    """Curves of the draws, without the nominal runs'."""
    return result.curves[result.curves["draw"] > 0].reset_index(drop=True)


def test_every_draw_is_kept_in_order(result: Run, sweep: Sweep) -> None:
    curves = result.curves
    assert curves[["case", "draw", "frequency_hz"]].equals(
        curves[["case", "draw", "frequency_hz"]].sort_values(["case", "draw", "frequency_hz"])
    )
    counted = curves.groupby(["case", "draw"])["frequency_hz"].size()
    assert counted.index.tolist() == [(case, draw) for case in range(1, 5) for draw in range(DRAWS + 1)]
    assert (counted == len(sweep.spec.frequency.frequency_hz)).all()
    assert (result.cases["state"] == "done").all()
    assert (result.cases["draws"] == DRAWS).all()


def test_quantiles_recomputed_from_the_kept_curves_are_the_same_numbers(
    quantiles: pd.DataFrame, drawn: pd.DataFrame
) -> None:
    """Order statistics, so exactly: the smallest value that at least so many per cent of the draws do not exceed."""
    gain = np.hypot(drawn["differential_re"], drawn["differential_im"])
    grouped = drawn.assign(gain=gain).groupby(["case", "frequency_hz"])
    table = quantiles.set_index(["case", "frequency_hz"])
    for column, name, percents in (
        ("cmrr_db", "cmrr_db_p", (1, 5, 50, 95, 99)),
        ("gain", "differential_gain_p", (1, 50, 99)),
    ):
        for percent in percents:
            rank = ceil(Fraction(percent, 100) * DRAWS) - 1
            expected = grouped[column].apply(lambda values, rank=rank: np.sort(values.to_numpy())[rank])
            found = table[f"{name}{percent}"]
            if column == "cmrr_db":
                pd.testing.assert_series_equal(found, expected, check_exact=True, check_names=False)
            else:  # |A_dm| by hypot here, by abs there: a last digit
                pd.testing.assert_series_equal(found, expected, rtol=1e-15, check_names=False)


def test_the_lowest_draw_is_the_lowest(quantiles: pd.DataFrame, drawn: pd.DataFrame) -> None:
    rows = drawn.loc[drawn.groupby(["case", "frequency_hz"])["cmrr_db"].idxmin()].set_index(
        ["case", "frequency_hz"]
    )
    table = quantiles.set_index(["case", "frequency_hz"])
    pd.testing.assert_series_equal(
        table["cmrr_db_lowest"], rows["cmrr_db"], check_exact=True, check_names=False
    )
    assert (table["lowest_draw"] == rows["draw"]).all()


def test_the_table_of_cases_holds_quantiles_of_the_spots(result: Run, quantiles: pd.DataFrame) -> None:
    for spot, name in ((50.0, "50hz"), (1000.0, "1000hz")):
        at = quantiles[quantiles["frequency_hz"] == spot]
        for percent in (1, 50):
            assert (
                result.cases[f"cmrr_db_p{percent}_at_{name}"].tolist() == at[f"cmrr_db_p{percent}"].tolist()
            )
        assert result.cases[f"cmrr_db_lowest_at_{name}"].tolist() == at["cmrr_db_lowest"].tolist()
    lowest = quantiles.groupby("case").first()
    for percent in (1, 99):
        name = f"differential_gain_p{percent}"
        assert result.cases[name].tolist() == lowest[name].tolist()


def mask_margins(drawn: pd.DataFrame) -> pd.Series[float]:
    """Smallest margin of each board to the mask, straight lines in dB over log frequency, by case and draw."""
    inside = drawn[(drawn["frequency_hz"] >= 50) & (drawn["frequency_hz"] <= 1e4)]
    logs = np.log10(inside["frequency_hz"].to_numpy())
    mask_db = np.interp(logs, np.log10([50, 1e3, 1e4]), [89, 89, 83])
    margins: pd.Series[float] = (inside["cmrr_db"] - mask_db).groupby([inside["case"], inside["draw"]]).min()
    return margins


def test_yield_counts_the_boards_that_keep_the_mask(result: Run, drawn: pd.DataFrame) -> None:
    margins = mask_margins(drawn)
    passed = (margins >= 0).groupby("case").sum()
    assert 0 < passed.min() < passed.max() < DRAWS
    for index, count in enumerate(passed.tolist()):
        row = result.cases.iloc[index]
        assert row["yield"] == count / DRAWS
        assert (row["yield_low"], row["yield_high"]) == Yield(count, DRAWS).interval
    worst = margins.groupby("case").idxmin()
    assert result.cases["worst_draw"].tolist() == [draw for _, draw in worst]


def test_same_bytes_for_two_processes(result: Run, sweep: Sweep, tmp_path: Path) -> None:
    again = run_without_pages(sweep.spec, tmp_path / "again", jobs=2)
    for name in ("curves.parquet", "quantiles.parquet", "cases.csv"):
        assert (again.folder / name).read_bytes() == (result.folder / name).read_bytes(), name


def test_keeping_quantiles_only_changes_none_of_them(result: Run, tmp_path: Path) -> None:
    """Seed and draws are the same; then curves holds the nominal runs only."""
    sweep = swept(tmp_path, SPEC.replace("keep: curves", "keep: quantiles"))
    light = run_without_pages(sweep.spec, tmp_path / "light", jobs=2)
    for name in ("quantiles.parquet", "cases.csv"):
        assert (light.folder / name).read_bytes() == (result.folder / name).read_bytes(), name
    nominal = result.curves[result.curves["draw"] == 0].reset_index(drop=True)
    pd.testing.assert_frame_equal(light.curves, nominal, check_exact=True)
    assert not list(light.folder.glob("*.partial"))


def values(sweep: Sweep, case: int = 1) -> tuple[NDArray[np.float64], tuple[str, ...]]:
    """Element values of all draws of one case, and what each column is."""
    assert sweep.spec.tolerance is not None
    batches = [
        plan.batch() for plan in plan_draws(sweep, Streams(sweep.spec.tolerance)) if plan.drawn.case == case
    ]
    return np.concatenate([batch.values for batch in batches]), batches[0].deck.names


@pytest.mark.parametrize("sampling", ["random", "latin-hypercube", "sobol"])
@pytest.mark.parametrize("size", [1, 7, 260, 1000])
def test_the_cut_into_batches_changes_no_draw(
    sampling: str, size: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    sampled = swept(tmp_path, SPEC.replace("seed: 7", f"seed: 7\n  sampling: {sampling}"))
    expected, _ = values(sampled, 3)
    monkeypatch.setattr(plans, "DRAWS_OF_BATCH", size)
    found, _ = values(sampled, 3)
    np.testing.assert_array_equal(found, expected)
    assert expected.shape[0] == DRAWS


@pytest.mark.parametrize("sampling", ["random", "latin-hypercube", "sobol"])
def test_another_axis_or_part_changes_no_other_elements_values(sampling: str, tmp_path: Path) -> None:
    text = SPEC.replace("seed: 7", f"seed: 7\n  sampling: {sampling}")
    expected, elements = values(swept(tmp_path, text))
    another_axis = text.replace("vary:\n", "vary:\n  stage.load: [1k, 2k]\n").replace(
        "gain: 10\n", "gain: 10\n  load: 1k\n"
    )
    another_part = text.replace(
        "  parts:\n    - ", "  parts:\n    - {of: [A1.open_loop_gain], absolute: 50 %}\n    - "
    )
    another_part = another_part.replace("tolerance.parts[0]", "tolerance.parts[1]")
    for changed, untouched in ((another_axis, "RCG"), (another_part, "R")):
        found, names = values(swept(tmp_path, changed))
        for column, name in enumerate(elements):
            if name[0] in untouched:
                np.testing.assert_array_equal(found[:, names.index(name)], expected[:, column], err_msg=name)


def test_all_cases_meet_the_same_boards(sweep: Sweep) -> None:
    """Common random numbers: the cases' resistors differ by the matching alone, in proportion."""
    assert sweep.spec.tolerance is not None
    streams = Streams(sweep.spec.tolerance)
    made = []
    for case in (1, 3):
        one = drawn_case(sweep, case)
        made.append(boards(one.parts, one.causes, streams.errors(one.causes, 0, DRAWS)))
    error = [np.asarray(board["R1"]) / np.asarray(board["R2"]) * 10 - 1 for board in made]
    np.testing.assert_allclose(error[0], 2.5 * error[1], atol=1e-6)
    np.testing.assert_array_equal(made[0]["A1.cmrr"], made[1]["A1.cmrr"])


def test_a_failed_draw_is_counted_and_named_and_the_others_go_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Draws 4 and 200 of case 2 of four; a board that cannot be solved does not pass."""
    sweep = swept(tmp_path, SPEC)
    original = plans.DrawPlan.batch

    def sabotaged(self: plans.DrawPlan) -> plans.Batch:
        batch = original(self)
        for draw in (4, 200):
            batch.values[batch.position == (DRAWS + 1) + draw, 0] = np.nan
        return batch

    monkeypatch.setattr(plans.DrawPlan, "batch", sabotaged)
    result = run_without_pages(sweep.spec, tmp_path / "run", jobs=2)
    assert result.failed == 1
    assert result.cases["draws"].tolist() == [DRAWS, DRAWS - 2, DRAWS, DRAWS]
    state = result.cases["state"].tolist()
    assert state[1].startswith(f"failed: 2 of {DRAWS} draws, draw 4: element R")
    assert state[0] == state[2] == state[3] == "done"
    kept = result.curves[result.curves["draw"] > 0]
    assert set(range(1, DRAWS + 1)) - set(kept[kept["case"] == 2]["draw"]) == {4, 200}
    passed = (mask_margins(kept).xs(2) >= 0).sum()
    assert result.cases["yield"].tolist()[1] == passed / DRAWS


def test_more_cases_than_are_plotted(tmp_path: Path) -> None:
    """Eight cases of three draws: the tables are complete."""
    text = SPEC.replace("[0.05 %, 0.02 %]", "[0.05 %, 0.02 %, 0.01 %, 50 ppm]")
    text = text.replace(f"draws: {DRAWS}", "draws: 3")
    result = run_without_pages(swept(tmp_path, text).spec, tmp_path / "run", jobs=1)
    quantiles = pd.read_parquet(result.folder / "quantiles.parquet")
    assert quantiles["case"].drop_duplicates().tolist() == list(range(1, 9))
    assert (result.cases["state"] == "done").all()
    assert result.cases["cmrr_db_lowest_at_50hz"].notna().all()
