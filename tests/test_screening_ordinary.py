"""Ordinary models: what ngspice reads from the screened text is what it reads from the file itself.

Kind of truth: ngspice against itself, with the file on one side and the screened text on the other. It shows
that the screening changes nothing; where ngspice itself misreads a file (switches, tables beyond their ends,
LAPLACE), other modules compare with closed forms.
"""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from modepair.circuits.screening import screen
from tests.spice_process import needs_ngspice, run_ngspice

FOLDER = Path(__file__).parent / "ordinary_models"
MODELS = sorted(path.stem for path in FOLDER.glob("*.lib"))


def bench_of(model: str) -> tuple[str, str, list[str]]:
    text = (FOLDER / f"{model}.bench").read_text()
    dialect = re.search(r"dialect: (\w+)", text)
    assert dialect is not None
    return text, dialect[1], re.findall(r"probe: (\w+)", text)


def whole_text(model: str) -> str:
    """The file with what it includes put in by hand, each once."""
    text = (FOLDER / f"{model}.lib").read_text()
    parts = "".join((FOLDER / "parts" / name).read_text() for name in ("devices.inc", "more.inc"))
    kept = [line for line in text.splitlines() if not re.match(r"\.(inc|lib|end$)", line)]
    included = [line for line in parts.splitlines() if not line.startswith(".inc")]
    return "\n".join([*(included if "parts/" in text else []), *kept])


def test_every_model_has_a_bench() -> None:
    assert len(MODELS) >= 12
    assert sorted(path.stem for path in FOLDER.glob("*.bench")) == MODELS


@needs_ngspice
@pytest.mark.parametrize("model", MODELS)
def test_screened_text_agrees_with_the_file(model: str, tmp_path: Path) -> None:
    bench, dialect, probes = bench_of(model)
    screened = screen(FOLDER / f"{model}.lib", FOLDER)
    outputs = {}
    for name, text, psa in (
        ("file", whole_text(model), dialect == "psa"),
        ("screened", screened.text, False),
    ):
        folder = tmp_path / name
        folder.mkdir()
        outputs[name] = run_ngspice(f"bench\n{bench}\n{text}\n.end\n", folder, psa=psa)
    for probe in probes:
        expected, found = outputs["file"][probe], outputs["screened"][probe]
        assert np.all(np.abs(expected) > 1e-9), "the bench shows nothing"
        difference_db = 20 * np.log10(np.abs(found) / np.abs(expected))
        # Constants typed into VALUE text keep 11 digits in ngspice: 1e-10 dB; the limit is what the project
        # asks.
        assert np.max(np.abs(difference_db)) < 1e-6
        assert np.max(np.abs(np.angle(found / expected))) < 1e-7


@pytest.mark.parametrize("model", MODELS)
def test_screened_text_needs_no_compatibility_mode_and_is_its_own_screening(
    model: str, tmp_path: Path
) -> None:
    _, dialect, _ = bench_of(model)
    screened = screen(FOLDER / f"{model}.lib", FOLDER)
    assert screened.dialect == "plain"
    assert screened.written_for == ("psa" if dialect == "psa" else "plain")
    again = tmp_path / "again.lib"
    again.write_text(screened.text)
    twice = screen(again, tmp_path)
    assert twice.text == screened.text
    assert twice.written_for == "plain"
    assert set(twice.subcircuits) >= set(screened.subcircuits)
    assert "{" not in re.sub(r"value=\{[^{}]*\}", "", screened.text)
