"""The product of the axes and the parts of every case."""

from __future__ import annotations

import itertools
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from modepair.sweeps import Sweep, expand, load_spec
from modepair.sweeps.parts import TOPOLOGIES

BASE = """\
stage:
  topology: three-opamp
  parts: {RF1: 10k, RF2: 10k, R1: 10k, R2: 10k, R3: 10k, R4: 10k, A2.gain_bandwidth: 9M}
  opamp: one
source: {resistance: 350, imbalance: 10}
frequency: {start: 1, stop: 1M}
opamps:
  one: {open_loop_gain: 1M, gain_bandwidth: 1 MHz}
  two: {open_loop_gain: 2M, gain_bandwidth: 2 MHz, cmrr: 100 dB}
  three: {open_loop_gain: 3M, gain_bandwidth: 3 MHz}
"""


def sweep(folder: Path, vary: str = "", base: str = BASE) -> Sweep:
    path = folder / "spec.yaml"
    path.write_text(base + (f"vary: {{{vary}}}\n" if vary else ""))
    return expand(load_spec(path))


def test_no_axes_make_one_case(tmp_path: Path) -> None:
    made = sweep(tmp_path)
    assert made.count == 1
    assert made.axes == ()
    (block,) = made.blocks
    assert block.topology == "three-opamp"
    assert block.opamps == {"A1": "one", "A2": "one", "A3": "one"}
    np.testing.assert_array_equal(block.case, [1])
    assert block.parts["RSP"] == block.parts["RSN"] == 350.0
    assert block.parts["RI"] == 10.0
    assert [block.parts[f"A{i}.gain_bandwidth"] for i in (1, 2, 3)] == [1e6, 9e6, 1e6]
    assert made.frame().to_dict("list") == {"case": [1]}


def test_an_axis_goes_before_the_value_in_place(tmp_path: Path) -> None:
    made = sweep(tmp_path, "source.imbalance: [0, -5], opamps.one.gain_bandwidth: [4M]")
    (block,) = made.blocks
    np.testing.assert_array_equal(block.parts["RI"], [0.0, -5.0])
    np.testing.assert_array_equal(block.parts["A1.gain_bandwidth"], [4e6, 4e6])
    assert block.parts["A2.gain_bandwidth"] == 9e6


def test_names_make_blocks_and_numbers_make_arrays(tmp_path: Path) -> None:
    made = sweep(
        tmp_path, "source.imbalance: [1, 2], stage.opamp: [two, one], source.between_capacitance: [0, 1n]"
    )
    assert [block.opamps["A3"] for block in made.blocks] == ["two", "one"]
    np.testing.assert_array_equal(made.blocks[0].case, [1, 2, 5, 6])
    np.testing.assert_array_equal(made.blocks[1].case, [3, 4, 7, 8])
    assert made.blocks[0].case.dtype == np.int64
    np.testing.assert_array_equal(made.blocks[1].parts["RI"], [1.0, 1.0, 2.0, 2.0])
    np.testing.assert_array_equal(made.blocks[1].parts["CCB"], [0.0, 1e-9, 0.0, 1e-9])
    assert made.blocks[0].parts["A1.cmrr"] == pytest.approx(1e5, rel=1e-15)
    assert "A1.cmrr" not in made.blocks[1].parts


def test_op_amps_per_instance(tmp_path: Path) -> None:
    base = BASE.replace("  opamp: one\n", "  opamps: {A1: one, A2: two, A3: three}\n")
    made = sweep(tmp_path, "stage.opamps.A3: [one, two]", base)
    assert [block.opamps for block in made.blocks] == [
        {"A1": "one", "A2": "two", "A3": "one"},
        {"A1": "one", "A2": "two", "A3": "two"},
    ]


def test_each_stage_takes_the_parts_it_has(tmp_path: Path) -> None:
    made = sweep(tmp_path, "stage.topology: [two-opamp, three-opamp], stage.parts.RG: [1k, 2k]")
    two, three = made.blocks
    assert (two.topology, three.topology) == ("two-opamp", "three-opamp")
    assert set(two.opamps) == {"A1", "A2"}
    assert "RF1" not in two.parts
    assert three.parts["RF1"] == 10e3
    for block in (two, three):
        np.testing.assert_array_equal(block.parts["RG"], [1e3, 2e3])
        assert {name for name in block.parts if name[0] == "R" and name not in ("RSP", "RSN", "RI")} <= set(
            TOPOLOGIES[block.topology].parts
        )


def test_a_gain_axis_sets_rg_and_leaves_it_out_where_none_is_needed(tmp_path: Path) -> None:
    made = sweep(tmp_path, "stage.gain: [101, 1, 11], source.imbalance: [0, 1]")
    with_rg, without = made.blocks
    np.testing.assert_array_equal(with_rg.case, [1, 2, 5, 6])
    np.testing.assert_allclose(with_rg.parts["RG"], [200.0, 200.0, 2000.0, 2000.0], rtol=1e-12)
    np.testing.assert_array_equal(with_rg.parts["RI"], [0.0, 1.0, 0.0, 1.0])
    np.testing.assert_array_equal(without.case, [3, 4])
    np.testing.assert_array_equal(without.parts["RI"], [0.0, 1.0])
    assert "RG" not in without.parts


