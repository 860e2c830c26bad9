"""Draws: boards that differ within their tolerances, each part from a random stream of its own.

A stream is keyed by the seed and the part's name alone. So another part, another axis or another number of
processes changes no draw of a part; and all cases meet the same boards, so that the difference between two cases
is never the luck of their draws (common random numbers).
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modepair.sweeps.parts import Value
from modepair.sweeps.tolerances import Tolerance
from modepair.sweeps.vocabulary import BUILT_IN

__all__ = ["Streams", "Variate", "boards", "variates"]

Floats = NDArray[np.float64]

NAMES = tuple(BUILT_IN.varying)
"""Every name that can vary in any spec. Its place is its dimension of a Sobol sequence. What only an own circuit has
is drawn as a Latin hypercube beside it: further dimensions of a Sobol sequence are so alike in pairs that some
hundred draws of two parts would go together."""

TINY = 2.0**-54

SET = "set of "
"""What the key of a matched set's common factor begins with."""


@dataclass(frozen=True)
class Variate:
    """One independent cause of variation.

    Parameters
    ----------
    name
        The part's name; of a matched set's common factor, ``R1 R2 R3 R4 together``.
    key
        Key of its random stream.
    parts
        The parts it moves.
    bound
        Relative error of these parts at 1, the edge of the tolerance; of a CMRR, its signed reciprocal there.
    law
        Distribution: rectangular, normal (3 sigma at 1), triangular or two-point.
    reciprocal
        Whether it sets a CMRR.
    entry
        Index of its entry in the tolerance section.
    """

    name: str
    key: str
    parts: tuple[str, ...]
    bound: float
    law: str
    reciprocal: bool
    entry: int

    @property
    def common(self) -> bool:
        """Whether it moves a matched set together."""
        return self.key.startswith(SET)


def variates(
    tolerance: Tolerance, values: Mapping[str, float], parts: Mapping[str, float]
) -> tuple[Variate, ...]:
    """List what varies in one case.

    Parameters
    ----------
    tolerance
        The tolerance section.
    values
        Its values in this case by path, such as ``tolerance.parts[0].matching``.
    parts
        Nominal SI values of the case by part name. A part at zero does not vary.

    Returns
    -------
    tuple of Variate
        In the order of the section; a matched set's common factor before its members.
    """
    found = []
    for index, entry in enumerate(tolerance.parts):
        path = f"tolerance.parts[{index}]"
        absolute, matching, least = (values.get(f"{path}.{key}") for key in ("absolute", "matching", "least"))
        if entry.reciprocal:
            for name in entry.of:
                edge = _cmrr_edge(name, least, parts)
                if edge:
                    found.append(Variate(name, name, (name,), edge, entry.law, True, index))
            continue
        members = tuple(name for name in entry.of if parts.get(name))
        if matching is not None and absolute is not None and members:
            # Keyed by the member listed first, so that one more at its end changes nothing.
            key = SET + entry.of[0]
            found.append(
                Variate(f"{' '.join(members)} together", key, members, absolute, entry.law, False, index)
            )
        own = absolute if matching is None else matching
        if own is not None:
            found += [Variate(name, name, (name,), own, entry.law, False, index) for name in members]
    return tuple(found)


def _cmrr_edge(name: str, least: float | None, parts: Mapping[str, float]) -> float:
    """Signed reciprocal of CMRR at the edge: of the least given, else of the op-amp's own; 0 where there is none."""
    if f"{name.partition('.')[0]}.open_loop_gain" not in parts:
        return 0.0
    own = parts.get(name)
    return 1.0 / least if least is not None else (1.0 / abs(own) if own else 0.0)


def boards(
    parts: Mapping[str, float], causes: Sequence[Variate], errors: Mapping[str, Floats]
) -> dict[str, Value]:
    """Work out the part values of boards.

    Parameters
    ----------
    parts
        Nominal SI values by part name.
    causes
        What varies.
    errors
        For each variate's key the errors, shape (n,), in units of its bound.

    Returns
    -------
    dict of str to float or ndarray, shape (n,)
        Part values; those that do not vary as they are. A CMRR that varies is signed, and infinite at zero
        error.
    """
    result: dict[str, Value] = dict(parts)
    for cause in causes:
        error = errors[cause.key]
        for name in cause.parts:
            if cause.reciprocal:
                with np.errstate(divide="ignore"):
                    result[name] = 1.0 / (cause.bound * error)
                result[name.replace(".cmrr", ".cmrr_sign")] = 1.0
            else:
                result[name] = result[name] * (1.0 + cause.bound * error)
    return result


