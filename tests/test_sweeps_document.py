"""The YAML reader: raw text, places, and what it refuses."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from modepair.sweeps import Fault, SpecError
from modepair.sweeps.document import (
    LARGEST_FILE,
    Document,
    Place,
    join_path,
    parse_document,
    read_document,
    split_path,
)

TEXT = """\
title: no
stage:
  parts: {R1: 10k, A1.cmrr: 80 dB}
  "päd": 010
vary:
  stage.opamp: [one,
    two]
tolerance:
  parts:
  - {matching: 1:30}
"""


def document(text: str = TEXT) -> Document:
    return parse_document(text, "a.yaml")


def test_every_scalar_stays_text() -> None:
    assert document().root.raw == {
        "title": "no",
        "stage": {"parts": {"R1": "10k", "A1.cmrr": "80 dB"}, "päd": "010"},
        "vary": {"stage.opamp": ["one", "two"]},
        "tolerance": {"parts": [{"matching": "1:30"}]},
    }


@pytest.mark.parametrize(
    ("path", "key", "value"),
    [
        ("title", (1, 1), (1, 8)),
        ("stage.parts.R1", (3, 11), (3, 15)),
        ("stage.parts.A1.cmrr", (3, 20), (3, 29)),
        ("stage.päd", (4, 3), (4, 10)),
        ("vary.stage.opamp", (6, 3), (6, 16)),
        ("vary.stage.opamp[1]", (7, 5), (7, 5)),
        ("tolerance.parts[0].matching", (10, 6), (10, 16)),
        ("tolerance.parts[7].matching", (9, 3), (9, 3)),
        ("stage.parts.R9", (3, 3), (3, 3)),
    ],
)
def test_keys_and_values_have_places(path: str, key: tuple[int, int], value: tuple[int, int]) -> None:
    location = split_path(path)
    assert document().key_place(location) == Place(*key)
    assert document().value_place(location) == Place(*value)


def test_columns_count_characters_not_bytes() -> None:
    assert document("title: {ä: 1, Ω𝄞: 2}\n").key_place(("title", "Ω𝄞")) == Place(1, 15)


def test_a_byte_order_mark_is_no_character(tmp_path: Path) -> None:
    path = tmp_path / "a.yaml"
    path.write_bytes(b"\xef\xbb\xbftitle: a\n")
    read = read_document(path)
    assert read.text == "title: a\n"
    assert read.key_place(("title",)) == Place(1, 1)


def test_windows_line_ends_are_line_ends() -> None:
    assert document("a: 1\r\nb: 2\r\n").key_place(("b",)) == Place(2, 1)


def test_paths_are_split_and_joined() -> None:
    assert split_path("tolerance.parts[0].matching") == ("tolerance", "parts", 0, "matching")
    assert join_path(("tolerance", "parts", 0, "matching")) == "tolerance.parts[0].matching"
    assert split_path("a.b[x]") == ("a", "b[x]")


def test_the_first_of_a_doubled_key_stays_and_both_places_are_named() -> None:
    read = document("a: 1\nb: {c: 1, c: {d: 2}}\na: [3]\n")
    assert read.root.raw == {"a": "1", "b": {"c": "1"}}
    assert [str(fault) for fault in read.faults] == [
        "a.yaml:2:11: b.c: this key is given twice, first at 2:5; remove one of them",
        "a.yaml:3:1: a: this key is given twice, first at 1:1; remove one of them",
    ]


def test_keys_after_a_collection_used_as_a_key_keep_their_paths() -> None:
    read = document("? {x: 1}\n: {y: 2}\nb: {c: 1, c: 2}\n")
    assert read.root.raw == {"b": {"c": "1"}}
    assert [fault.key for fault in read.faults] == ["", "b.c"]


def test_faults_before_a_stop_are_in_file_order() -> None:
    with pytest.raises(SpecError, match="alias") as caught:
        document("a: *x\na: *y\nb: {\n")
    places = [(fault.line, fault.column) for fault in caught.value.faults]
    assert places == [(1, 4), (2, 1), (2, 4), (4, 1)]


def refusal(path: str | Path) -> str:
    with pytest.raises(SpecError, match=r"file|UTF-8") as caught:
        read_document(path)
    return str(caught.value)


def test_a_missing_file_is_named() -> None:
    assert refusal("nowhere/a.yaml") == "nowhere/a.yaml: no such file"


def test_a_directory_is_no_file(tmp_path: Path) -> None:
    assert refusal(tmp_path) == f"{tmp_path}: this is a directory; a YAML file is needed"


def test_a_pipe_is_not_opened(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    assert refusal(tmp_path / "pipe").endswith("pipe: this is not a regular file; a YAML file is needed")


def test_names_that_no_file_can_have_are_refused() -> None:
    # Python before 3.14 says of such a name that it does not exist
    assert refusal("a\0b") in (r"a\x00b: this is not a file name", r"a\x00b: no such file")
    assert "the file cannot be read: file name too long" in refusal("a" * 5000)


def test_a_file_too_large_is_not_read(tmp_path: Path) -> None:
    path = tmp_path / "a.yaml"
    path.write_text("#" * (LARGEST_FILE + 1))
    assert refusal(path).endswith("the file is larger than 1,000,000 bytes, the most allowed")


def test_bytes_that_are_not_utf8_are_located(tmp_path: Path) -> None:
    path = tmp_path / "a.yaml"
    path.write_bytes("title: ä\nnote: ".encode() + b"5 \xb5F\n")
    assert refusal(path).endswith("a.yaml:2:9: byte 0xb5 is not UTF-8; save the file as UTF-8")


@given(st.text(alphabet=st.sampled_from("ab:-[]{}?!&*|>'\"%#,\n \t\\x0@`~<Ω"), max_size=60))
def test_any_text_is_read_or_refused(text: str) -> None:
    faults: tuple[Fault, ...] = ()
    try:
        faults = parse_document(text, "a.yaml").faults
    except SpecError as error:
        faults = error.faults
    lines = text.count("\n") + 1
    assert all(1 <= fault.line <= lines and fault.column >= 1 for fault in faults)


@given(st.text(max_size=40))
def test_any_characters_are_read_or_refused(text: str) -> None:
    faults: tuple[Fault, ...] = ()
    try:
        faults = parse_document(text, "a.yaml").faults
    except SpecError as error:
        faults = error.faults
    assert all(str(fault).isprintable() for fault in faults)
