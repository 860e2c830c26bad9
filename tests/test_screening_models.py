"""Model parameters on the allow-list: ngspice knows every one, and says so of one it does not know.

Kind of truth: what ngspice 39 prints.
"""

from __future__ import annotations

import subprocess
from pathlib import Path

import pytest

from modepair.circuits.screening import screen
from modepair.circuits.screening.models import _PARAMETERS  # the list itself is what is tested
from tests.spice_process import NGSPICE, needs_ngspice

ELEMENTS = {
    "d": ("d", "d{} a 0 {}", ""),
    "q": ("npn", "q{} a a 0 0 {}", ""),
    "j": ("njf", "j{} a 0 0 {}", ""),
    "m1": ("nmos", "m{} a a 0 0 {} l=1u w=1u", "level=1 "),
    "m2": ("nmos", "m{} a a 0 0 {} l=1u w=1u", "level=2 "),
    "m3": ("nmos", "m{} a a 0 0 {} l=1u w=1u", "level=3 "),
}


def complaints(deck: str, folder: Path) -> list[str]:
    (folder / "deck.cir").write_text(f"models\nv1 a 0 0\n{deck}\n.op\n.end\n")
    done = subprocess.run(
        [NGSPICE or "", "-b", "deck.cir"], cwd=folder, capture_output=True, text=True, timeout=60, check=False
    )
    printed = f"{done.stdout}\n{done.stderr}".lower().splitlines()
    return [line for line in printed if "unrecognized" in line or "unknown" in line or "ignored" in line]


@needs_ngspice
@pytest.mark.parametrize("family", list(ELEMENTS))
def test_ngspice_knows_every_parameter_that_is_taken(family: str, tmp_path: Path) -> None:
    kind, element, level = ELEMENTS[family]
    cards = []
    for index, key in enumerate(sorted(_PARAMETERS[family] - {"level"})):
        cards += [element.format(index, f"mm{index}"), f".model mm{index} {kind}({level}{key}=0.5)"]
    assert len(cards) > 20
    assert complaints("\n".join(cards), tmp_path) == []
    unknown = f"{element.format('x', 'mx')}\n.model mx {kind}({level}nonsense=0.5)"
    assert complaints(unknown, tmp_path) != []


@needs_ngspice
def test_screened_ordinary_models_load_without_a_word(tmp_path: Path) -> None:
    folder = Path(__file__).parent / "ordinary_models"
    for path in sorted(folder.glob("*.lib")):
        assert complaints(screen(path, folder).text, tmp_path) == []
