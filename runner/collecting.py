"""Collecting: results come in by batches and go out in order, in chunks that do not depend on the batches."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np
import numpy.typing as npt

from modepair.runner.batches import Solved

__all__ = ["CHUNK", "in_order"]

CHUNK = 256
"""Results in a chunk; the last may be shorter."""


def in_order(solved: Iterable[Solved], count: int) -> Iterator[Solved]:
    """Put results in order.

    Parameters
    ----------
    solved : iterable of Solved
        Batches, in any order; each position from 0 to `count` - 1 once.
    count : int
        Number of results.

    Yields
    ------
    Solved
        Results 0, 1, 2, ... in chunks of `CHUNK`, as soon as each chunk is complete.
    """
    waiting: dict[int, npt.NDArray[np.complex128]] = {}
    failures: dict[int, str] = {}
    start = 0
    for batch in solved:
        waiting.update(zip(batch.position.tolist(), batch.gains, strict=True))
        failures.update(batch.failures)
        while start < count:
            positions = range(start, min(start + CHUNK, count))
            if not all(position in waiting for position in positions):
                break
            yield Solved(
                np.array(positions),
                np.stack([waiting.pop(position) for position in positions]),
                {position: failures.pop(position) for position in positions if position in failures},
            )
            start = positions.stop
    if start < count:
        raise RuntimeError(f"results from {start} to {count} are not complete")
