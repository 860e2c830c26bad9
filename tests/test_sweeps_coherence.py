"""What the keys of a spec must agree on: the cases that the malformed specs do not show."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from modepair.sweeps import Spec, SpecError, load_spec

OPAMPS = """\
opamps:
  fast: {open_loop_gain: 120 dB, gain_bandwidth: 10M}
  slow: {open_loop_gain: 120 dB, gain_bandwidth: 1M}
frequency: {start: 1, stop: 1M}
"""


Load = Callable[[str], Spec]


@pytest.fixture
def load(tmp_path: Path) -> Load:
    def read(text: str) -> Spec:
        path = tmp_path / "a.yaml"
        path.write_text(text if "opamps:\n" in text else OPAMPS + text)
        return load_spec(path)

    return read


def faults(load: Load, text: str) -> list[str]:
    with pytest.raises(SpecError, match=r"a\.yaml") as caught:
        load(text)
    return [f"{fault.line}:{fault.column}: {fault.key}: {fault.message}" for fault in caught.value.faults]


BRIDGE = "R1: 1k, R2: 10k, R3: 1k, R4: 10k"


def test_a_topology_may_come_from_an_axis_only(load: Load) -> None:
    spec = load(
        f"stage: {{parts: {{{BRIDGE}, RF1: 1k, RF2: 1k}}, opamp: fast}}\n"
        "vary: {stage.topology: [two-opamp, three-opamp]}\n",
    )
    assert spec.topologies == ("two-opamp", "three-opamp")
    assert spec.instances == ("A1", "A2", "A3")


def test_op_amps_may_come_from_axes_only(load: Load) -> None:
    stage = f"stage: {{topology: two-opamp, parts: {{{BRIDGE}}}}}\n"
    assert load(stage + "vary: {stage.opamp: [fast, slow]}\n").stage.opamp is None
    both = "vary: {stage.opamps.A1: [fast, slow], stage.opamps.A2: [fast]}\n"
    assert [axis.path for axis in load(stage + both).axes] == ["stage.opamps.A1", "stage.opamps.A2"]


def test_a_required_part_may_come_from_an_axis_only(load: Load) -> None:
    stage = "stage: {topology: difference, parts: {R1: 1k, R2: 1k, R3: 1k}, opamp: fast}\n"
    assert "R4" not in load(stage + "vary: {stage.parts.R4: [1k, 2k]}\n").stage.parts


def test_a_required_parameter_may_come_from_an_axis_only(load: Load) -> None:
    text = (
        f"stage: {{topology: difference, parts: {{{BRIDGE}}}, opamp: third}}\n"
        "vary: {opamps.third.gain_bandwidth: [1M, 2M]}\n"
    )
    third = "frequency: {start: 1, stop: 1M}\nopamps:\n  third: {open_loop_gain: 100 dB}\n"
    assert load(third + text).candidates["third"].gain_bandwidth == 1e6


def test_a_part_of_only_one_of_the_stages_in_use_is_taken(load: Load) -> None:
    stage = f"stage: {{topology: difference, parts: {{{BRIDGE}, RG: 1k, RF1: 1k, RF2: 1k}}, opamp: fast}}\n"
    load(stage + "vary: {stage.topology: [difference, three-opamp]}\n")
    assert faults(load, stage + "vary: {stage.topology: [difference, two-opamp]}\n") == [
        "5:81: stage.parts.RF1: the difference and two-opamp stage has no RF1; "
        "its parts are R1, R2, R3, R4, RG, RREF, RL, C2 and C4",
        "5:90: stage.parts.RF2: the difference and two-opamp stage has no RF2; "
        "its parts are R1, R2, R3, R4, RG, RREF, RL, C2 and C4",
    ]


def test_gain_and_its_part_clash_on_axes_too(load: Load) -> None:
    stage = "stage: {topology: difference, parts: {R1: 1k, R3: 1k}, opamp: fast, gain: 10}\n"
    assert faults(load, stage + "vary: {stage.parts.R4: [1k, 2k]}\n") == [
        "6:8: vary.stage.parts.R4: gain sets R4 of the difference stage, which is also given; "
        "leave one of them out"
    ]


def test_opamp_and_opamps_clash_on_axes_too(load: Load) -> None:
    stage = f"stage: {{topology: difference, parts: {{{BRIDGE}}}, opamp: fast}}\n"
    assert faults(load, stage + "vary: {stage.opamps.A1: [slow]}\n") == [
        "5:74: stage.opamp: opamp and opamps are both given; leave one of them out"
    ]


def test_a_shorthand_whose_parts_are_all_given_has_no_effect(load: Load) -> None:
    stage = f"stage: {{topology: difference, parts: {{{BRIDGE}}}, opamp: fast}}\n"
    load(stage + "source: {resistance: 350, parts: {RSP: 360}}\n")
    assert faults(
        load, stage + "source: {resistance: 350, parts: {RSP: 360}}\nvary: {source.parts.RSN: [1]}\n"
    ) == [
        "6:10: source.resistance: this has no effect, as source.parts gives RSP and RSN; "
        "leave one of them out"
    ]


def test_the_same_part_on_two_axes_has_no_effect(load: Load) -> None:
    stage = f"stage: {{topology: difference, parts: {{{BRIDGE}}}, opamp: fast}}\n"
    assert faults(load, stage + "vary: {stage.load: [1k], stage.parts.RL: [2k]}\n") == [
        "6:8: vary.stage.load: this has no effect, as stage.parts gives RL; leave one of them out"
    ]


def test_the_case_count_of_many_axes_is_named(load: Load) -> None:
    stage = f"stage: {{topology: difference, parts: {{{BRIDGE}}}, opamp: fast}}\nvary:\n"
    parts = ("RSP", "RSN", "CCP", "CCN", "CCB", "RFP", "RFN", "CFP", "CFN", "CFB", "RBP", "RBN")
    axes = "".join(f"  source.parts.{part}: [1m, 2m, 3m]\n" for part in parts)
    assert faults(load, stage + axes) == [
        "6:1: vary: the axes make 531,441 cases (3 x 3 x 3 x 3 x 3 x 3 x 3 x 3 x 3 x 3 x ...); "
        "at most 200,000 are taken, so shorten an axis"
    ]


def test_too_many_spots_are_counted(tmp_path: Path) -> None:
    spots = ", ".join(map(str, range(1, 1002)))
    path = tmp_path / "a.yaml"
    path.write_text(
        OPAMPS.replace("stop: 1M", f"stop: 1M, spots: [{spots}]")
        + f"stage: {{topology: difference, parts: {{{BRIDGE}}}, opamp: fast}}\n"
    )
    with pytest.raises(
        SpecError, match=r"a\.yaml:4:33: frequency\.spots: there are 1001 spots; at most 1000"
    ):
        load_spec(path)
