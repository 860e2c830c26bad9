"""The example sweeps: they load, run without a failed case, and show what their comments promise."""

import re
from pathlib import Path

import pandas as pd
import pytest
import yaml

from modepair.circuits import candidates
from modepair.reports import cautions
from modepair.runner import run
from modepair.runner.specs import read_spec
from modepair.sweeps import expand

FOLDER = Path(__file__).parent.parent / "sweeps" / "examples"
EXAMPLES = sorted(FOLDER.glob("*.yaml"))


@pytest.fixture(scope="module")
def cases(tmp_path_factory: pytest.TempPathFactory) -> dict[str, pd.DataFrame]:
    """Every example's table of cases, by the file's name."""
    folder = tmp_path_factory.mktemp("runs")
    return {path.stem: run(path, folder / path.stem, jobs=1).cases for path in EXAMPLES}


def test_the_example_that_the_readme_runs_is_there() -> None:
    assert "silo-weighing" in [path.stem for path in EXAMPLES]
    readme = (FOLDER.parent.parent / "README.md").read_text(encoding="utf-8")
    assert "modepair run sweeps/examples/silo-weighing.yaml" in readme
    assert len(EXAMPLES) >= 4


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_it_loads_and_varies_something(path: Path) -> None:
    spec = read_spec(path)
    sweep = expand(spec)
    assert spec.title
    assert sweep.count >= 8
    assert len(spec.frequency.spots) >= 3


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_it_names_built_in_candidates_only(path: Path) -> None:
    spec = read_spec(path)
    assert not spec.opamps
    assert not spec.opamp_files
    used = {name for block in expand(spec).blocks for name in block.opamps.values()}
    assert used <= set(candidates())


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_it_says_near_its_top_what_to_change_first(path: Path) -> None:
    lines = path.read_text(encoding="utf-8").splitlines()
    head = lines[: next(number for number, line in enumerate(lines) if line.startswith("title:"))]
    assert all(line.startswith("#") for line in head)
    text = "\n".join(head)
    assert "Change first:" in text
    assert "invented" in text
    assert f"modepair run sweeps/examples/{path.name}" in text


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_its_comment_counts_its_cases_right(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    comment = next(line for line in text.splitlines() if line.startswith("vary:"))
    count = expand(read_spec(path)).count
    assert comment.endswith(f"= {count} cases")
    lengths = [len(values) for values in yaml.safe_load(text)["vary"].values()]
    assert [int(word) for word in comment.split("#")[1].split() if word.isdigit()] == [*lengths, count]


def test_the_spec_in_the_readme_is_one(tmp_path: Path) -> None:
    readme = (FOLDER.parent.parent / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"^```yaml\n(.*?)^```", readme, re.MULTILINE | re.DOTALL)
    (base,) = [block for block in blocks if block.startswith("title:")]
    path = tmp_path / "readme.yaml"
    path.write_text(base, encoding="utf-8")
    assert expand(read_spec(path)).count == 4
    sections = [block for block in blocks if block.startswith(("limits:", "tolerance:"))]
    assert len(sections) == 2
    # Together, over the band of the profile that the section on limits names.
    path.write_text(base.replace("stop: 100k", "stop: 200k") + "".join(sections), encoding="utf-8")
    assert expand(read_spec(path)).count == 4


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_reports_have_a_text_for_its_cautions(path: Path) -> None:
    spec = read_spec(path)
    assert len(cautions(spec.cautions)) == len(spec.cautions)


def test_circuits_on_a_patient_carry_the_medical_caution() -> None:
    spec = read_spec(FOLDER / "skin-electrodes.yaml")
    assert "medical" in spec.cautions
    assert "A simulation shows no compliance" in spec.text


def test_every_case_of_every_example_runs(cases: dict[str, pd.DataFrame]) -> None:
    for name, table in cases.items():
        assert (table["state"] == "done").all(), name
        assert not table["above_floor"].any(), name


def test_candidates_and_wiring_both_matter_for_the_silo(cases: dict[str, pd.DataFrame]) -> None:
    """Closed forms, first order: what the comments of the file say."""
    at_50hz = cases["silo-weighing"].pivot(
        index="stage.opamp", columns="source.imbalance", values="cmrr_db_at_50hz"
    )
    assert at_50hz[0.0].max() - at_50hz[0.0].min() > 20
    # The imbalance against 3 nF of cable and 1 nF of filter: 1/(2 pi 50 Hz 100 ohm 4 nF) is 78.0 dB. It rules
    # where the op-amps are far better; 0.3 dB for what is left of their own error.
    better = at_50hz.index.isin(["precision-bipolar", "quiet-bipolar", "zero-drift"])
    assert at_50hz.loc[better, 100.0].to_numpy() == pytest.approx(78.0, abs=0.3)
    # Equal op-amps in A1 and A2 cancel. A3's 86 dB, divided by a first stage of 101, adds to the reference's
    # 0.1 ohm, 10 ppm of R4, over (1 + 1) 101: 1/(4.96e-7 + 4.95e-8) is 125.3 dB.
    assert at_50hz.loc["general-purpose", 0.0] == pytest.approx(125.3, abs=0.3)


def test_a_nominal_run_flatters_the_silo(cases: dict[str, pd.DataFrame]) -> None:
    """What the README says of it: the boards' tolerances cost some 50 dB where nothing else limits."""
    table = cases["silo-weighing"].set_index(["stage.opamp", "source.imbalance"])
    for opamp in ("precision-bipolar", "quiet-bipolar", "zero-drift"):
        assert 144 < table.loc[(opamp, 0.0), "cmrr_db_at_50hz"] < 146
        assert 92 < table.loc[(opamp, 0.0), "cmrr_db_p1_at_50hz"] < 96
    assert table.xs(100.0, level=1)["cmrr_db_p1_at_50hz"].max() < 77


def test_a_resistor_ratio_costs_the_motor_shunt_what_its_comments_say(cases: dict[str, pd.DataFrame]) -> None:
    table = cases["motor-shunt"].set_index(["stage.opamp", "stage.parts.R4", "stage.parts.C4"])
    # One resistor off by d in a stage of unity gain: d/2 (closed form, first order).
    one_percent = table.xs((10.1e3, 15.3e-12), level=(1, 2))
    assert one_percent["cmrr_db_at_20000hz"].drop("general-purpose").to_numpy() == pytest.approx(
        46.0, abs=0.2
    )


def test_no_case_of_the_electrodes_reaches_the_mains_test(cases: dict[str, pd.DataFrame]) -> None:
    table = cases["skin-electrodes"]
    assert table[["cmrr_db_at_50hz", "cmrr_db_at_60hz"]].to_numpy().max() < 89.0


def test_buffers_pay_for_the_line_receiver_with_an_imbalance(cases: dict[str, pd.DataFrame]) -> None:
    table = cases["audio-line-receiver"]
    worst = table.groupby(["stage.topology", "stage.opamp"])["cmrr_db_at_50hz"].min().unstack(0)
    assert (worst["buffered-difference"] - worst["difference"]).min() > 5
    # Late in the band three slow op-amps cost more than buffers gain.
    late = table.groupby(["stage.topology", "stage.opamp"])["cmrr_db_at_10000hz"].min().unstack(0)
    assert late.loc["general-purpose", "buffered-difference"] < late.loc["general-purpose", "difference"]


def test_a_guard_is_worth_what_the_electrodes_comments_say(cases: dict[str, pd.DataFrame]) -> None:
    table = cases["telluric-electrodes"].set_index(
        ["stage.opamps.A4", "stage.parts.RLINK", "stage.parts.RGUARD"]
    )
    # Closed form, first order: 1/(2 pi f 1 kohm 5 nF) with the screens linked to ground.
    linked = table.xs(1e-3, level=1)
    assert linked["cmrr_db_at_50hz"].to_numpy() == pytest.approx(56.1, abs=0.1)
    assert linked["cmrr_db_at_1000hz"].to_numpy() == pytest.approx(30.1, abs=0.1)
    guarded = table.loc[("low-bias-jfet", 1e9, 100.0)]
    # 44 dB better by the screen's share alone; what the inputs and op-amps add or take away is 2 dB.
    assert guarded["cmrr_db_at_1000hz"] - 30.1 == pytest.approx(44.0, abs=2.0)
    slow = table.loc[("micropower-cmos", 1e9, 100.0)]
    assert slow["cmrr_db_at_1000hz"] < guarded["cmrr_db_at_1000hz"] - 5
    # On boards the inputs' capacitors and resistors limit at 50 Hz, guard or not.
    boards = table.xs(1e9, level=1)["cmrr_db_p1_at_50hz"]
    assert boards.max() - boards.min() < 1.0
    assert (table.xs(1e9, level=1)["cmrr_db_at_50hz"] - boards > 8).all()
