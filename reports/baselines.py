"""Baselines: curves accepted earlier, in a text file that reads well in a review, and what has changed since.

A baseline holds CMRR in dB, rounded, for each case and frequency, and beside it what the curves came from:
the spec's values, the op-amps' data, the versions. Comments and the order of axes are not in it, so changing
them changes nothing.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path

import numpy as np

from modepair.reports.pairs import BoolArray, FloatArray
from modepair.sweeps import Fault, ModepairError, Sweep, render
from modepair.sweeps.cases import base_settings
from modepair.sweeps.faults import shown

__all__ = [
    "ALLOW_DB", "Baseline", "BaselineCase", "BaselineError", "baseline_path", "case_settings",
    "read_baseline", "spec_settings",
]  # fmt: skip

ALLOW_DB = 0.1
"""Smallest fall of CMRR that counts where none is given, in dB."""

ROUNDED_TO = 2
"""Decimals of the dB values of a baseline."""

_IN_A_LINE = 10
_ABSENT = "absent"


class BaselineError(ModepairError, ValueError):
    """A baseline that cannot be read.

    Parameters
    ----------
    fault : Fault
        What is wrong, and where.
    """

    def __init__(self, fault: Fault) -> None:
        super().__init__(fault)
        self.fault = fault

    def __str__(self) -> str:
        return str(self.fault)


@dataclass(frozen=True, eq=False)
class BaselineCase:
    """The accepted curve of a case.

    Parameters
    ----------
    axes : mapping of str to str
        Value of each axis, as in `case_settings`.
    cmrr_db : ndarray, shape (F,)
        CMRR in dB, rounded.
    bound : ndarray of bool, shape (F,)
        Where it lies above the numerical floor.
    """

    axes: Mapping[str, str]
    cmrr_db: FloatArray
    bound: BoolArray

    @property
    def name(self) -> str:
        """The case's axes as text: ``stage.opamp zero-drift, source.imbalance 10``."""
        return ", ".join(f"{path} {value}" for path, value in self.axes.items()) or "the only case"


@dataclass(frozen=True, eq=False)
class Baseline:
    """Accepted curves, and what they came from.

    Parameters
    ----------
    origin : mapping of str to str
        ``spec``, ``digest``, and a version for each of the programs.
    allow_db : float
        Smallest fall that counts, in dB.
    settings : mapping of str to str
        Values of the spec, as in `spec_settings`.
    frequency_hz : ndarray, shape (F,)
        Solved frequencies, Hz.
    cases : sequence of BaselineCase
        The curves.
    """

    origin: Mapping[str, str]
    allow_db: float
    settings: Mapping[str, str]
    frequency_hz: FloatArray
    cases: Sequence[BaselineCase] = field(default_factory=tuple)

    def changes(self, now: Baseline) -> list[str]:
        """Tell what else differs now from what the baseline came from.

        Parameters
        ----------
        now : Baseline
            The present run; its cases are not looked at.

        Returns
        -------
        list of str
            One text per difference: keys of the spec, data of the op-amps, versions.
        """
        found = [
            _change(path, self.settings.get(path), now.settings.get(path))
            for path in dict.fromkeys([*self.settings, *now.settings])
            if self.settings.get(path) != now.settings.get(path)
        ]
        versions = {name: None for origin in (self.origin, now.origin) for name in origin}
        return found + [
            _change(name, self.origin.get(name), now.origin.get(name))
            for name in versions
            if name not in ("spec", "digest") and self.origin.get(name) != now.origin.get(name)
        ]

    def key(self, axes: Mapping[str, str], paths: Iterable[str]) -> tuple[str, ...]:
        """Identify a case by some paths: what its axes say, else what the spec says.

        Parameters
        ----------
        axes : mapping of str to str
            Values of the case's axes.
        paths : iterable of str
            The paths.

        Returns
        -------
        tuple of str
            One value for each path.
        """
        return tuple(axes.get(path, self.settings.get(path, _ABSENT)) for path in paths)

    def text(self) -> str:
        """Write the baseline's file."""
        spec = self.origin.get("spec", "")
        lines = [
            f"# CMRR accepted for {spec}, in dB. Compared and replaced by:",
            f"#   modepair check {spec}             fails where CMRR has fallen by more than 'allow'",
            f"#   modepair check {spec} --accept    accepts what it is now",
            "# A line of a case begins with its first frequency in Hz. '>' marks what lies above the",
            "# numerical floor of the solve, where nothing counts as a change.",
            "",
            "[baseline]",
            *(f"{name} = {text}" for name, text in self.origin.items()),
            f"allow = {self.allow_db:g} dB",
            "",
            "[values]",
            *(f"{path} = {text}" for path, text in self.settings.items()),
            "",
            "[frequencies]",
            *_lines(self.frequency_hz, [f"{frequency!r}" for frequency in self.frequency_hz.tolist()]),
        ]
        for case in self.cases:
            axes = "; ".join(f"{path} = {value}" for path, value in case.axes.items())
            levels = [
                f"{'>' if bound else ''}{level:.{ROUNDED_TO}f}"
                for level, bound in zip(case.cmrr_db.tolist(), case.bound.tolist(), strict=True)
            ]
            lines += ["", f"[case{' ' if axes else ''}{axes}]", *_lines(self.frequency_hz, levels)]
        return "\n".join(lines) + "\n"


