"""The tolerance section: what it reads, and every fault at its line and column in words that say what is allowed.

The expected lines are what the spec's writer sees; they are quoted whole.
"""

# ruff: noqa: E501 - the expected lines are quoted whole

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from modepair.runner.cli.app import main
from modepair.sweeps import Spec, SpecError, expand, load_spec

HEAD = """\
stage: {topology: difference, parts: {R1: 10k, R3: 10k}, gain: 10, opamp: fast}
frequency: {start: 1, stop: 1M, spots: [50]}
opamps: {fast: {open_loop_gain: 120 dB, gain_bandwidth: 10M}}
"""
RESISTORS = "{of: [R1, R2, R3, R4], absolute: 0.1 %}"


def spec(*entries: str, draws: str = "200", vary: str = "", plus: str = "") -> str:
    """A spec whose tolerance entries stand at line 7 and on, column 7, with an axis at 8, column 8."""
    lines = "".join(f"    - {entry}\n" for entry in entries)
    axes = f"vary: {{{vary}}}\n" if vary else ""
    return f"{HEAD}tolerance:\n  draws: {draws}\n  parts:\n{lines}{plus}{axes}"


def section(text: str) -> str:
    """A spec whose tolerance section is at line 4, column 12."""
    return f"{HEAD}tolerance: {text}\n"


@dataclass(frozen=True)
class Bad:
    """A spec's text and its faults without the file's name."""

    name: str
    text: str
    faults: list[str]


NAMES = "names of parts or op-amp parameters, such as R1, CCP or A1.gain_bandwidth"
ENTRIES = "at least one entry, such as {of: [R1, R2], absolute: 0.1 %}"
DRAWS = "draws takes a number of draws from 1 to 1000000, such as 2000"
SHARE = "a tolerance from 1e-09 to 0.999999, such as 0.1 %"
AS_WELL = "parts of a set match at least as well as absolute says"
LAWS = "distribution takes rectangular, normal, triangular or two-point"
TAILS = "a normal distribution, whose tails would reach zero; give at most 33 %, or another distribution"
TWICE = "has a tolerance already, at line 7; give it once"

