"""Names, choices and free text."""

from __future__ import annotations

import pytest

from modepair.sweeps.faults import RefusedError
from modepair.sweeps.leaves import Leaf
from modepair.sweeps.words import Choice, Name, Text, listed, nearest, suggestion

TOPOLOGY = Choice("a topology", ("difference", "two-opamp"))
NAME = Name("an op-amp name", "quiet-bipolar", longest=10)
TITLE = Text(20)


def test_a_known_word_is_taken() -> None:
    assert TOPOLOGY.parse(" two-opamp ") == "two-opamp"


@pytest.mark.parametrize(
    ("leaf", "written", "message"),
    [
        (
            TOPOLOGY,
            "diference",
            "diference is not a topology; did you mean difference? K takes difference or two-opamp",
        ),
        (TOPOLOGY, "zzz", "zzz is not a topology; K takes difference or two-opamp"),
        (TOPOLOGY, "", "no value is given; K takes difference or two-opamp"),
        (TOPOLOGY, ["difference"], "this is a list; K takes difference or two-opamp"),
        (NAME, "", "no value is given; K takes an op-amp name"),
        (
            NAME,
            "Quiet",
            "Quiet is not a name; K takes an op-amp name of at most 10 lower-case letters a-z, digits",
        ),
        (NAME, "a b", "a b is not a name"),
        (NAME, "a\n", r"a\n is not a name"),
        (NAME, "{a}", "{a} is not a name"),
        (NAME, "-a", "-a is not a name"),
        (NAME, "é", "é is not a name"),
        (NAME, "a" * 11, "aaaaaaaaaaa is not a name"),
        (
            TITLE,
            "a\x1bb",
            r"a\x1bb holds the character U+001B; K takes printable text in one line, at most 20",
        ),
        (TITLE, "a\nb", r"a\nb holds the character U+000A"),
        (TITLE, "a" * 21, "has 21 characters; K takes printable text"),
        (TITLE, {}, "this is a mapping; K takes printable text"),
    ],
)
def test_other_words_are_refused(leaf: Leaf, written: object, message: str) -> None:
    with pytest.raises(RefusedError, match="takes") as caught:
        leaf.parse(written)
    assert message in caught.value.message("K")


def test_a_name_that_yaml_would_read_as_a_truth_value_is_a_name() -> None:
    assert NAME.parse("no") == "no"


def test_a_title_keeps_its_letters_and_loses_blanks_around_it() -> None:
    assert TITLE.parse(" Wägung Ω \n") == "Wägung Ω"


def test_the_nearest_word_is_found_whatever_its_case() -> None:
    assert nearest("RG1", ["R1", "RG"]) == "RG"
    assert nearest("ref", ["RF1", "zero"]) == "RF1"
    assert nearest("xyz", ["R1"]) == ""
    assert suggestion("gan", ["gain", "load"]) == "; did you mean gain?"
    assert suggestion("xyz", ["gain"]) == ""


def test_a_suggestion_never_repeats_control_text() -> None:
    assert suggestion("fast", ["fast\n.end"]) == ""


def test_words_are_listed_in_prose() -> None:
    assert listed([]) == ""
    assert listed(["A1"]) == "A1"
    assert listed(["A1", "A2", "A3"]) == "A1, A2 and A3"


def test_schemas_of_words() -> None:
    assert TOPOLOGY.json_schema() == {"enum": ["difference", "two-opamp"]}
    assert NAME.json_schema()["pattern"] == "^[a-z0-9][a-z0-9_-]*$"
    assert TITLE.json_schema() == {"type": "string", "maxLength": 20}