def _lines(frequency_hz: FloatArray, texts: Sequence[str]) -> list[str]:
    starts = range(0, len(texts), _IN_A_LINE)
    heads = [f"{frequency_hz[start]:.6g}" for start in starts]
    width = max(map(len, texts), default=0) if len(set(map(len, texts))) < 8 else 0
    return [
        f"{head:>10}: {' '.join(text.rjust(width) for text in texts[start : start + _IN_A_LINE])}"
        for head, start in zip(heads, starts, strict=True)
    ]


def _change(path: str, before: str | None, now: str | None) -> str:
    if before is None:
        return f"{path}: new, {now}"
    return f"{path}: {before} before, {'not given' if now is None else now} now"


def baseline_path(spec: str | Path) -> Path:
    """Return where a spec's baseline stands: beside ``silo.yaml``, ``silo.baseline.txt``."""
    return Path(spec).with_suffix(".baseline.txt")


@lru_cache(maxsize=10_000)
def _canonical(value: float | str) -> str:
    return value if isinstance(value, str) else render(value, digits=12).replace(" ", "")


def spec_settings(sweep: Sweep) -> dict[str, str]:
    """List the values of a spec on which its curves depend, in the order of their names.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec.

    Returns
    -------
    dict of str to str
        Dotted path to SI value or name; axes as ``vary.`` and their path, their values sorted; only
        op-amps in use.
    """
    spec = sweep.spec
    varied = {axis.path for axis in sweep.axes}
    used = {name for block in sweep.blocks for name in block.opamps.values()}
    found: dict[str, str] = {"stage.topology": spec.stage.topology}
    if spec.stage.opamp:
        found["stage.opamp"] = spec.stage.opamp
    found |= {f"stage.opamps.{instance}": name for instance, name in (spec.stage.opamps or {}).items()}
    for path, value in base_settings(spec).items():
        if path.startswith("tolerance."):
            continue
        if path.startswith("opamps.") and path.removeprefix("opamps.").rpartition(".")[0] not in used:
            continue
        found[path] = _canonical(value)
    if spec.circuit:
        circuit = spec.circuit
        found["stage.circuit"] = f"{circuit.file} {circuit.subcircuit} sha256 {circuit.digest}"
        found["stage.ports"] = ", ".join(spec.stage.ports or ())
        if spec.stage.supplies:
            found["stage.supplies"] = ", ".join(map(_canonical, spec.stage.supplies))
        for name, nominal in circuit.values:
            found.setdefault(f"stage.parts.{name}", _canonical(nominal))
    found = {path: text for path, text in found.items() if path not in varied}
    plan = spec.frequency
    found |= {
        "frequency.start": _canonical(plan.start),
        "frequency.stop": _canonical(plan.stop),
        "frequency.points_per_decade": _canonical(plan.points_per_decade),
    }
    for axis in sweep.axes:
        values: list[float | str] = sorted(axis.values)
        found[f"vary.{axis.path}"] = ", ".join(_canonical(value) for value in values)
    return dict(sorted(found.items()))


