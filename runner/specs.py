"""Reading specs with all that they may refer to: built-in op-amps, and circuit files."""

from __future__ import annotations

from pathlib import Path

from modepair.circuits import candidates, read_circuit
from modepair.sweeps import Spec, load_spec

__all__ = ["read_spec"]


def read_spec(path: str | Path) -> Spec:
    """Read a sweep spec from its file.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    Spec

    Raises
    ------
    SpecError
        With every fault of the spec and of the files that it names.
    """
    return load_spec(path, candidates(), read_circuit)
