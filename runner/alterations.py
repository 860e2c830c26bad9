"""Alterations: the command lines that turn the loaded circuit of one case into the next one's.

ngspice takes some microseconds to read an `alter`, and a case may need a hundred. So the lines are as short as they
can be, and what they have in common from case to case is put together once. Light to import, since every worker does.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from modepair.circuits.deck import Deck
from modepair.runner.engine import LINE_LENGTH

__all__ = ["Alterations"]

LONGEST_VALUE = len("-1.2345678901234567e-300")
"""Characters of a double with 17 digits, by which it reads back to the same one."""


@dataclass(frozen=True)
class _Pattern:
    """Which elements differ: which of their values each command takes, and lines to fill in with some of these."""

    given: tuple[int, ...]
    lines: tuple[tuple[str, slice], ...]


class Alterations:
    """Writes the lines for the cases of one deck.

    Parameters
    ----------
    deck : Deck
        The deck.
    """

    def __init__(self, deck: Deck) -> None:
        self._commands = deck.commands
        # By the elements that differ. Most batches know one such pattern or a few.
        self._patterns: dict[bytes, _Pattern] = {}

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
        key = differs.tobytes()
        pattern = self._patterns.get(key) or self._patterns.setdefault(key, self._pattern(differs))
        values = new[differs].tolist()
        words = ("%.17g " * len(values) % tuple(values)).split()
        given = tuple([words[index] for index in pattern.given])
        return [line % given[part] for line, part in pattern.lines]

    def _pattern(self, differs: npt.NDArray[np.bool_]) -> _Pattern:
        several = [self._commands[index] for index in np.flatnonzero(differs)]
        commands = [command for commands in several for command in commands]
        given = tuple(index for index, commands in enumerate(several) for _ in commands)
        lines: list[tuple[str, slice]] = []
        start, length = 0, 0
        for position, command in enumerate(commands):
            needed = len(command) + LONGEST_VALUE + 1
            if length + needed > LINE_LENGTH:
                lines.append((_line(commands[start:position]), slice(start, position)))
                start, length = position, 0
            length += needed
        if commands:
            lines.append((_line(commands[start:]), slice(start, len(commands))))
        return _Pattern(given, tuple(lines))


def _line(commands: Sequence[str]) -> str:
    return ";".join(f"{command}%s" for command in commands)