def case_settings(sweep: Sweep) -> list[dict[str, str]]:
    """Give the axes' values of every case, in the order of their paths: what tells a case apart.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec.

    Returns
    -------
    list of dict
        For each case, path to SI value or name.
    """
    columns = {axis.path: sweep.frame()[axis.path].tolist() for axis in sweep.axes}
    paths = sorted(columns)
    return [{path: _canonical(columns[path][row]) for path in paths} for row in range(sweep.count)]


def read_baseline(path: str | Path) -> Baseline:
    """Read a baseline.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    Baseline
        Its content.

    Raises
    ------
    BaselineError
        Where it is not there or not as `Baseline.text` writes it, with the line.
    """
    file = str(path)
    try:
        text = Path(path).read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "it is not UTF-8"
        raise BaselineError(
            Fault(file, 0, 0, "", f"the baseline cannot be read: {reason.lower()}")
        ) from error
    return _Reader(file, text).baseline()


class _Reader:
    """Reads a baseline line by line."""

    def __init__(self, file: str, text: str) -> None:
        self.file = file
        self.line = 0
        self.text = text
        self.named: dict[str, dict[str, str]] = {"baseline": {}, "values": {}}
        self.numbers: list[tuple[str, int, list[str]]] = []

    def fail(self, message: str) -> BaselineError:
        return BaselineError(Fault(self.file, self.line, 1, "", f"{message}; accept the curves anew"))

    def baseline(self) -> Baseline:
        section = ""
        for number, written in enumerate(self.text.splitlines(), 1):
            self.line = number
            line = written.strip()
            if not line or line.startswith("#"):
                continue
            if line.startswith("["):
                if not line.endswith("]"):
                    raise self.fail(f"{shown(line)} has no closing bracket")
                section = line[1:-1].strip()
                if section not in self.named:
                    self._open(section)
            elif section in self.named:
                name, equals, value = line.partition(" = ")
                if not equals:
                    raise self.fail(f"{shown(line)} is not a name and a value, such as allow = 0.1 dB")
                self.named[section][name.strip()] = value.strip()
            elif self.numbers:
                self.numbers[-1][2].extend(line.partition(":")[2].split())
            else:
                raise self.fail(f"{shown(line)} stands before any section, such as [baseline]")
        return self._whole()

    def _open(self, section: str) -> None:
        if section != "frequencies" and section.split(" ")[0] != "case":
            raise self.fail(f"there is no section {shown(section)}")
        self.numbers.append((section, self.line, []))

    def _whole(self) -> Baseline:
        if not self.numbers or self.numbers[0][0] != "frequencies":
            raise self.fail("there is no section [frequencies] before the cases")
        _, self.line, texts = self.numbers[0]
        frequency_hz = np.array([self._number(text) for text in texts])
        if not frequency_hz.size or np.any(np.diff(frequency_hz) <= 0):
            raise self.fail("the frequencies do not ascend")
        cases = []
        for section, number, texts in self.numbers[1:]:
            self.line = number
            if len(texts) != frequency_hz.size:
                raise self.fail(
                    f"the case has {len(texts)} values; there are {frequency_hz.size} frequencies"
                )
            pairs = [
                pair.partition(" = ") for pair in section.removeprefix("case").strip().split("; ") if pair
            ]
            cases.append(
                BaselineCase(
                    {path.strip(): value.strip() for path, _, value in pairs},
                    np.array([self._number(text.removeprefix(">")) for text in texts]),
                    np.array([text.startswith(">") for text in texts], dtype=np.bool_),
                )
            )
        origin = dict(self.named["baseline"])
        allow = re.fullmatch(r"([0-9.]+) dB", origin.pop("allow", ""))
        if allow is None:
            raise self.fail("the section [baseline] has no allow, such as 0.1 dB")
        return Baseline(origin, self._number(allow[1]), self.named["values"], frequency_hz, tuple(cases))

    def _number(self, text: str) -> float:
        try:
            value = float(text)
        except ValueError:
            value = float("nan")
        if not np.isfinite(value):
            raise self.fail(f"{shown(text)} is not a number")
        return value
