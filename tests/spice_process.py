"""Runs of the stand-alone ngspice program in a folder of their own, for tests."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

__all__ = ["NGSPICE", "needs_ngspice", "run_ngspice", "vectors_of"]

NGSPICE = shutil.which("ngspice")

needs_ngspice = pytest.mark.skipif(NGSPICE is None, reason="the ngspice program is not installed")


def run_ngspice(
    deck: str, folder: Path, *, psa: bool = False, timeout_s: float = 20.0
) -> dict[str, npt.NDArray[np.complex128]]:
    """Run a deck in batch mode and return its AC vectors by name.

    The folder becomes the working directory; its ``.spiceinit`` sets the PSpice mode where that is asked for.
    """
    (folder / ".spiceinit").write_text("set ngbehavior=psa\n" if psa else "* nothing\n")
    (folder / "deck.cir").write_text(deck)
    raw = folder / "deck.raw"
    raw.unlink(missing_ok=True)
    done = subprocess.run(
        [NGSPICE or "ngspice", "-b", "-r", raw.name, "deck.cir"],
        cwd=folder, capture_output=True, text=True, errors="replace", timeout=timeout_s, check=False,
    )  # fmt: skip
    if not raw.exists():
        raise AssertionError(f"ngspice wrote nothing:\n{done.stdout[-2000:]}\n{done.stderr[-2000:]}")
    return vectors_of(raw)


def vectors_of(raw: Path) -> dict[str, npt.NDArray[np.complex128]]:
    """Read the last plot of a binary raw file of complex vectors."""
    data = raw.read_bytes()
    header, _, body = data[data.rindex(b"Title:") :].partition(b"Binary:\n")
    text = header.decode("ascii", "replace")
    names = re.findall(r"^\t\d+\t(\S+)\t", text, re.MULTILINE)
    points = int(re.findall(r"No\. Points: (\d+)", text)[0])
    values = np.frombuffer(body[: 16 * points * len(names)], dtype=np.complex128).reshape(points, len(names))
    return {
        re.sub(r"^v\((.*)\)$", r"\1", name.lower()): values[:, index].copy()
        for index, name in enumerate(names)
    }
