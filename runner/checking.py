"""Checking a sweep: run it, judge it against its limits and its baseline, or accept it as the new baseline."""

from __future__ import annotations

import os
import tempfile
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from modepair.runner.errors import AcceptError, NothingToJudgeError
from modepair.runner.specs import read_spec
from modepair.runner.sweep import Run, run
from modepair.sweeps import Spec

if TYPE_CHECKING:
    from modepair.reports.baselines import Baseline
    from modepair.runner.results import Progress

__all__ = ["Check", "check", "find_baseline"]


@dataclass(frozen=True)
class Check:
    """What a check came to.

    Attributes
    ----------
    run : Run
        The run, with its verdicts.
    baseline : Path or None
        The baseline that was compared with, or written.
    accepted : bool
        Whether it was written.
    """

    run: Run
    baseline: Path | None
    accepted: bool

    @property
    def passed(self) -> bool:
        """Whether no verdict is a failure, and no case failed in simulation."""
        return not self.run.failed and not self.run.verdicts["verdict"].isin(["fail", "undecided"]).any()


def find_baseline(spec: Spec, named: str | Path | None = None) -> Path | None:
    """Find a spec's baseline.

    Parameters
    ----------
    spec : Spec
        The spec.
    named : str or Path, optional
        The baseline's file; where absent, the one beside the spec if it is there.

    Returns
    -------
    Path or None
        The file.
    """
    from modepair.reports.baselines import baseline_path

    if named is not None:
        return Path(named)
    beside = baseline_path(spec.path)
    return beside if beside.exists() else None


def check(
    spec: Spec | str | Path,
    output: str | Path | None = None,
    *,
    baseline: str | Path | None = None,
    allow_db: float | None = None,
    accept: bool = False,
    jobs: int | None = None,
    progress: Progress | None = None,
) -> Check:
    """Run a sweep and judge it.

    Parameters
    ----------
    spec : Spec, str or Path
        The spec, or its file.
    output : str or Path, optional
        The run folder, as for `run`.
    baseline : str or Path, optional
        The baseline's file; where absent, the one beside the spec, `<name>.baseline.txt`, if it is there.
    allow_db : float, optional
        Smallest fall of CMRR that counts, in dB; where absent, what the baseline says.
    accept : bool
        Whether to write the curves as the new baseline, in place of comparing with the old one.
    jobs, progress
        As for `run`.

    Returns
    -------
    Check
        With a verdict for each case and judged quantity.

    Raises
    ------
    SpecError, EngineMissingError, OutputError
        As `run`.
    BaselineError
        If the baseline cannot be read.
    NothingToJudgeError
        If the spec has no limits and there is no baseline.
    AcceptError
        If a case failed, so that its curve cannot be accepted.
    """
    from modepair.reports.baselines import ALLOW_DB, baseline_path, read_baseline

    if not isinstance(spec, Spec):
        spec = read_spec(spec)
    path = find_baseline(spec, baseline)
    if accept:
        path = path or baseline_path(spec.path)
        if allow_db is None:
            allow_db = read_baseline(path).allow_db if path.exists() else ALLOW_DB
        result = run(spec, output, jobs=jobs, progress=progress)
        _write(path, _accepted(result, path, allow_db))
        return Check(result, path, accepted=True)
    if path is None and spec.limits is None:
        raise NothingToJudgeError(spec.path, baseline_path(spec.path).name)
    before = read_baseline(path) if path else None
    if before and allow_db is not None:
        before = replace(before, allow_db=allow_db)
    return Check(run(spec, output, jobs=jobs, progress=progress, baseline=before), path, accepted=False)


def _accepted(result: Run, path: Path, allow_db: float) -> Baseline:
    import json

    from modepair.runner.judging import accepted
    from modepair.sweeps import expand

    if result.failed:
        first = result.cases[result.cases["state"] != "done"].iloc[0]
        raise AcceptError(path, result.failed, f"case {first['case']} {first['state']}")
    engine = json.loads((result.folder / "run.json").read_text(encoding="utf-8"))["versions"]["ngspice"]
    return accepted(expand(result.spec), result.folder / "curves.parquet", engine, allow_db)


def _write(path: Path, baseline: Baseline) -> None:
    """Write a baseline whole or not at all."""
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write(baseline.text())
        os.chmod(name, 0o644)
        os.replace(name, path)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
