"""From a file to a spec: all faults in one go, in file order."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from modepair.sweeps import Opamp, SpecError, expand, load_spec, read_candidates
from tests.broken_specs import broken

SPEC = """\
title: Bridge
stage:
  topology: three-opamp
  parts: {RF1: 10k, RF2: 10k, R1: 10k, R2: 10k, R3: 10k, R4: 10k}
  gain: 101
  opamp: quiet
  load: 10k
source: {resistance: 350, imbalance: -10, filter: {to_ground: 1n}}
frequency: {start: 1, stop: 1M, points_per_decade: 20, spots: [50, 60, 1k]}
vary:
  source.imbalance: [0, 10, 100]
opamps:
  quiet: {open_loop_gain: 130 dB, gain_bandwidth: 8 MHz, phase_margin: 60, cmrr: 120 dB}
"""
MINE = """\
opamps:
  mine: {open_loop_gain: 100 dB, gain_bandwidth: 1 MHz, note: from a file}
"""


def write(folder: Path, **files: str) -> Path:
    for name, text in files.items():
        (folder / f"{name}.yaml").write_text(text, encoding="utf-8")
    return folder / "spec.yaml"


def faults(path: Path) -> list[str]:
    with pytest.raises(SpecError, match=r"\.yaml") as caught:
        load_spec(path)
    return [str(fault).removeprefix(f"{path.parent}/") for fault in caught.value.faults]


def test_every_value_is_an_si_float(tmp_path: Path) -> None:
    spec = load_spec(write(tmp_path, spec=SPEC))
    assert spec.title == "Bridge"
    assert spec.stage.topology == "three-opamp"
    assert spec.stage.parts["RF1"] == 10e3
    assert (spec.stage.gain, spec.stage.load, spec.stage.opamp) == (101.0, 10e3, "quiet")
    assert (spec.source.resistance, spec.source.imbalance, spec.source.filter.to_ground) == (
        350.0,
        -10.0,
        1e-9,
    )
    assert spec.frequency.spots == (50.0, 60.0, 1000.0)
    assert spec.vary == {"source.imbalance": ("0", "10", "100")}
    assert spec.opamps["quiet"].cmrr == pytest.approx(1e6, rel=1e-15)  # one power


def test_built_in_candidates_may_be_named_and_varied(tmp_path: Path) -> None:
    fast = Opamp.model_validate({"open_loop_gain": "100 dB", "gain_bandwidth": "50 MHz"})
    text = SPEC.replace("opamp: quiet", "opamp: fast").replace(
        "source.imbalance: [", "opamps.fast.cmrr: [80 dB] #"
    )
    spec = load_spec(write(tmp_path, spec=text), {"fast": fast})
    assert spec.candidates["fast"] == fast
    assert spec.axes[0].values == (1e4,)


def test_files_of_candidates_are_found_beside_the_spec(tmp_path: Path) -> None:
    (tmp_path / "shared").mkdir()
    (tmp_path / "shared" / "mine.yaml").write_text(MINE)
    text = SPEC.replace("opamp: quiet", "opamp: mine") + "opamp_files: [shared/mine.yaml]\n"
    spec = load_spec(write(tmp_path, spec=text))
    assert spec.candidates["mine"].note == "from a file"


def test_a_candidate_in_place_goes_before_a_file_and_a_file_before_a_built_in_one(tmp_path: Path) -> None:
    built_in = Opamp.model_validate({"open_loop_gain": "60 dB", "gain_bandwidth": "1k"})
    text = SPEC + "opamp_files: [mine.yaml]\n"
    mine = MINE + "  quiet: {open_loop_gain: 90 dB, gain_bandwidth: 2 MHz}\n"
    spec = load_spec(write(tmp_path, spec=text, mine=mine), {"quiet": built_in, "mine": built_in})
    assert spec.candidates["quiet"].gain_bandwidth == 8e6
    assert spec.candidates["mine"].gain_bandwidth == 1e6


def test_faults_of_a_file_carry_its_name_where_the_spec_names_it(tmp_path: Path) -> None:
    text = SPEC.replace("load: 10k", "load: 10 pF\n  opamp: mine").replace("  opamp: quiet\n", "")
    text = text.replace("vary:", "opamp_files: [mine.yaml]\nvary:").replace("[0, 10, 100]", "[0, 10 V]")
    mine = "opamps:\n  mine: {open_loop_gain: 100 dB, gain_bandwidth: 1 pF, cmr: 5}\ntitle: x\n"
    assert faults(write(tmp_path, spec=text, mine=mine)) == [
        "spec.yaml:6:9: stage.load: 10 pF is a capacitance; load takes a resistance, such as 10k",
        "mine.yaml:2:50: opamps.mine.gain_bandwidth: 1 pF is a capacitance; "
        "gain_bandwidth takes a frequency, such as 8 MHz",
        "mine.yaml:2:56: opamps.mine.cmr: cmr is not a known key; did you mean cmrr?",
        "mine.yaml:3:1: title: title is not a known key; known keys: opamps",
        "spec.yaml:12:25: vary.source.imbalance[1]: 10 V is a voltage; "
        "imbalance takes a resistance, such as 10",
    ]


def test_an_unreadable_file_is_a_fault_at_its_key(tmp_path: Path) -> None:
    (tmp_path / "folder").mkdir()
    long = "x" * 300
    text = SPEC + f"opamp_files:\n- nowhere.yaml\n- folder\n- {long}\n- ''\n"
    found = faults(write(tmp_path, spec=text))
    assert found[0] == (
        "spec.yaml:15:3: opamp_files[0]: nowhere.yaml cannot be used: no such file "
        f"(looked for {tmp_path}/nowhere.yaml; paths start at the spec's folder)"
    )
    assert found[1].startswith("spec.yaml:16:3: opamp_files[1]: folder cannot be used: this is a directory")
    assert "the file cannot be read: file name too long" in found[2]
    assert found[3] == "spec.yaml:18:3: opamp_files[3]: no value is given; a file name is needed"


def test_a_name_in_two_files_is_a_fault(tmp_path: Path) -> None:
    text = SPEC + "opamp_files: [mine.yaml, yours.yaml]\n"
    assert faults(write(tmp_path, spec=text, mine=MINE, yours=MINE)) == [
        "spec.yaml:14:26: opamp_files[1]: mine is in yours.yaml and in mine.yaml; "
        "rename or remove one of them"
    ]


def test_read_candidates_keeps_file_order(tmp_path: Path) -> None:
    write(tmp_path, mine=MINE + "  also: {open_loop_gain: 1M, gain_bandwidth: 1k5}\n")
    read = read_candidates(tmp_path / "mine.yaml")
    assert list(read) == ["mine", "also"]
    assert read["also"].gain_bandwidth == 1500.0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            "title: x\n",
            r"mine\.yaml:1:1: opamps is missing; the file takes a mapping of op-amp candidates by name",
        ),
        ("opamps: 5\n", r"mine\.yaml:1:9: opamps: 5 is a single value; opamps takes a mapping of keys"),
        (
            "opamps: {A: {}}\n",
            r"mine\.yaml:1:10: opamps\.A: open_loop_gain is missing; it takes an open-loop gain",
        ),
        ("opamps: {a: 5}\n", r"mine\.yaml:1:13: opamps\.a: 5 is a single value; a takes a mapping of keys"),
        (
            "opamps: {a: {gain_bandwidth: 1M}}\n",
            r"mine\.yaml:1:10: opamps\.a: open_loop_gain is missing; it takes",
        ),
    ],
)
def test_read_candidates_refuses(tmp_path: Path, text: str, message: str) -> None:
    write(tmp_path, mine=text)
    with pytest.raises(SpecError, match=message):
        read_candidates(tmp_path / "mine.yaml")


def test_a_missing_spec_is_named() -> None:
    with pytest.raises(SpecError, match=r"^nowhere/spec\.yaml: no such file$"):
        load_spec("nowhere/spec.yaml")


def test_faults_stand_in_file_order_whatever_finds_them(tmp_path: Path) -> None:
    text = (
        "vary: {stage.parts.R9: [1], source.imbalance: [x]}\n"
        "frequency: {start: 10, stop: 1}\n"
        "stage: {topology: difference, parts: {R1: 5 V}, opamp: nobody, opamp: other}\n"
        "titel: x\n"
    )
    found = faults(write(tmp_path, spec=text))
    places = [tuple(map(int, line.split(":")[1:3])) for line in found]
    assert places == sorted(places)
    assert [line.split(": ")[1] for line in found] == [
        "vary.stage.parts.R9",
        "vary.source.imbalance[0]",
        "frequency.stop",
        "stage.parts",
        "stage.parts.R1",
        "stage.opamp",
        "stage.opamp",
        "titel",
    ]


LINES = SPEC.splitlines(keepends=True)
WORDS = [
    "10k",
    "no",
    "-1",
    "1e400",
    "[]",
    "{}",
    "[a]",
    "{a: b}",
    "~",
    "",
    "*a",
    "&a 1",
    "!!str x",
    "'",
    "é",
    "- x",
]


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=150, deadline=None)
@given(st.data())
def test_a_spec_with_parts_broken_is_read_or_refused_but_never_crashes(
    tmp_path: Path, data: st.DataObject
) -> None:
    path = write(tmp_path, spec=broken(data, LINES, WORDS, "RAse:[{,10k", most=4))
    try:
        spec = load_spec(path)
    except SpecError as error:
        faults = error.faults
        assert all(fault.message.isprintable() and fault.line >= 1 for fault in faults)
        places = [(fault.line, fault.column) for fault in faults]
        assert places == sorted(places)
    else:
        assert expand(spec).count >= 1
