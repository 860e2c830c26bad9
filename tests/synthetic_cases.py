"""Made-up cases for the tests of reports: one-pole gains and common-mode errors that grow with frequency."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from modepair.reports import ModePair, figures

SPOTS_HZ = (50.0, 60.0, 1e3, 1e4)
BAND_HZ = (1.0, 1e6)
OPAMPS = ("quiet-bipolar", "low-bias-jfet", "zero-drift", "fast-cmos")


@dataclass(frozen=True)
class Axis:
    path: str
    values: tuple[float, ...] | tuple[str, ...]
    labels: tuple[str, ...]


@dataclass(frozen=True)
class Made:
    axes: tuple[Axis, ...]
    cases: pd.DataFrame
    pair: ModePair


def frequencies_hz() -> np.ndarray:
    return np.unique(np.concatenate([np.geomspace(1.0, 1e6, 121), SPOTS_HZ]))


def one_pole_cases(opamps: int, imbalances: int, perfect: tuple[int, ...] = ()) -> Made:
    """Cases of two axes; those numbered in ``perfect`` have no common-mode gain at all."""
    frequency_hz = frequencies_hz()
    resistances = tuple(10.0 * 2.0**k for k in range(imbalances))
    axes = (
        Axis("stage.opamp", OPAMPS[:opamps], OPAMPS[:opamps]),
        Axis("source.imbalance", resistances, tuple(f"{r:g}" for r in resistances)),
    )
    rows, common, differential = [], [], []
    for i, name in enumerate(OPAMPS[:opamps]):
        for resistance in resistances:
            number = len(rows) + 1
            gain = 100.0 / (1 + 1j * frequency_hz / (1e4 * 3**i))
            rho = (
                10.0 ** (-6 + i / 2) * (1 + 1j * frequency_hz / (30.0 * 7**i))
                + 2j * np.pi * frequency_hz * resistance * 1e-10
            )
            rows.append({"case": number, "stage.opamp": name, "source.imbalance": resistance})
            common.append(rho * gain * (number not in perfect))
            differential.append(gain)
    pair = ModePair(frequency_hz, np.array(common), np.array(differential))
    cases = pd.concat([pd.DataFrame(rows), figures(pair, SPOTS_HZ)], axis=1)
    cases["state"] = "done"
    return Made(axes, cases, pair)


def fail(made: Made, reasons: dict[int, str]) -> pd.DataFrame:
    """The cases with some failed, as cases.csv holds them: no figures, a reason."""
    cases = made.cases.copy()
    known = ["case", "state", *(axis.path for axis in made.axes)]
    for number, reason in reasons.items():
        row = cases.index[cases["case"] == number][0]
        for column in cases.columns.difference(known):
            cases.loc[row, column] = "" if column == "above_floor" else np.nan
        cases.loc[row, "state"] = f"failed: {reason}"
    return cases
