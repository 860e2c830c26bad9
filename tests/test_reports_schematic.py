"""The schematic: every part and its value, in every topology, as SVG that cannot do harm."""

from __future__ import annotations

from xml.etree import ElementTree as ET

import numpy as np
import pytest

from modepair.reports.schematic import part_values, schematic_svg
from modepair.reports.sketch import value_text
from modepair.sweeps.parts import PARTS, TOPOLOGIES

SOURCE = [name for name, part in PARTS.items() if part.section == "source"]


def all_parts(topology: str) -> dict[str, float]:
    """A value of its own for every part that a stage and its source can have."""
    names = [*TOPOLOGIES[topology].parts, *SOURCE]
    scale = {"C": 1e-12, "R": 1e3}
    return {name: scale[name[0]] * (10 + number) for number, name in enumerate(names)}


def texts(svg: str) -> list[str]:
    return [text.strip() for node in ET.fromstring(svg).iter() for text in node.itertext() if text.strip()]


@pytest.mark.parametrize("topology", list(TOPOLOGIES))
def test_every_part_is_drawn_with_its_value(topology: str) -> None:
    parts = all_parts(topology)
    opamps = {name: f"kind-{name.lower()}" for name in TOPOLOGIES[topology].opamps}
    svg = schematic_svg(topology, parts, opamps)
    written = set(texts(svg))
    for name, value in parts.items():
        assert name in written
        assert value_text(name, value) in written
    for name, kind in opamps.items():
        assert {name, kind} <= written


@pytest.mark.parametrize("topology", list(TOPOLOGIES))
def test_parts_that_are_not_there_are_not_drawn(topology: str) -> None:
    parts = dict.fromkeys(TOPOLOGIES[topology].required, 1e4)
    written = set(texts(schematic_svg(topology, parts, {})))
    assert written & set(PARTS) == set(parts)
    assert {"out", "plus", "minus", "leg"} <= written | {"plus", "minus", "leg"}


def test_the_svg_refers_to_nothing_and_scales() -> None:
    svg = schematic_svg("three-opamp", all_parts("three-opamp"), {"A1": "quiet-bipolar"})
    root = ET.fromstring(svg)
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    assert "viewBox" in root.attrib
    assert not {"width", "height"} & set(root.attrib)
    assert root.attrib["aria-label"] == "Schematic of the three-opamp stage behind its source network"
    for node in root.iter():
        assert node.tag.rpartition("}")[2] not in {"script", "image", "a", "use", "foreignObject"}
        assert not any(name.rpartition("}")[2].startswith(("href", "on")) for name in node.attrib)


def test_values_that_vary() -> None:
    assert value_text("R1", 10e3) == "10 kΩ"
    assert value_text("RI", np.array([100.0, 0.0, 10.0])) == "0, 10, 100 Ω"
    assert value_text("CCP", np.array([1e-10, 1e-9])) == "100 pF, 1 nF"
    assert value_text("CCP", np.geomspace(1e-12, 1e-9, 10)) == "1 pF to 1 nF"


def test_parts_of_several_blocks_are_put_together() -> None:
    blocks = [{"R1": 1e4, "RG": 200.0, "A1.gain_bandwidth": 1e6}, {"R1": 1e4, "RI": np.array([0.0, 10.0])}]
    found = part_values(blocks)
    assert set(found) == {"R1", "RG", "RI"}
    assert found["R1"] == 1e4
    assert found["RG"] == 200.0  # absent is not 0 ohm
    np.testing.assert_array_equal(found["RI"], [0.0, 10.0])


@pytest.mark.parametrize(
    ("imbalance", "told"),
    [(10.0, "10 Ω"), (-10.0, "10 Ω"), (np.array([-10.0, 10.0]), "negative: in the minus leg")],
)
def test_the_imbalance_stands_in_its_leg(imbalance: float | np.ndarray, told: str) -> None:
    parts = dict.fromkeys(TOPOLOGIES["difference"].required, 1e4)
    assert told in texts(schematic_svg("difference", {**parts, "RI": imbalance}, {}))


def test_an_unknown_topology_is_refused() -> None:
    with pytest.raises(
        ValueError, match="topology must be one of difference, buffered-difference, .* not 'four'"
    ):
        schematic_svg("four", {}, {})
