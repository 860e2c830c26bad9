"""One board again: a draw by its number, as a sweep of its own."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pandas as pd

from modepair.runner.errors import RequestError
from modepair.runner.plans import drawn_case
from modepair.sweeps import Block, Streams, Sweep, boards

__all__ = ["board_sweep", "board_table", "signed_parts"]


def board_sweep(sweep: Sweep, draw: int) -> Sweep:
    """Put one draw in the place of the nominal parts of every case.

    Parameters
    ----------
    sweep : Sweep
        The expanded spec, with a tolerance section.
    draw : int
        Number of the draw, from 1.

    Returns
    -------
    Sweep
        The same cases with that draw's part values.

    Raises
    ------
    RequestError
        If the spec has no tolerances or no such draw.
    """
    tolerance = sweep.spec.tolerance
    if tolerance is None:
        raise RequestError("the spec has no tolerance section, so it has no draws")
    if not 1 <= draw <= tolerance.draws:
        raise RequestError(f"draw must be 1 to {tolerance.draws:.0f}, not {draw}")
    streams = Streams(tolerance)
    blocks = []
    for block in sweep.blocks:
        rows = []
        for case in block.case.tolist():
            drawn = drawn_case(sweep, case)
            rows.append(boards(drawn.parts, drawn.causes, streams.errors(drawn.causes, draw - 1, draw)))
        parts = {
            name: np.array([float(np.ravel(row[name])[0]) if name in row else 0.0 for row in rows])
            for name in dict.fromkeys(name for row in rows for name in row)
        }
        blocks.append(Block(block.topology, block.opamps, block.case, dict(parts), block.tolerances))
    return replace(sweep, blocks=tuple(blocks))


def board_table(sweep: Sweep, board: Sweep) -> pd.DataFrame:
    """List the part values of a board beside the nominal ones.

    Parameters
    ----------
    sweep, board : Sweep
        The nominal sweep, and what `board_sweep` made of it.

    Returns
    -------
    DataFrame
        A row per case and part that differs: `case`, `part`, `nominal`, `board` (SI units; a CMRR is the signed
        ratio).
    """
    rows = []
    for case in range(1, sweep.count + 1):
        nominal, drawn = (signed_parts(drawn_case(of, case).parts) for of in (sweep, board))
        for name, value in drawn.items():
            if value != nominal.get(name):
                rows.append({"case": case, "part": name, "nominal": nominal.get(name), "board": value})
    return pd.DataFrame(rows, columns=["case", "part", "nominal", "board"])


def signed_parts(parts: Mapping[str, float]) -> dict[str, float]:
    """Give part values with each CMRR as the signed ratio, and without the signs beside it."""
    return {
        name: value * parts.get(f"{name}_sign", 1.0)
        for name, value in parts.items()
        if not name.endswith(".cmrr_sign")
    }