class Streams:
    """Random numbers for the variates of all cases.

    Parameters
    ----------
    tolerance
        The tolerance section: draws, seed, sampling.
    """

    def __init__(self, tolerance: Tolerance) -> None:
        self.draws = int(tolerance.draws)
        self.seed = int(tolerance.seed)
        self.sampling = tolerance.sampling
        self._whole: dict[str, Floats] = {}
        self._sobol = _Sobol(self.seed) if tolerance.sampling == "sobol" else None

    def uniform(self, key: str, start: int, stop: int) -> Floats:
        """Uniform numbers of a stream.

        Parameters
        ----------
        key
            Key of the stream.
        start, stop
            The draws wanted, from 0: start to stop - 1.

        Returns
        -------
        ndarray, shape (stop - start,)
            Above 0 and below 1. The same for a draw whatever the range it is asked in.
        """
        if self._sobol is not None and key.removeprefix(SET) in NAMES:
            numbers = self._sobol.numbers(start, stop)[:, _dimension(key)]
        elif self.sampling != "random":
            if key not in self._whole:
                self._whole[key] = _latin(self._generator(key), self.draws)
            numbers = self._whole[key][start:stop]
        else:
            numbers = self._generator(key, start).random(stop - start)
        return np.clip(numbers, TINY, 1.0 - 2.0 * TINY)

    def errors(self, causes: Sequence[Variate], start: int, stop: int) -> dict[str, Floats]:
        """Errors of variates for draws `start` + 1 to `stop`, in units of their bounds, by key."""
        return {cause.key: _law(cause.law, self.uniform(cause.key, start, stop)) for cause in causes}

    def _generator(self, key: str, skip: int = 0) -> np.random.Generator:
        digest = hashlib.sha256(key.encode("utf-8")).digest()
        words = np.frombuffer(digest, dtype="<u4").tolist()
        bits = np.random.PCG64(np.random.SeedSequence([self.seed, *words]))
        # A uniform double takes one step of the generator, so any draw can be reached at once.
        bits.advance(skip)
        return np.random.Generator(bits)


def _latin(generator: np.random.Generator, draws: int) -> Floats:
    from scipy.stats import qmc

    numbers: Floats = qmc.LatinHypercube(1, rng=generator).random(draws)[:, 0]
    return numbers


def _dimension(key: str) -> int:
    """Dimension of a key: its own for each name and for each set, whatever else varies."""
    name = key.removeprefix(SET)
    return NAMES.index(name) + (len(NAMES) if name != key else 0)


class _Sobol:
    """A scrambled Sobol sequence over every name of `NAMES`, read mostly in order."""

    def __init__(self, seed: int) -> None:
        self._seed = seed
        self._held: tuple[int, int, Floats] = (0, 0, np.empty((0, 2 * len(NAMES))))
        self._restart()

    def _restart(self) -> None:
        from scipy.stats import qmc

        self._engine = qmc.Sobol(2 * len(NAMES), scramble=True, rng=np.random.default_rng(self._seed))
        self._next = 0

    def numbers(self, start: int, stop: int) -> Floats:
        if self._held[:2] != (start, stop):
            if start < self._next:
                self._restart()
            if start > self._next:
                self._engine.fast_forward(start - self._next)
            import warnings

            with warnings.catch_warnings():
                # A number of points that is no power of two has a little more scatter, and is still right.
                warnings.filterwarnings("ignore", message="The balance properties of Sobol")
                self._held = (start, stop, self._engine.random(stop - start))
            self._next = stop
        return self._held[2]


def _law(law: str, uniform: Floats) -> Floats:
    """Turn uniform numbers into errors in units of the bound.

    Normal: the bound is 3 sigma. Triangular: the inverse of its distribution function, -1 + sqrt(2 u) below the
    middle, 1 - sqrt(2 (1 - u)) above.
    """
    if law == "normal":
        from scipy.special import ndtri

        normal: Floats = ndtri(uniform) / 3.0
        return normal
    if law == "triangular":
        return np.where(uniform < 0.5, np.sqrt(2.0 * uniform) - 1.0, 1.0 - np.sqrt(2.0 * (1.0 - uniform)))
    if law == "two-point":
        return np.where(uniform < 0.5, -1.0, 1.0)
    return 2.0 * uniform - 1.0
