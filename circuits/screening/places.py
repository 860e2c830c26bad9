"""Places in model files, and the faults and notes gathered there."""

from __future__ import annotations

from dataclasses import dataclass

from modepair.circuits.screening.limits import Limits
from modepair.sweeps.faults import Fault, ModepairError, SpecError, shown

__all__ = ["CardError", "Findings", "KnownError", "Place", "TooManyFaultsError", "TooMuchWorkError"]


@dataclass(frozen=True, slots=True, order=True)
class Place:
    """A place in a file.

    Attributes
    ----------
    file : str
        The file as the user would name it.
    line, column : int
        Counted from 1; 0 where the whole file is meant.
    """

    file: str
    line: int = 0
    column: int = 0

    def __str__(self) -> str:
        file = self.file if self.file.isprintable() else shown(self.file)
        return f"{file}:{self.line}" if self.line else file


class CardError(ModepairError, ValueError):
    """Something in a model file that is not taken.

    Parameters
    ----------
    place : Place
        Where it stands.
    message : str
        What it is, why it is refused, and the remedy.
    """

    def __init__(self, place: Place, message: str) -> None:
        super().__init__(place, message)
        self.place = place
        self.message = message

    def __str__(self) -> str:
        return f"{self.place}: {self.message}"


class KnownError(ModepairError, ValueError):
    """A follow-on of a fault that is already on the list; it is not reported again."""


class TooMuchWorkError(ModepairError, ValueError):
    """The work that a file asks for is over its limit; reading stops.

    Parameters
    ----------
    place : Place
        Where it ran out.
    """

    def __init__(self, place: Place) -> None:
        super().__init__(place)
        self.place = place

    def __str__(self) -> str:
        return (
            "subcircuits, functions and parameters take too much work to put in; write them out, or use fewer"
        )


class TooManyFaultsError(ModepairError, ValueError):
    """The list of faults is full; reading stops."""


class Findings:
    """The faults and the notes of one screening, without repetition.

    Parameters
    ----------
    limits : Limits
        How many faults are gathered.
    """

    def __init__(self, limits: Limits) -> None:
        self.limits = limits
        self.faults: dict[Fault, int] = {}
        self.notes: dict[str, Place] = {}
        self.psa_evidence: Place | None = None

    def refuse(self, refused: CardError, key: str = "") -> None:
        """Put a fault on the list.

        Parameters
        ----------
        refused : CardError
            The fault and its place.
        key : str
            The element or directive it belongs to.

        Raises
        ------
        TooManyFaultsError
            When the list is full.
        """
        place = refused.place
        self.faults.setdefault(
            Fault(place.file, place.line, place.column, key, refused.message), len(self.faults)
        )
        if len(self.faults) >= self.limits.faults:
            raise TooManyFaultsError

    def note(self, place: Place, text: str) -> None:
        """Record that something was rewritten at `place`."""
        if len(self.notes) < self.limits.cards:
            self.notes.setdefault(f"{place}: {text}", place)

    def mark(self) -> int:
        """Return the number of faults so far."""
        return len(self.faults)

    def rewind(self, mark: int) -> None:
        """Forget the faults put on the list since `mark`."""
        for fault in list(self.faults)[mark:]:
            del self.faults[fault]

    def error(self) -> SpecError:
        """Return the faults as one error: in file order, the file first read first."""
        files: dict[str, int] = {}
        for fault in self.faults:
            files.setdefault(fault.file, len(files))
        return SpecError(sorted(self.faults, key=lambda fault: (files[fault.file], fault.line, fault.column)))
