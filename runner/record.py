"""The record of a run: what makes it repeatable."""

from __future__ import annotations

import hashlib
import platform
from collections.abc import Sequence
from dataclasses import fields
from datetime import datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

from modepair.circuits import imported_models
from modepair.runner.results import Results
from modepair.sweeps import Spec, StageCircuit, Sweep

__all__ = ["circuit_record", "provenance", "run_record", "versions"]


def versions(engine: str) -> dict[str, str]:
    """Versions of what computes a run.

    Parameters
    ----------
    engine : str
        Version of ngspice.

    Returns
    -------
    dict of str to str
        modepair, ngspice, PySpice, numpy, Python.
    """
    packages = {name: version(name) for name in ("modepair", "PySpice", "numpy")}
    return {**packages, "ngspice": engine, "Python": platform.python_version()}


def provenance(spec: Spec, engine: str, started: datetime) -> dict[str, str]:
    """Tell on a page what made a run: spec file and digest, versions, date."""
    return {
        "spec": Path(spec.path).name,
        "digest": f"sha256 {spec.digest}",
        "date": started.strftime("%Y-%m-%d %H:%M UTC"),
        **versions(engine),
    }


def circuit_record(circuit: StageCircuit) -> dict[str, Any]:
    """What a record keeps of an own circuit: enough to read the spec again without its file."""
    kept = {field.name: getattr(circuit, field.name) for field in fields(StageCircuit)}
    return {**kept, "values": dict(circuit.values)}


def run_record(
    sweep: Sweep, results: Results, started: datetime, seconds: float, warnings: Sequence[str] = ()
) -> dict[str, Any]:
    """Content of `run.json`.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    results : Results
        What it came to.
    started : datetime
        When it began.
    seconds : float
        How long it took, up to the writing of this record.
    warnings : sequence of str
        What its op-amp models cannot show.

    Returns
    -------
    dict
        Spec text and digest, its own circuit, op-amp data, versions, times, counts.
    """
    spec = sweep.spec
    used = sorted({name for block in sweep.blocks for name in block.opamps.values()})
    failed = int((results.cases["state"] != "done").sum())
    return {
        "title": spec.title,
        "spec_file": Path(spec.path).name,
        "spec_digest": spec.digest,
        "spec": spec.text,
        "opamps": {name: spec.candidates[name].model_dump(exclude_none=True) for name in used},
        "models": {
            name: hashlib.sha256(model.text.encode()).hexdigest()
            for name, model in imported_models(used, spec.candidates).items()
        },
        **({"circuit": circuit_record(spec.circuit)} if spec.circuit else {}),
        "warnings": list(warnings),
        "axes": {axis.path: list(axis.labels) for axis in sweep.axes},
        "versions": versions(results.engine),
        "seed": int(spec.tolerance.seed) if spec.tolerance else None,
        "started": started.isoformat(timespec="seconds"),
        "seconds": round(seconds, 3),
        "counts": {
            "cases": sweep.count,
            "draws": results.boards.draws if results.boards else 0,
            "failed": failed,
            "frequencies": len(spec.frequency.frequency_hz),
        },
    }
