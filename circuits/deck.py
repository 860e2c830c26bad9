"""The deck: what the engine loads once for many cases. Light to import, since every worker does."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Deck"]


@dataclass(frozen=True)
class Deck:
    """What the engine loads once: a netlist, and how to alter its elements.

    Attributes
    ----------
    text : str
        The netlist, without analyses.
    commands : tuple of tuple of str
        For each element, in the order of its values, the start of the engine command that sets it in
        each copy.
    values : ndarray, shape (m,)
        The element values that the text holds.
    """

    text: str
    commands: tuple[tuple[str, ...], ...]
    values: npt.NDArray[np.float64]