BAD = [
    # names
    Bad("unknown part", spec("{of: [R9], absolute: 1 %}"), [f"7:13: tolerance.parts[0].of[0]: R9 is no part; of takes {NAMES}"]),
    Bad(
        "unknown parameter",
        spec(RESISTORS, "{of: [A1.gain_bandwith], absolute: 1 %}"),
        [f"8:13: tolerance.parts[1].of[0]: A1.gain_bandwith is no part; did you mean A1.gain_bandwidth? of takes {NAMES}"],
    ),
    Bad(
        "a part the stage lacks",
        spec(RESISTORS, "{of: [RG], absolute: 1 %}"),
        ["8:13: tolerance.parts[1].of[0]: the difference stage has no RG; its parts are R1, R2, R3, R4, C2, C4, RREF and RL"],
    ),
    Bad(
        "an op-amp the stage lacks",
        spec("{of: [A2.gain_bandwidth], absolute: 1 %}"),
        ["7:13: tolerance.parts[0].of[0]: the difference stage has no A2.gain_bandwidth; its op-amps are A1"],
    ),
    Bad(
        "a part without value",
        spec("{of: [R1, CCP], absolute: 1 %}"),
        ["7:17: tolerance.parts[0].of[1]: CCP has no value in any case, so it cannot vary; give it one, or take it out here"],
    ),
    Bad(
        "a phase margin that no second pole gives",
        spec(
            "{of: [A1.phase_margin], absolute: 40 %}",
            vary="opamps.fast.phase_margin: [60, 65]",
        ),
        ["7:13: tolerance.parts[0].of[0]: A1.phase_margin would reach 91 degrees; one second pole gives at most 89.9, so narrow the tolerance, or leave phase_margin out for a single pole"],
    ),
    Bad(
        "a parameter without value",
        spec("{of: [A1.output_resistance], absolute: 1 %}"),
        ["7:13: tolerance.parts[0].of[0]: A1.output_resistance has no value in any case, so it cannot vary; give it one, or take it out here"],
    ),
    Bad(
        "the sign of a CMRR",
        spec("{of: [A1.cmrr_sign], absolute: 1 %}"),
        ["7:13: tolerance.parts[0].of[0]: A1.cmrr_sign has no tolerance of its own; of takes the cmrr instead, with least: its sign varies with it"],
    ),
    Bad("no name", spec("{of: [], absolute: 1 %}"), ["7:12: tolerance.parts[0].of: the list is empty; of takes at least one part"]),
    Bad("no list of names", spec("{of: R1, absolute: 1 %}"), ["7:12: tolerance.parts[0].of: R1 is a single value; of takes a list"]),
    Bad("of is missing", spec("{absolute: 1 %}"), [f"7:7: tolerance.parts[0]: of is missing; it takes {NAMES}"]),
    # given twice
    Bad("a part in two entries", spec(RESISTORS, "{of: [CCP, R2], absolute: 1 %}"), [f"8:18: tolerance.parts[1].of[1]: R2 {TWICE}"]),
    Bad("a part twice in one entry", spec("{of: [R1, R1], absolute: 1 %}"), [f"7:17: tolerance.parts[0].of[1]: R1 {TWICE}"]),
    Bad(
        "an entry twice",
        spec("{of: [R1, R3], absolute: 1 %}", "{of: [R1, R3], absolute: 1 %}"),
        [f"8:13: tolerance.parts[1].of[0]: R1 {TWICE}", f"8:17: tolerance.parts[1].of[1]: R3 {TWICE}"],
    ),
    # widths
    Bad("negative", spec("{of: [R1], absolute: -1 %}"), [f"7:28: tolerance.parts[0].absolute: -1 % is negative; absolute takes {SHARE}"]),
    Bad("zero", spec("{of: [R1], absolute: 0 %}"), [f"7:28: tolerance.parts[0].absolute: 0 % is zero; absolute takes {SHARE}"]),
    Bad("100 %", spec("{of: [R1], absolute: 100 %}"), [f"7:28: tolerance.parts[0].absolute: 100 % is out of range; absolute takes {SHARE}"]),
    Bad("above 100 %", spec("{of: [R1], absolute: 150 %}"), [f"7:28: tolerance.parts[0].absolute: 150 % is out of range; absolute takes {SHARE}"]),
    Bad("above 1, plain", spec("{of: [R1], absolute: 1.5}"), [f"7:28: tolerance.parts[0].absolute: 1.5 is out of range; absolute takes {SHARE}"]),
    Bad(
        "decibels",
        spec("{of: [R1], absolute: 50 dB}"),
        ["7:28: tolerance.parts[0].absolute: 50 dB is a ratio in dB; absolute takes a tolerance, such as 0.1 %"],
    ),
    Bad("no width", spec("{of: [R1]}"), ["7:7: tolerance.parts[0]: absolute is missing; it takes a tolerance, such as 0.1 %"]),
    Bad("too wide for normal", spec("{of: [R1], absolute: 34 %, distribution: normal}"), [f"7:28: tolerance.parts[0].absolute: 34 % is too wide for {TAILS}"]),
    Bad(
        "too wide for normal on an axis",
        spec("{of: [R1], distribution: normal}", vary="'tolerance.parts[0].absolute': [10 %, 50 %]"),
        [f"8:46: vary.tolerance.parts[0].absolute[1]: 50 % is too wide for {TAILS}"],
    ),
    # matching
    Bad(
        "matching wider than absolute",
        spec("{of: [R1, R2], absolute: 0.1 %, matching: 0.2 %}"),
        [f"7:49: tolerance.parts[0].matching: 0.2 % is wider than absolute; {AS_WELL}"],
    ),
    Bad(
        "matching wider than absolute on its axis",
        spec("{of: [R1, R2], absolute: 0.1 %}", vary="'tolerance.parts[0].matching': [0.01 %, 0.2 %]"),
        [f"8:48: vary.tolerance.parts[0].matching[1]: 0.2 % is wider than absolute; {AS_WELL}"],
    ),
    Bad(
        "matching wider than absolute on absolute's axis",
        spec("{of: [R1, R2], matching: 500 ppm}", vary="'tolerance.parts[0].absolute': [0.1 %, 0.01 %]"),
        [f"7:32: tolerance.parts[0].matching: 500 ppm is wider than absolute; {AS_WELL}"],
    ),
    Bad(
        "matching of one part",
        spec("{of: [R1], absolute: 0.1 %, matching: 0.01 %}"),
        ["7:35: tolerance.parts[0].matching: R1 alone cannot match anything; matching takes a set of two or more parts"],
    ),
    Bad(
        "matching without absolute",
        spec("{of: [R1, R2], matching: 0.01 %}"),
        ["7:7: tolerance.parts[0]: absolute is missing; it takes a tolerance, such as 0.1 %"],
    ),
    Bad(
        "matching of different kinds",
        spec("{of: [R1, A1.gain_bandwidth], absolute: 1 %, matching: 0.1 %}"),
        ["7:7: tolerance.parts[0]: parts of different kinds cannot form a matched set; give each kind an entry of its own"],
    ),
    # CMRR
    Bad("least for a resistor", spec("{of: [R1], least: 100 dB}"), ["7:18: tolerance.parts[0].least: R1 takes absolute, such as 0.1 %; least is for op-amps' cmrr"]),
    Bad("absolute for a CMRR", spec("{of: [A1.cmrr], absolute: 1 %}"), ["7:23: tolerance.parts[0].absolute: A1.cmrr takes least, such as 100 dB, in place of absolute"]),
    Bad("matching for a CMRR", spec("{of: [A1.cmrr], matching: 1 %}"), ["7:23: tolerance.parts[0].matching: A1.cmrr takes least, such as 100 dB, in place of matching"]),
    Bad(
        "a CMRR among others",
        spec("{of: [A1.cmrr, R1], least: 100 dB}"),
        ["7:7: tolerance.parts[0]: A1.cmrr and R1 cannot share an entry; give CMRR an entry of its own"],
    ),
    Bad(
        "least below 0 dB",
        spec("{of: [A1.cmrr], least: -100 dB}"),
        ["7:30: tolerance.parts[0].least: -100 dB is out of range; least takes a least CMRR in dB from 0 dB to 300 dB, such as 100 dB"],
    ),
    # words
    Bad("unknown distribution", spec("{of: [R1], absolute: 1 %, distribution: gaussian}"), [f"7:47: tolerance.parts[0].distribution: gaussian is not a distribution; {LAWS}"]),
    Bad(
        "distribution misspelt",
        spec("{of: [R1], absolute: 1 %, distribution: normla}"),
        [f"7:47: tolerance.parts[0].distribution: normla is not a distribution; did you mean normal? {LAWS}"],
    ),
    Bad("unknown key", spec("{of: [R1], absolut: 1 %}"), ["7:18: tolerance.parts[0].absolut: absolut is not a known key; did you mean absolute?"]),
    Bad(
        "unknown sampling",
        spec(RESISTORS, plus="  sampling: lhs\n"),
        ["8:13: tolerance.sampling: lhs is not a way of sampling; sampling takes random, latin-hypercube or sobol"],
    ),
    Bad("unknown keep", spec(RESISTORS, plus="  keep: all\n"), ["8:9: tolerance.keep: all is not a way to keep draws; keep takes quantiles or curves"]),
    Bad("an entry that is a word", spec("R1"), ["7:7: tolerance.parts[0]: R1 is a single value; parts takes a mapping of keys"]),
    # counts
    Bad("no draws", spec(RESISTORS, draws="0"), [f"5:10: tolerance.draws: 0 is zero; {DRAWS}"]),
    Bad("a billion draws", spec(RESISTORS, draws="1000000000"), [f"5:10: tolerance.draws: 1000000000 is out of range; {DRAWS}"]),
    Bad("a billion draws by exponent", spec(RESISTORS, draws="1e9"), [f"5:10: tolerance.draws: 1e9 is out of range; {DRAWS}"]),
    Bad("negative draws", spec(RESISTORS, draws="-3"), [f"5:10: tolerance.draws: -3 is negative; {DRAWS}"]),
    Bad("half a draw", spec(RESISTORS, draws="1.5"), [f"5:10: tolerance.draws: 1.5 is not a whole number; {DRAWS}"]),
    Bad(
        "too many draws together",
        spec("{of: [R1]}", draws="1000000", vary=f"'tolerance.parts[0].absolute': [{', '.join(f'0.{n} %' for n in range(101, 122))}]"),
        ["5:10: tolerance.draws: the cases make 21,000,000 draws together; at most 20,000,000 are taken, so draw less or shorten an axis"],
    ),
    Bad("negative seed", spec(RESISTORS, plus="  seed: -1\n"), ["8:9: tolerance.seed: -1 is negative; seed takes a seed from 0 to 9007199254740992, such as 7"]),
    # the section itself
    Bad("an empty list", section("{draws: 10, parts: []}"), [f"4:31: tolerance.parts: the list is empty; parts takes {ENTRIES}"]),
    Bad("no parts", section("{draws: 10}"), [f"4:1: tolerance: parts is missing; it takes {ENTRIES}"]),
    Bad(
        "draws missing",
        section(f"{{parts: [{RESISTORS}]}}"),
        ["4:1: tolerance: draws is missing; it takes a number of draws from 1 to 1000000, such as 2000"],
    ),
    Bad("parts a mapping", section("{draws: 10, parts: {of: [R1], absolute: 1 %}}"), ["4:31: tolerance.parts: this is a mapping; parts takes a list"]),
    Bad("a list", section("[1]"), ["4:12: tolerance: this is a list; tolerance takes a mapping of keys"]),
    Bad("nothing", section(""), ["4:11: tolerance: no value is given; tolerance takes a mapping of keys"]),
    # axes
    Bad(
        "axis on an entry that does not exist",
        spec(RESISTORS, vary="'tolerance.parts[3].absolute': [1 %]"),
        ["8:8: vary.tolerance.parts[3].absolute: the tolerance section has no parts[3]; its entries are 0 to 0"],
    ),
    Bad(
        "axis without a tolerance section",
        f"{HEAD}vary: {{'tolerance.parts[0].absolute': [1 %]}}\n",
        ["4:8: vary.tolerance.parts[0].absolute: the tolerance section has no parts[0]; it has no entries"],
    ),
    Bad(
        "a negative value on an axis",
        spec("{of: [R1]}", vary="'tolerance.parts[0].absolute': [1 %, -1 %]"),
        [f"8:45: vary.tolerance.parts[0].absolute[1]: -1 % is negative; absolute takes {SHARE}"],
    ),
    # several
    Bad(
        "several, in file order and each once",
        spec("{of: [R1], absolute: -1 %}", "{of: [R9], absolute: 1 %}", "{of: [R2], absolute: 1 %, distribution: bell}", draws="0"),
        [
            f"5:10: tolerance.draws: 0 is zero; {DRAWS}",
            f"7:28: tolerance.parts[0].absolute: -1 % is negative; absolute takes {SHARE}",
            f"8:13: tolerance.parts[1].of[0]: R9 is no part; of takes {NAMES}",
            f"9:47: tolerance.parts[2].distribution: bell is not a distribution; {LAWS}",
        ],
    ),
]  # fmt: skip


