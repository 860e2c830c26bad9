"""Sweep specs as tests of pytest: one item per case and judged quantity.

A YAML file with a top key `stage` is a file of tests where it has limits, or a baseline beside it. It is looked at
only below paths that were given to pytest (or are its `testpaths`), so that a plain `pytest` elsewhere never opens
one. The sweep of a file runs once, when its first item does, whatever the number of xdist workers.
"""

from __future__ import annotations

import re
import shutil
import tempfile
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

if TYPE_CHECKING:
    from modepair.runner.sweep_results import SweepResults
    from modepair.sweeps import Spec, Sweep

__all__ = ["SweepFile", "SweepItem", "VerdictError"]

_SUFFIXES = (".yaml", ".yml")
_TOP_KEY = re.compile(rb"^[\"']?stage[\"']?[ ]*:", re.MULTILINE)
_PEEK_BYTES = 1_000_000

_EXPLICIT = pytest.StashKey[bool]()
_RUNS = pytest.StashKey[Path]()


class VerdictError(Exception):
    """A case that does not pass; its text is the whole report."""


def pytest_configure(config: pytest.Config) -> None:
    """Find out whether paths were given, and where the runs of this session are kept."""
    given = getattr(config, "workerinput", {})
    source = getattr(config, "args_source", None)
    config.stash[_EXPLICIT] = given.get(
        "modepair_explicit", source is not pytest.Config.ArgsSource.INVOCATION_DIR
    )
    if "modepair_runs" in given:
        config.stash[_RUNS] = Path(given["modepair_runs"])


@pytest.hookimpl(optionalhook=True)
def pytest_configure_node(node: Any) -> None:
    """Tell a worker of xdist what only the controlling process knows."""
    node.workerinput["modepair_explicit"] = node.config.stash[_EXPLICIT]
    node.workerinput["modepair_runs"] = str(_runs_of(node.config))


def pytest_unconfigure(config: pytest.Config) -> None:
    """Remove the runs of this session."""
    if _RUNS in config.stash and not hasattr(config, "workerinput"):
        shutil.rmtree(config.stash[_RUNS], ignore_errors=True)


def _runs_of(config: pytest.Config) -> Path:
    if _RUNS not in config.stash:
        config.stash[_RUNS] = Path(tempfile.mkdtemp(prefix="modepair-checks-"))
    return config.stash[_RUNS]


def pytest_collect_file(file_path: Path, parent: pytest.Collector) -> pytest.Collector | None:
    """Take YAML files that are sweep specs."""
    if file_path.suffix not in _SUFFIXES or not parent.config.stash.get(_EXPLICIT, False):
        return None
    try:
        with file_path.open("rb") as stream:
            is_spec = _TOP_KEY.search(stream.read(_PEEK_BYTES)) is not None
    except OSError:
        return None
    return SweepFile.from_parent(parent, path=file_path) if is_spec else None


class SweepFile(pytest.File):
    """A sweep spec as a file of tests."""

    def collect(self) -> Iterable[pytest.Item]:
        """Yield an item for each case and judged quantity, and for each case that the baseline has alone.

        Raises
        ------
        pytest.Collector.CollectError
            Where the spec or its baseline cannot be read, with file and line.
        """
        from modepair.reports.baselines import case_settings, read_baseline
        from modepair.reports.comparing_baselines import match_cases
        from modepair.reports.judgement import judged_quantities
        from modepair.runner.checking import find_baseline
        from modepair.runner.judging import accepted
        from modepair.runner.specs import read_spec
        from modepair.sweeps import ModepairError, expand

        try:
            spec = read_spec(self._shown_path())
            sweep = expand(spec)
            path = find_baseline(spec)
            baseline = read_baseline(path) if path else None
        except ModepairError as error:
            raise self.CollectError(str(error)) from None
        quantities = [*judged_quantities(spec.limits), *(["baseline"] if baseline else [])]
        for case in range(1, sweep.count + 1):
            for quantity in quantities:
                name = _case_name(sweep, case)
                yield SweepItem.from_parent(
                    self,
                    name=f"{quantity}[{name}]" if name else quantity,
                    case=case,
                    quantity=quantity,
                    line=_line_of(spec, quantity),
                )
        if baseline:
            for missing in match_cases(baseline, accepted(sweep, None, ""), case_settings(sweep)).missing:
                yield SweepItem.from_parent(
                    self, name=f"baseline[missing: {missing.name}]", case=0, quantity="baseline", line=1,
                    missing=missing.name,
                )  # fmt: skip

    def _shown_path(self) -> Path:
        """The path as a user would write it from where pytest was started."""
        start = self.config.invocation_params.dir
        return self.path.relative_to(start) if self.path.is_relative_to(start) else self.path

    @property
    def results(self) -> SweepResults:
        """What the sweep came to; runs it if no one has yet."""
        from modepair.runner.sweep_results import sweep_results

        return sweep_results(self.path, _runs_of(self.config))


def _case_name(sweep: Sweep, case: int) -> str:
    from modepair.reports.axis_labels import short_names

    names = short_names([axis.path for axis in sweep.axes])
    labels = sweep.axis_labels(case)
    return ", ".join(f"{names[axis.path]}={labels[axis.path]}" for axis in sweep.axes if len(axis.values) > 1)


def _line_of(spec: Spec, quantity: str) -> int:
    return int(spec.where(f"limits.{quantity}" if quantity != "baseline" else "stage").split(":")[-2])


class SweepItem(pytest.Item):
    """One judged quantity of one case.

    Parameters
    ----------
    case : int
        The case's number; 0 for one that only the baseline has.
    quantity : str
        What is judged.
    line : int
        Line of the limit in the spec.
    missing : str
        What tells a case apart that only the baseline has.
    **arguments
        As for `pytest.Item`.
    """

    def __init__(self, *, case: int, quantity: str, line: int, missing: str = "", **arguments: Any) -> None:
        super().__init__(**arguments)
        self.case = case
        self.quantity = quantity
        self.line = line
        self.missing = missing

    def runtest(self) -> None:
        """Look up the verdict; run the sweep if this is its first item."""
        file = self.parent
        if not isinstance(file, SweepFile):
            raise TypeError(f"parent must be a SweepFile, not {type(file).__name__}")
        results = file.results
        if results.error:
            raise VerdictError(f"{file._shown_path()}: the sweep did not run: {results.error}")
        verdict = results.verdict(self.case, self.quantity, self.missing)
        self.user_properties += list(_properties(verdict))
        if verdict["verdict"] == "new":
            pytest.skip(str(verdict["note"]))
        if verdict["verdict"] != "pass":
            raise VerdictError(results.report(verdict, str(file._shown_path())))

    def repr_failure(self, excinfo: pytest.ExceptionInfo[BaseException], style: Any = None) -> Any:
        """Show a verdict as it is, and anything else as pytest does."""
        if isinstance(excinfo.value, VerdictError):
            return str(excinfo.value)
        return super().repr_failure(excinfo, style)

    def reportinfo(self) -> tuple[Path, int, str]:
        """Name the spec and the line of the limit."""
        return self.path, self.line - 1, self.name


def _properties(verdict: dict[str, Any]) -> Iterator[tuple[str, object]]:
    """Yield what a JUnit file records of a verdict."""
    yield "verdict", verdict["verdict"]
    for name in ("margin_db", "margin_percent", "at_hz", "value", "limit"):
        if verdict[name] == verdict[name]:
            yield name, float(verdict[name])
