"""The op-amp candidates that come with modepair."""

from __future__ import annotations

from functools import cache
from pathlib import Path

from modepair.sweeps import Opamp, read_candidates

__all__ = ["candidates"]

CANDIDATES_FILE = Path(__file__).with_name("candidates.yaml")


@cache
def _read() -> dict[str, Opamp]:
    return read_candidates(CANDIDATES_FILE)


def candidates() -> dict[str, Opamp]:
    """Return the built-in op-amp candidates.

    Returns
    -------
    dict of str to Opamp
        By name: invented parts that stand for the classes of real ones.
    """
    return dict(_read())