def test_gain_follows_the_resistors_of_each_case(tmp_path: Path) -> None:
    made = sweep(tmp_path, "stage.parts.R2: [10k, 20k]", BASE.replace("  opamp", "  gain: 20\n  opamp"))
    # closed form: RG = (RF1 + RF2)/(gain/(R2/R1) - 1)
    np.testing.assert_allclose(made.blocks[0].parts["RG"], [20e3 / 19, 20e3 / 9], rtol=1e-12)


def test_the_frame_has_a_row_per_case_and_a_column_per_axis(tmp_path: Path) -> None:
    made = sweep(tmp_path, "stage.opamp: [two, one], source.imbalance: [0, 4k7]")
    frame = made.frame()
    assert frame.to_dict("list") == {
        "case": [1, 2, 3, 4],
        "stage.opamp": ["two", "two", "one", "one"],
        "source.imbalance": [0.0, 4700.0, 0.0, 4700.0],
    }
    assert made.axis_labels(2) == {"stage.opamp": "two", "source.imbalance": "4k7"}


@pytest.mark.parametrize("case", [0, 5])
def test_labels_of_no_case(tmp_path: Path, case: int) -> None:
    made = sweep(tmp_path, "stage.opamp: [two, one], source.imbalance: [0, 4k7]")
    with pytest.raises(IndexError, match=f"^case must be from 1 to 4, not {case}$"):
        made.axis_labels(case)


VALUES = {
    "stage.opamp": ["one", "two", "three"],
    "source.imbalance": ["0", "10", "-20"],
    "stage.load": ["1k", "2k", "3k"],
    "stage.topology": ["two-opamp", "three-opamp"],
    "source.parts.CCP": ["0", "1n"],
}


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=40, deadline=None)
@given(st.data())
def test_cases_are_the_product_of_the_axes_in_file_order(tmp_path: Path, data: st.DataObject) -> None:
    paths = data.draw(st.lists(st.sampled_from(sorted(VALUES)), unique=True))
    chosen = {
        path: data.draw(
            # the parts given are those of both stages
            st.permutations(VALUES[path])
            if path == "stage.topology"
            else st.lists(st.sampled_from(VALUES[path]), min_size=1, unique=True)
        )
        for path in paths
    }
    made = sweep(tmp_path, ", ".join(f"{path}: [{', '.join(values)}]" for path, values in chosen.items()))
    product = list(itertools.product(*chosen.values()))
    assert made.count == len(product)
    assert [tuple(made.axis_labels(case).values()) for case in range(1, made.count + 1)] == product
    numbers = np.concatenate([block.case for block in made.blocks])
    assert sorted(numbers.tolist()) == list(range(1, made.count + 1))
    part = {"source.imbalance": "RI", "stage.load": "RL", "source.parts.CCP": "CCP"}
    frame = made.frame()
    for block in made.blocks:
        assert np.all(np.diff(block.case) > 0)
        rows = frame.iloc[block.case - 1]
        for path in chosen:
            if path == "stage.opamp":
                assert set(rows[path]) == {block.opamps["A1"]}
            elif path == "stage.topology":
                assert set(rows[path]) == {block.topology}
            else:
                np.testing.assert_array_equal(block.parts[part[path]], rows[path])


def test_blocks_come_by_their_first_case(tmp_path: Path) -> None:
    made = sweep(tmp_path, "stage.gain: [1, 5], stage.opamp: [one, two]")
    assert [block.case.tolist() for block in made.blocks] == [[1], [2], [3], [4]]


def test_twenty_thousand_cases_expand_without_a_loop_over_cases(tmp_path: Path) -> None:
    fifty = ", ".join(f"{value}p" for value in range(1, 51))
    made = sweep(
        tmp_path,
        f"source.parts.CCP: [{fifty}], source.parts.CCN: [{fifty}], source.parts.RI: [0, 1, 2, 3, "
        "4, 5, 6, 7]",
        BASE.replace(", imbalance: 10", ""),
    )
    assert made.count == 20_000
    assert len(made.blocks) == 1
    row = made.frame().iloc[12_345]
    np.testing.assert_allclose(
        [made.blocks[0].parts[name][12_345] for name in ("CCP", "CCN", "RI")],  # type: ignore[index]
        [row["source.parts.CCP"], row["source.parts.CCN"], row["source.parts.RI"]],
    )


def test_reading_a_spec_does_not_import_pandas() -> None:
    code = "import sys, modepair.sweeps; sys.exit('pandas' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
