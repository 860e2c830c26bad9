"""One board again: a draw by its number has the parts and the curve that it had among all draws."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from modepair.reports import ModePair
from modepair.runner import Run
from modepair.runner.cli.app import main
from modepair.runner.errors import RequestError
from modepair.runner.plans import drawn_case
from modepair.runner.redraw import board_sweep, board_table
from modepair.sweeps import Streams, Sweep, boards
from tests.dense import solve_dense
from tests.drawing import run_without_pages, swept

DRAWS = 140
"""More than one batch of a case."""

SPEC = f"""\
title: Boards of two three-op-amp stages
stage:
  topology: three-opamp
  parts: {{RF1: 10k, RF2: 10k, R1: 10k, R2: 10k, R3: 10k, R4: 10k, A2.cmrr_sign: -1}}
  opamp: good
  reference_resistance: 0.1
source: {{resistance: 350, imbalance: 10, cable_capacitance: 1n, bias_resistance: 10M}}
frequency: {{start: 10, stop: 100k, points_per_decade: 2, spots: [50, 1k]}}
vary: {{stage.gain: [1, 101]}}
opamps:
  good: {{open_loop_gain: 130 dB, gain_bandwidth: 8M, phase_margin: 60, cmrr: 110 dB, cmrr_corner: 1k,
         output_resistance: 50}}
tolerance:
  draws: {DRAWS}
  seed: 11
  sampling: sobol
  keep: curves
  parts:
    - {{of: [R1, R2, R3, R4], absolute: 1 %, matching: 0.05 %}}
    - {{of: [RF1, RF2, RG], absolute: 0.1 %, distribution: triangular}}
    - {{of: [A1.cmrr, A2.cmrr], least: 90 dB}}
    - {{of: [A1.gain_bandwidth, A2.gain_bandwidth], absolute: 30 %, distribution: normal}}
    - {{of: [CCP, CCN, RI], absolute: 5 %, distribution: two-point}}
"""


def board_file(one: Run) -> pd.DataFrame:
    """The board's part values, read to the last digit."""
    return pd.read_csv(one.folder / "board.csv", converters={"nominal": float, "board": float})


@pytest.fixture(scope="module")
def sweep(tmp_path_factory: pytest.TempPathFactory) -> Sweep:
    return swept(tmp_path_factory.mktemp("specs"), SPEC)


