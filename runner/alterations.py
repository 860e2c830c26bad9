"""Alterations: the command lines that turn the loaded circuit of one case into the next one's.

ngspice takes some microseconds to read an `alter`, and a case may need a hundred. So the lines are as short as they
can be, and what they have in common from case to case is put together once. Light to import, since every worker does.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt

from modepair.circuits.deck import Deck
from modepair.runner.engine import LINE_LENGTH

__all__ = ["Alterations"]

LONGEST_VALUE = len("-1.2345678901234567e-300")
"""Characters of a double with 17 digits, by which it reads back to the same one."""


class Alterations:
    """Writes the lines for the cases of one deck.

    Parameters
    ----------
    deck : Deck
        The deck.
    """

    def __init__(self, deck: Deck) -> None:
        self._commands = deck.commands
        # By the elements that differ: lines to fill in, each with the first and the last of its values. Most batches
        # know one such pattern or a few.
        self._patterns: dict[bytes, list[tuple[str, slice]]] = {}

    def between(self, old: npt.NDArray[np.float64], new: npt.NDArray[np.float64]) -> list[str]:
        """Write what turns one case into another.

        Parameters
        ----------
        old, new : ndarray, shape (m,)
            Element values, all finite.

        Returns
        -------
        list of str
            Lines of at most `LINE_LENGTH` characters, each with several commands; none where nothing differs.
        """
        differs = old != new
        pattern = differs.tobytes()
        if pattern not in self._patterns:
            self._patterns[pattern] = list(self._lines(differs))
        lines = self._patterns[pattern]
        if not lines:
            return []
        values = new[differs].tolist()
        words = ("%.17g " * len(values) % tuple(values)).split()
        # Every element stands in each copy of the circuit.
        copies = len(self._commands[0])
        repeated = tuple(word for word in words for _ in range(copies))
        return [line % repeated[part] for line, part in lines]

    def _lines(self, differs: npt.NDArray[np.bool_]) -> Iterator[tuple[str, slice]]:
        """Yield lines with a gap for each value, and which values go there."""
        commands = [command for index in np.flatnonzero(differs) for command in self._commands[index]]
        start, length = 0, 0
        for position, command in enumerate(commands):
            needed = len(command) + LONGEST_VALUE + 1
            if length + needed > LINE_LENGTH:
                yield _line(commands[start:position]), slice(start, position)
                start, length = position, 0
            length += needed
        if commands:
            yield _line(commands[start:]), slice(start, len(commands))


def _line(commands: Sequence[str]) -> str:
    return ";".join(f"{command}%s" for command in commands)
