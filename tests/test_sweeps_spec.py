"""The spec as an object, and its JSON Schema."""

from __future__ import annotations

import hashlib
import json
import pickle
import re
from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from modepair.sweeps import OPAMP_PARAMETERS, PARTS, Opamp, Spec, json_schema, load_spec
from modepair.sweeps.imported import MODEL_KEYS

TEXT = """\
title: Silo weighing, bridge front end
stage:
  topology: three-opamp
  parts: {RF1: 10k, RF2: 10k, R1: 10k, R2: 10k, R3: 10k, R4: 10k, A2.cmrr: 90 dB}
  gain: 101
  opamp: quiet
  reference_resistance: 0
source: {resistance: 350, imbalance: 10, filter: {resistance: 1k, between: 10n}}
frequency: {start: 1, stop: 1M, spots: [50, 60]}
vary:
  stage.opamp: [quiet, other]
  source.cable_capacitance: [0, 3n]
opamps:
  quiet: {open_loop_gain: 130 dB, gain_bandwidth: 8 MHz}
"""
OTHER = Opamp.model_validate({"open_loop_gain": "100 dB", "gain_bandwidth": "1 MHz"})


@pytest.fixture(scope="module")
def spec(tmp_path_factory: pytest.TempPathFactory) -> Spec:
    path = tmp_path_factory.mktemp("spec") / "silo.yaml"
    path.write_text(TEXT)
    return load_spec(path, {"other": OTHER, "quiet": OTHER})


@pytest.mark.parametrize(
    ("key", "place"),
    [
        ("title", "1:1"),
        ("stage.parts.R1", "4:31"),
        ("stage.parts.A2.cmrr", "4:67"),
        ("source.filter.between", "8:67"),
        ("frequency.spots[1]", "9:45"),
        ("vary.stage.opamp[1]", "11:24"),
        ("source.cable_capacitance", "12:3"),
        ("opamps.quiet.gain_bandwidth", "14:35"),
        ("stage.load", "2:1"),
        ("tolerance.parts[0].matching", "1:1"),
    ],
)
def test_keys_know_where_they_stand(spec: Spec, key: str, place: str) -> None:
    assert spec.where(key) == f"{spec.path}:{place}"


def test_text_and_digest_are_those_of_the_file(spec: Spec) -> None:
    assert spec.text == TEXT
    assert spec.digest == hashlib.sha256(Path(spec.path).read_bytes()).hexdigest()


def test_candidates_in_place_go_before_built_in_ones(spec: Spec) -> None:
    assert spec.candidates["other"] == OTHER
    assert spec.candidates["quiet"].gain_bandwidth == 8e6


def test_stages_and_instances_in_use(spec: Spec) -> None:
    assert spec.topologies == ("three-opamp",)
    assert spec.instances == ("A1", "A2", "A3")


def test_a_spec_is_frozen(spec: Spec) -> None:
    with pytest.raises(ValidationError, match="frozen"):
        spec.title = "other"  # type: ignore[misc]


def test_a_spec_survives_pickling(spec: Spec) -> None:
    again = pickle.loads(pickle.dumps(spec))
    assert again == spec
    assert again.where("stage.gain") == spec.where("stage.gain")
    assert again.axes == spec.axes


def properties(section: str) -> dict[str, Any]:
    found = json_schema()["$defs"][section]["properties"]
    if not isinstance(found, dict):
        raise TypeError(section)
    return found


def test_the_schema_knows_every_key_and_refuses_others() -> None:
    schema = json_schema()
    json.dumps(schema)
    assert set(schema["properties"]) == set(Spec.model_fields)
    assert schema["additionalProperties"] is False
    assert set(schema["required"]) == {"stage", "frequency"}
    for section in schema["$defs"].values():
        assert section["additionalProperties"] is False


def test_the_schema_enumerates_parts_and_parameters() -> None:
    stage = properties("Stage")["parts"]
    assert stage["additionalProperties"] is False
    source = properties("Source")["parts"]
    named = {name for name in (*stage["properties"], *source["properties"]) if "." not in name}
    assert named == set(PARTS)
    assert {f"A1.{parameter}" for parameter in OPAMP_PARAMETERS} <= set(stage["properties"])
    assert set(properties("Opamp")) == {*OPAMP_PARAMETERS, *MODEL_KEYS, "note", "unit_price"}
    assert properties("Stage")["topology"] == {
        "enum": ["difference", "buffered-difference", "two-opamp", "three-opamp", "netlist"],
        "title": "Topology",
    }


def test_the_schema_leaves_to_axes_what_axes_may_give() -> None:
    assert "required" not in json_schema()["$defs"]["Stage"]
    assert "required" not in json_schema()["$defs"]["Opamp"]


def test_the_schema_of_a_quantity_helps_an_editor() -> None:
    resistor = properties("Stage")["parts"]["properties"]["R1"]
    assert resistor["description"] == "a resistance from 1 µΩ to 1 PΩ, such as 10k"
    assert resistor["examples"] == ["10k"]
    assert re.match(resistor["pattern"], "4k7")
    assert not re.match(resistor["pattern"], "10 pF")


def test_the_schema_knows_the_paths_of_axes() -> None:
    vary = json_schema()["properties"]["vary"]
    assert {"stage.opamp", "stage.parts.R1", "source.filter.between"} <= set(vary["properties"])
    assert any(re.match(pattern, "opamps.quiet-bipolar.cmrr") for pattern in vary["patternProperties"])
    assert not any(re.match(pattern, "opamps.quiet-bipolar.cmr") for pattern in vary["patternProperties"])


def test_the_schema_takes_what_an_own_circuit_may_have() -> None:
    parts = properties("Stage")["parts"]
    kinds = {
        "RGUARD": "a resistance", "CIN_1": "0 or a capacitance", "L1": "an inductance",
        "U7.gain_bandwidth": "a frequency",
    }  # fmt: skip
    for name, noun in kinds.items():
        found = [text for pattern, text in parts["patternProperties"].items() if re.search(pattern, name)]
        assert [text["description"].startswith(noun) for text in found] == [True], name
    # RREF takes 0, which other resistances do not, so no pattern may refuse it.
    for name in ("RREF", "rguard", "X1", "R-1", "U7.gain"):
        assert not any(re.search(pattern, name) for pattern in parts["patternProperties"]), name
    vary = json_schema()["properties"]["vary"]["patternProperties"]
    for path in ("stage.parts.RGUARD", "stage.parts.L1", "stage.opamps.A7", "stage.parts.A7.cmrr"):
        assert any(re.search(pattern, path) for pattern in vary), path
    assert not any(re.search(pattern, "stage.parts.rguard") for pattern in vary)
    assert properties("Stage")["ports"]["anyOf"][0]["items"]["enum"][:4] == [
        "plus", "minus", "output", "reference"
    ]  # fmt: skip
    of = json_schema()["$defs"]["ToleranceEntry"]["properties"]["of"]["items"]["anyOf"]
    assert re.search(of[1]["pattern"], "RGUARD")
    assert not re.search(of[1]["pattern"], "A7.cmrr_sign")