@pytest.fixture(scope="module")
def every(sweep: Sweep, tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run_without_pages(sweep.spec, tmp_path_factory.mktemp("runs") / "all", jobs=2)


@pytest.fixture(scope="module")
def number(every: Run) -> int:
    """A draw of the second batch: the lowest at 50 Hz among these in case 2."""
    curves = every.curves
    late = curves[(curves["case"] == 2) & (curves["draw"] > 128) & (curves["frequency_hz"] == 50)]
    return int(late.loc[late["cmrr_db"].idxmin(), "draw"])


@pytest.fixture(scope="module")
def again(sweep: Sweep, number: int, tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run_without_pages(sweep.spec, tmp_path_factory.mktemp("runs") / "one", jobs=1, draw=number)


def test_the_board_has_the_curve_it_had_among_all(every: Run, again: Run, number: int) -> None:
    """To 1e-5 dB: pivots, and so last digits, depend on the cases solved before on the same deck."""
    kept = every.curves[every.curves["draw"] == number].reset_index(drop=True)
    assert again.curves[["case", "draw", "frequency_hz"]].equals(kept[["case", "draw", "frequency_hz"]])
    np.testing.assert_allclose(again.curves["cmrr_db"], kept["cmrr_db"], atol=1e-5)
    assert set(kept["case"]) == {1, 2}
    nominal = every.curves[every.curves["draw"] == 0]
    assert np.abs(nominal["cmrr_db"].to_numpy() - kept["cmrr_db"].to_numpy()).max() > 1


def test_the_board_file_holds_its_part_values(sweep: Sweep, again: Run, number: int) -> None:
    """Each part that varies, and no other; a CMRR as the signed ratio, of the nominal circuit's -110 dB too."""
    table = board_file(again)
    assert sweep.spec.tolerance is not None
    streams = Streams(sweep.spec.tolerance)
    for case, varied in ((1, 13), (2, 14)):  # at gain 1 there is no RG
        drawn = drawn_case(sweep, case)
        board = boards(drawn.parts, drawn.causes, streams.errors(drawn.causes, number - 1, number))
        rows = table[table["case"] == case].set_index("part")
        assert set(rows.index) == {part for cause in drawn.causes for part in cause.parts}
        assert len(rows) == varied
        for part, row in rows.iterrows():
            assert row["board"] == float(np.ravel(board[str(part)])[0]), part
            sign = -1 if part == "A2.cmrr" else 1
            assert row["nominal"] == sign * drawn.parts[str(part)], part


def test_the_board_files_values_solve_to_its_curve_in_another_solver(sweep: Sweep, again: Run) -> None:
    """From the file that a user would build the board by, to 1e-4 dB: the round-off of ngspice at 120 dB."""
    table = board_file(again)
    for case in (1, 2):
        parts = dict(drawn_case(sweep, case).parts)
        rows = table[table["case"] == case]
        parts |= dict(zip(rows["part"], rows["board"], strict=True)) | {"A2.cmrr_sign": 1.0}
        curve = again.curves[again.curves["case"] == case]
        frequency = curve["frequency_hz"].to_numpy()
        expected = ModePair(frequency, *solve_dense("three-opamp", parts, frequency))
        np.testing.assert_allclose(curve["cmrr_db"], expected.cmrr_db, atol=1e-4)


@pytest.mark.parametrize("sampling", ["random", "latin-hypercube", "sobol"])
def test_any_board_of_any_sampling_is_the_draw_of_its_number(sampling: str, tmp_path: Path) -> None:
    sampled = swept(tmp_path, SPEC.replace("sampling: sobol", f"sampling: {sampling}"))
    tolerance = sampled.spec.tolerance
    assert tolerance is not None
    for draw in (1, 2, 129, DRAWS):
        board = board_sweep(sampled, draw)
        for case in (1, 2):
            drawn = drawn_case(sampled, case)
            all_boards = boards(drawn.parts, drawn.causes, Streams(tolerance).errors(drawn.causes, 0, DRAWS))
            one = {name: np.ravel(value) for name, value in all_boards.items()}
            for name, value in drawn_case(board, case).parts.items():
                assert value == one[name][draw - 1 if one[name].size > 1 else 0], (draw, case, name)


def test_draws_of_one_batch_differ_from_each_other(sweep: Sweep) -> None:
    first, second = (board_table(sweep, board_sweep(sweep, draw)) for draw in (1, 2))
    resistors = first["part"].isin(["R1", "R2", "R3", "R4", "RF1", "RF2"])
    assert (first["board"] != second["board"])[resistors].all()


@pytest.mark.parametrize("draw", [0, -1, DRAWS + 1])
def test_a_draw_that_does_not_exist_is_refused(sweep: Sweep, draw: int, tmp_path: Path) -> None:
    with pytest.raises(RequestError, match=f"draw must be 1 to {DRAWS}, not {draw}"):
        run_without_pages(sweep.spec, tmp_path / "run", draw=draw)
    assert not list(tmp_path.iterdir())


def test_the_command_refuses_a_draw_with_status_2(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("with.yaml").write_text(SPEC, encoding="utf-8")
    Path("without.yaml").write_text(SPEC[: SPEC.index("tolerance:")], encoding="utf-8")
    for name, message in (
        ("with.yaml", f"draw must be 1 to {DRAWS}, not 999"),
        ("without.yaml", "the spec has no tolerance section, so it has no draws"),
    ):
        monkeypatch.setattr(sys, "argv", ["modepair", "run", name, "--draw", "999"])
        with pytest.raises(SystemExit, match=r"^2$"):
            main()
        assert message in capsys.readouterr().err
    assert sorted(path.name for path in tmp_path.iterdir()) == ["with.yaml", "without.yaml"]
