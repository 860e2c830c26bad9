"""Reading specs with all that they may refer to: built-in op-amps, and circuit files."""

from __future__ import annotations

from pathlib import Path

from modepair.circuits import candidates
from modepair.sweeps import Spec, StageCircuit, load_spec

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
    return load_spec(path, candidates(), _read_circuit)


def _read_circuit(folder: Path, file: str, subcircuit: str) -> StageCircuit:
    # Its import takes a tenth of a second, which a spec without a circuit need not wait for.
    from modepair.circuits import read_circuit

    return read_circuit(folder, file, subcircuit)
