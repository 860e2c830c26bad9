"""Yield: the share of boards that pass, and how well so many draws can know it."""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = ["CONFIDENCE", "Yield", "draws_needed"]

CONFIDENCE = 0.95
"""Confidence of the two-sided interval."""


@dataclass(frozen=True)
class Yield:
    """Boards that pass among boards drawn.

    Parameters
    ----------
    passed : int
        Boards that pass.
    drawn : int
        Boards drawn; at least 1.

    Raises
    ------
    ValueError
        Where the counts make no sense.
    """

    passed: int
    drawn: int

    def __post_init__(self) -> None:
        if not 0 <= self.passed <= self.drawn or self.drawn < 1:
            raise ValueError(f"passed must be from 0 to drawn, {self.drawn}, not {self.passed}")

    @property
    def value(self) -> float:
        """Share that passes."""
        return self.passed / self.drawn

    @property
    def interval(self) -> tuple[float, float]:
        """Exact binomial interval of the share in all boards (Clopper and Pearson, Biometrika 26, 1934)."""
        from scipy.stats import binomtest

        low, high = binomtest(self.passed, self.drawn).proportion_ci(CONFIDENCE, method="exact")
        return float(low), float(high)


def draws_needed(share: float) -> int:
    """Draws that a claim needs: so many, all passing, put the interval's lower end at the share.

    Parameters
    ----------
    share : float
        Claimed yield, above 0 and below 1.

    Returns
    -------
    int
        From the lower end of the exact interval when all n draws pass, ((1 - confidence)/2)^(1/n).

    Raises
    ------
    ValueError
        Where the share is not between 0 and 1.
    """
    if not 0 < share < 1:
        raise ValueError(f"share must be above 0 and below 1, not {share:g}")
    return math.ceil(math.log((1 - CONFIDENCE) / 2) / math.log(share))