@pytest.mark.parametrize("bad", BAD, ids=lambda bad: bad.name)
def test_every_fault_is_reported_once_at_its_place(
    bad: Bad, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("spec.yaml").write_text(bad.text, encoding="utf-8")
    with pytest.raises(SpecError, match=r"^spec\.yaml:\d+:\d+: ") as caught:
        load_spec("spec.yaml")
    assert [str(fault) for fault in caught.value.faults] == [f"spec.yaml:{fault}" for fault in bad.faults]


def test_names_of_bad_sections_are_distinct() -> None:
    assert len({bad.name for bad in BAD}) == len(BAD)


@pytest.mark.parametrize(
    "name",
    [
        "unknown part", "negative", "above 100 %", "matching wider than absolute", "no draws", "a billion draws",
        "an entry twice",
    ],
)  # fmt: skip
def test_the_command_ends_with_status_2_and_leaves_no_run_folder(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    bad = next(bad for bad in BAD if bad.name == name)
    monkeypatch.chdir(tmp_path)
    Path("spec.yaml").write_text(bad.text, encoding="utf-8")
    monkeypatch.setattr(sys, "argv", ["modepair", "run", "spec.yaml"])
    with pytest.raises(SystemExit, match=r"^2$"):
        main()
    printed = capsys.readouterr()
    assert printed.err == "".join(f"spec.yaml:{fault}\n" for fault in bad.faults)
    assert printed.out == ""
    assert [path.name for path in tmp_path.rglob("*")] == ["spec.yaml"]


def read(text: str, tmp_path: Path) -> Spec:
    (tmp_path / "spec.yaml").write_text(text, encoding="utf-8")
    return load_spec(tmp_path / "spec.yaml")


def test_values_come_as_si_floats_with_the_documented_defaults(tmp_path: Path) -> None:
    tolerance = read(
        spec(
            "{of: [R1, R3], absolute: 0.1 %, matching: 50 ppm, distribution: normal}",
            "{of: [R2], absolute: 0.02}",
            "{of: [A1.cmrr], least: 90 dB}",
        ),
        tmp_path,
    ).tolerance
    assert tolerance is not None
    assert (tolerance.draws, tolerance.seed, tolerance.sampling, tolerance.keep) == (
        200,
        1,
        "random",
        "quantiles",
    )
    matched, plain, cmrr = tolerance.parts
    assert (matched.of, matched.absolute, matched.matching, matched.law) == (
        ("R1", "R3"),
        1e-3,
        5e-5,
        "normal",
    )
    assert (plain.absolute, plain.matching, plain.law) == (0.02, None, "rectangular")
    assert cmrr.least == pytest.approx(10**4.5)
    assert cmrr.law == "normal"


def test_matching_may_equal_absolute_and_normal_may_be_a_third(tmp_path: Path) -> None:
    spec_of = read(spec("{of: [R1, R2], absolute: 33.3 %, matching: 33.3 %, distribution: normal}"), tmp_path)
    assert spec_of.tolerance is not None
    assert spec_of.tolerance.parts[0].matching == pytest.approx(0.333)


def test_a_part_that_only_one_stage_or_one_case_has_may_vary(tmp_path: Path) -> None:
    """RG is of the instrumentation stages, and 10 ohm of imbalance is in one of two cases."""
    text = (
        "stage: {parts: {R1: 10k, R2: 10k, R3: 10k, R4: 10k, RF1: 1k, RF2: 1k, RG: 1k}, opamp: fast}\n"
        + HEAD[HEAD.index("frequency") :]
        + "vary: {stage.topology: [buffered-difference, three-opamp], source.imbalance: [0, 10]}\n"
        "tolerance: {draws: 10, parts: [{of: [RG, RI], absolute: 5 %}]}\n"
    )
    tolerance = read(text, tmp_path).tolerance
    assert tolerance is not None
    assert tolerance.parts[0].of == ("RG", "RI")


def test_an_axis_gives_each_case_its_tolerance(tmp_path: Path) -> None:
    text = spec(
        "{of: [R1, R2], absolute: 0.1 %}",
        vary="'tolerance.parts[0].matching': [0.1 %, 0.05 %, 100 ppm], stage.gain: [10, 100]",
    )
    blocks = expand(read(text.replace("gain: 10, ", ""), tmp_path)).blocks
    (block,) = blocks
    np.testing.assert_allclose(
        block.tolerances["tolerance.parts[0].matching"], np.repeat([1e-3, 5e-4, 1e-4], 2)
    )
    assert block.tolerances["tolerance.parts[0].absolute"] == 1e-3
