"""The curves of cases as plots take them: gains, and what names and ranks each case."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from modepair.reports.axis_labels import case_texts, varying
from modepair.reports.pairs import ModePair
from modepair.reports.palette import CurveStyle, curve_styles

__all__ = ["CaseCurves"]


@dataclass(frozen=True, eq=False)
class CaseCurves:
    """Gains of cases, with what a plot says of them.

    Parameters
    ----------
    pair : ModePair
        Gains of the shape (n, F), n at least 1.
    labels : mapping of str to sequence of str
        Axis path to one text per case, as from `modepair.reports.axis_labels.axis_columns`.
    title : str
        Text above the panels.
    case : sequence of int, optional
        Case numbers, 1 to n where not given; they name the lowest and the highest of many cases.
    total : int, optional
        Number of cases of which the pair holds a choice, where it does not hold all.
    rank_db : sequence of float, optional
        What makes a case the lowest or the highest of many, in dB; where not given, its lowest CMRR.
        A case above the numerical floor is never the highest unless all are.

    Raises
    ------
    ValueError
        Where the pair is not two-dimensional or the labels do not match it in number.
    """

    pair: ModePair
    labels: Mapping[str, Sequence[str]]
    title: str = ""
    case: Sequence[int] | None = None
    total: int | None = None
    rank_db: Sequence[float] | None = None

    def __post_init__(self) -> None:
        shape = self.pair.common_gain.shape
        if len(shape) != 2 or not shape[0]:
            raise ValueError(f"plots take gains of the shape (n, F) with n at least 1, not {shape}")
        for path, column in self.labels.items():
            if len(column) != self.count:
                raise ValueError(f"labels of {path} must be one per case, {self.count}, not {len(column)}")

    @property
    def count(self) -> int:
        """Number of cases, n."""
        return len(self.pair.common_gain)

    @property
    def numbers(self) -> Sequence[int]:
        """Case numbers, n of them."""
        return range(1, self.count + 1) if self.case is None else self.case

    @cached_property
    def texts(self) -> list[str]:
        """What names each case: its values on the axes that vary."""
        return case_texts(self.labels) or [""] * self.count

    @cached_property
    def styles(self) -> list[CurveStyle]:
        """How each case is drawn."""
        vary, _ = varying(self.labels)
        return curve_styles(list(zip(*vary.values(), strict=True)) if vary else [()] * self.count)

    @cached_property
    def extremes(self) -> tuple[int, int]:
        """Rows of the lowest and the highest case; one that touches the floor is the highest only if all do."""
        rank = np.asarray(
            self.pair.cmrr_db.min(axis=1) if self.rank_db is None else self.rank_db, dtype=np.float64
        )
        at_floor = self.pair.above_floor.any(axis=1)
        known = np.where(at_floor, -np.inf, rank) if not at_floor.all() else rank
        return int(np.argmin(rank)), int(np.argmax(known))
