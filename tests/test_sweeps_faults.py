"""Faults and their wording."""

from __future__ import annotations

import pytest

from modepair.sweeps import Fault, ModepairError, SpecError
from modepair.sweeps.faults import SHOWN_FAULTS, RefusedError, SeveralRefusedError, form_of, shown


def test_a_fault_reads_where_key_and_message() -> None:
    fault = Fault("silo.yaml", 14, 11, "stage.parts.R1", "10 pF is a capacitance")
    assert str(fault) == "silo.yaml:14:11: stage.parts.R1: 10 pF is a capacitance"


def test_a_fault_of_the_whole_file_has_no_place() -> None:
    assert str(Fault("silo.yaml", 0, 0, "", "no such file")) == "silo.yaml: no such file"


def test_control_text_in_a_file_name_or_key_is_escaped() -> None:
    assert str(Fault("a\nb.yaml", 1, 2, "k\x1b[0m", "bad")) == r"a\nb.yaml:1:2: k\x1b[0m: bad"


def test_a_spec_error_lists_every_fault_in_a_line() -> None:
    faults = [Fault("a.yaml", line, 1, "k", "bad") for line in (1, 2)]
    with pytest.raises(ValueError, match=r"^a\.yaml:1:1: k: bad\na\.yaml:2:1: k: bad$") as caught:
        raise SpecError(faults)
    assert isinstance(caught.value, ModepairError)
    assert isinstance(caught.value, SpecError)
    assert caught.value.faults == tuple(faults)


def test_a_spec_error_with_very_many_faults_counts_the_rest() -> None:
    error = SpecError([Fault("a.yaml", line, 1, "", "bad") for line in range(1, SHOWN_FAULTS + 8)])
    assert str(error).endswith(f"a.yaml:{SHOWN_FAULTS}:1: bad\n... and 7 more faults")
    assert len(error.faults) == SHOWN_FAULTS + 7


def test_shown_cuts_and_escapes() -> None:
    assert shown("4k7 µ") == "4k7 µ"
    assert shown("a\tb") == r"a\tb"
    assert shown("x" * 100) == "x" * 60 + "..."
    assert shown("\ud800") == r"\ud800"


def test_refusals_are_value_errors_of_ours() -> None:
    with pytest.raises(ValueError, match=r"^5 V is a voltage; this key takes a resistance$") as caught:
        raise RefusedError("5 V is a voltage", "a resistance")
    assert isinstance(caught.value, ModepairError)
    with pytest.raises(ValueError, match=r"^a is bad; b is bad$") as several:
        raise SeveralRefusedError([(("x",), RefusedError("a is bad")), (("y",), RefusedError("b is bad"))])
    assert isinstance(several.value, ModepairError)


def test_a_refusal_that_asks_goes_on_with_a_new_sentence() -> None:
    assert (
        RefusedError("did you mean x?", "one of x or y").message("k")
        == "did you mean x? k takes one of x or y"
    )


@pytest.mark.parametrize(
    ("written", "form"),
    [
        ({}, "this is a mapping"),
        ([1], "this is a list"),
        ("", "no value is given"),
        (None, "no value is given"),
        ("5", "5 is a single value"),
    ],
)
def test_the_form_of_a_value_is_named(written: object, form: str) -> None:
    assert form_of(written) == form
