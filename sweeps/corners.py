"""Corners: a level over frequency, given as points with straight lines between them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

from modepair.sweeps.faults import RefusedError, SeveralRefusedError, form_of, shown
from modepair.sweeps.quantities import FREQUENCY, Kind
from modepair.sweeps.schema import SPOT_MATCH

MOST_CORNERS = 1000
"""Corners that a list may have."""

Corners = tuple[tuple[float, float], ...]
"""Pairs of frequency in Hz, ascending, and level; at least one."""

T = TypeVar("T")


@dataclass(frozen=True)
class ReadsCorners(Generic[T]):
    """What reads a list of corners.

    Parameters
    ----------
    kind
        What the level of a corner is.
    example
        A list of corners as a user would write it.
    make
        Makes the value from the corners, their levels as `kind` gives them.
    """

    kind: Kind
    example: str
    make: Callable[[Corners], T]

    @property
    def takes(self) -> str:
        """What is taken, with an example."""
        return f"a list of corners, such as {self.example}"

    @property
    def _one(self) -> str:
        return f"a corner has a frequency and {self.kind.noun}, such as {self.example[1:].split(']')[0]}]"

    def parse(self, written: object) -> T:
        """Return the value; raise `RefusedError`, or `SeveralRefusedError` for all corners refused."""
        if not isinstance(written, list | tuple):
            raise RefusedError(form_of(written), self.takes)
        if not written:
            raise RefusedError("the list is empty", self.takes)
        if len(written) > MOST_CORNERS:
            raise RefusedError(f"there are {len(written)} corners; at most {MOST_CORNERS} are taken")
        corners: list[tuple[float, float]] = []
        refusals: list[tuple[tuple[str | int, ...], RefusedError]] = []
        for index, item in enumerate(written):
            try:
                corners.append(self._corner(item, corners))
            except RefusedError as refusal:
                refusals.append(((index,), RefusedError(refusal.what)))
            except SeveralRefusedError as several:
                refusals += [((index, *place), refusal) for place, refusal in several.refusals]
        if refusals:
            raise SeveralRefusedError(refusals)
        return self.make(tuple(corners))

    def _corner(self, item: object, before: list[tuple[float, float]]) -> tuple[float, float]:
        if not isinstance(item, list | tuple):
            raise RefusedError(f"{form_of(item)}; {self._one}")
        if len(item) != 2:
            count = f"{len(item)} value{'' if len(item) == 1 else 's'}"
            raise RefusedError(f"{count} in a corner; {self._one}")
        values: list[float] = []
        refusals: list[tuple[tuple[str | int, ...], RefusedError]] = []
        for place, (kind, name) in enumerate(((FREQUENCY, "the frequency"), (self.kind, "the level"))):
            try:
                values.append(kind.parse(item[place]))
            except RefusedError as refusal:
                refusals.append(((place,), RefusedError(refusal.message(name))))
        if refusals:
            raise SeveralRefusedError(refusals)
        if before and not values[0] > before[-1][0] * (1 + SPOT_MATCH):
            message = f"{shown(str(item[0]))} is not above the corner before it; corners ascend in frequency"
            raise SeveralRefusedError([((0,), RefusedError(message))])
        return values[0], values[1]

    def json_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the list."""
        return {
            "type": "array",
            "minItems": 1,
            "maxItems": MOST_CORNERS,
            "description": self.takes,
            "items": {
                "type": "array",
                "prefixItems": [FREQUENCY.json_schema(), self.kind.json_schema()],
                "minItems": 2,
                "maxItems": 2,
            },
        }
