"""Runs with draws, for tests of what they write: without plots and pages, which take most of a small run's time."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from modepair.runner import Run, pages, run
from modepair.sweeps import Spec, Sweep, expand, load_spec


def swept(folder: Path, text: str, name: str = "boards") -> Sweep:
    """Write a spec into a folder, read and expand it."""
    path = folder / f"{name}.yaml"
    path.write_text(text, encoding="utf-8")
    return expand(load_spec(path))


def run_without_pages(spec: Spec, folder: Path, **options: Any) -> Run:
    """Run a spec; everything is written but plots and pages."""
    with pytest.MonkeyPatch.context() as patch:
        for name in ("begin_curves", "write_pages"):
            patch.setattr(pages, name, lambda *given, **named: None)
        return run(spec, folder, **options)
