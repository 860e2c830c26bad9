"""Axes: settings found by their paths, values read one by one."""

from __future__ import annotations

import pytest
from pydantic import BaseModel

from modepair.sweeps.axes import Axis, _leaves, read_axis, setting_at, settings
from modepair.sweeps.faults import RefusedError, SeveralRefusedError
from modepair.sweeps.parts import OPAMP_PARAMETERS, PARTS
from modepair.sweeps.quantities import RESISTANCE
from modepair.sweeps.schema import FrequencyValue
from modepair.sweeps.vocabulary import BUILT_IN

KNOWN = settings(["quiet-bipolar"])


@pytest.mark.parametrize(
    "path",
    [
        "stage.opamp",
        "stage.opamps.A1",
        "stage.topology",
        "stage.gain",
        "stage.parts.R1",
        "stage.parts.A1.gain_bandwidth",
        "stage.reference_resistance",
        "stage.load",
        "source.resistance",
        "source.imbalance",
        "source.filter.between",
        "source.parts.CCP",
        "opamps.quiet-bipolar.cmrr",
        *(f"{part.section}.parts.{part.name}" for part in PARTS.values()),
        *(f"opamps.quiet-bipolar.{parameter}" for parameter in OPAMP_PARAMETERS),
    ],
)
def test_settings_can_be_varied(path: str) -> None:
    assert setting_at(path, KNOWN).takes


def test_a_part_is_of_the_kind_that_its_place_takes() -> None:
    assert setting_at("stage.parts.R1", KNOWN) == RESISTANCE


@pytest.mark.parametrize(
    ("path", "message"),
    [
        ("stage.opam", r"^there is no setting stage\.opam to vary; did you mean stage\.opamp\?$"),
        ("stage.parts.RX1", r"did you mean stage\.parts\.R"),
        ("opamps.quite-bipolar.cmrr", r"did you mean opamps\.quiet-bipolar\.cmrr\?$"),
        ("zz", r"^there is no setting zz to vary; paths are such as stage\.opamp, stage\.parts\.R1"),
        ("frequency.start", r"^there is no setting frequency\.start to vary"),
        ("a\nb", r"^there is no setting a\\nb to vary"),
        ("", r"^there is no setting  to vary"),
    ],
)
def test_an_unknown_path_is_refused_with_the_nearest(path: str, message: str) -> None:
    with pytest.raises(RefusedError, match=message):
        read_axis(path, ["1"], KNOWN)


def test_values_are_read_and_their_labels_kept() -> None:
    assert read_axis("source.imbalance", ["0", "4k7", "-10 Ω"], KNOWN) == Axis(
        "source.imbalance", (0.0, 4700.0, -10.0), ("0", "4k7", "-10 Ω")
    )
    names = read_axis("stage.opamp", ["b", "a"], KNOWN)
    assert names.values == ("b", "a")
    assert not names.numeric


@pytest.mark.parametrize(
    ("written", "message"),
    [
        ("10k", "^10k is a single value; this key takes a list of values"),
        ({}, "^this is a mapping; this key takes a list of values"),
        ([], "^the list is empty; this key takes at least one value$"),
    ],
)
def test_an_axis_is_a_list(written: object, message: str) -> None:
    with pytest.raises(RefusedError, match=message):
        read_axis("stage.parts.R1", written, KNOWN)


def test_every_value_that_is_refused_is_located() -> None:
    with pytest.raises(SeveralRefusedError, match="a capacitance") as caught:
        read_axis("stage.parts.R1", ["10k", "1e4", "10 pF", "10000", ["1"]], KNOWN)
    assert [(where, str(refusal)) for where, refusal in caught.value.refusals] == [
        ((1,), "1e4 is on this axis twice (as 10k); remove one of them"),
        ((2,), "10 pF is a capacitance; this key takes a resistance, such as 10k"),
        ((3,), "10000 is on this axis twice (as 10k); remove one of them"),
        ((4,), "this is a list; this key takes a resistance, such as 10k"),
    ]


def test_paths_may_hold_list_indexes() -> None:
    class Item(BaseModel):
        corner: FrequencyValue

    class Section(BaseModel):
        items: tuple[Item, ...] = ()
        spots: list[FrequencyValue] | None = None

    known = _leaves(Section, "section", BUILT_IN)
    assert sorted(known) == ["section.items[].corner", "section.spots[]"]
    assert read_axis("section.items[12].corner", ["50"], known).values == (50.0,)
    assert setting_at("section.spots[0]", known).takes == "a frequency, such as 50 Hz"
