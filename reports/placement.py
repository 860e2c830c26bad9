"""Where labels stand beside the curves they name: as near as they can without overlaps."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt


def spread(
    wanted: Sequence[float], heights: Sequence[float], low: float, high: float
) -> npt.NDArray[np.float64]:
    """Move labels apart along one line, by the least sum of squared shifts.

    Parameters
    ----------
    wanted : sequence of float, length n
        Centre that each label would have alone, ascending.
    heights : sequence of float, length n
        Height of each label, with its share of white space.
    low, high : float
        The ends between which all labels stand.

    Returns
    -------
    ndarray of float, shape (n,)
        Centres, in the same order, at least half of both heights apart and within the ends.

    Raises
    ------
    ValueError
        Where the labels are together higher than the room, or ``wanted`` does not ascend.

    Notes
    -----
    With the heights of the labels below it taken off each centre, the gaps become an order to keep, and the
    least-squares answer is isotonic regression: pool adjacent violators (Barlow et al., 1972, from memory),
    then clip to the ends.
    """
    centre = np.asarray(wanted, dtype=np.float64)
    height = np.asarray(heights, dtype=np.float64)
    if centre.size == 0:
        return centre
    if np.any(np.diff(centre) < 0):
        raise ValueError("wanted must ascend")
    if height.sum() > (high - low) * (1 + 1e-9):
        raise ValueError(f"labels need {height.sum():g}, but there are {high - low:g} between the ends")
    offset = np.concatenate([[0.0], np.cumsum((height[:-1] + height[1:]) / 2)])
    pools: list[tuple[float, int]] = []
    for value in centre - offset:
        mean, count = float(value), 1
        while pools and pools[-1][0] > mean:
            last_mean, last_count = pools.pop()
            mean = (mean * count + last_mean * last_count) / (count + last_count)
            count += last_count
        pools.append((mean, count))
    level = np.repeat([mean for mean, _ in pools], [count for _, count in pools])
    lowest = low + height[0] / 2
    highest = high - height[-1] / 2 - offset[-1]
    placed: npt.NDArray[np.float64] = np.clip(level, lowest, max(lowest, highest)) + offset
    return placed
