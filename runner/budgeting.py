"""Budgeting: the solves behind an error budget and the worst case of each case."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from modepair.circuits import Deck, imperfections, parts_gone
from modepair.reports import ModePair
from modepair.reports.budget import Contribution, decibels, root_sum_square, worst_signs
from modepair.reports.figures import spot_indices
from modepair.runner.analyses import Analyses, spot_analyses
from modepair.runner.plans import DrawnCase
from modepair.runner.pool import BatchSolver
from modepair.runner.solving import solve_rows
from modepair.sweeps import boards

__all__ = ["CaseBudget", "SpotBudget", "budget_case"]

Complex = npt.NDArray[np.complex128]
Floats = npt.NDArray[np.float64]
Value = float | npt.NDArray[np.float64]

TOP = 5
"""Contributions of a spot that are taken away and solved."""

VERTICES = 24
"""Boards solved at a spot for the extreme value, by the size that first order gives them."""

LINEAR = 1e-3
"""Share of |rho| by which first order may miss a solved board and still be trusted to rank boards."""


@dataclass(frozen=True)
class SpotBudget:
    """The budget of one case at one spot.

    Attributes
    ----------
    frequency_hz : float
        The spot.
    nominal : complex
        rho of the nominal circuit, V/V.
    worst : complex
        rho of the worst board found, solved; the nominal circuit's where there are no tolerances.
    estimate : complex
        Sum of the contributions, signs as on the worst board.
    root_sum_square : float
        |rho| by root-sum-square.
    signs : mapping of str to float
        For each tolerance the edge at which the worst board has it, 1 or -1.
    contributions : tuple of Contribution
        By falling size, rho at this spot only (shape (1,)), with the worst board's signs.
    without : tuple of float
        |rho| of the worst board without each of the first contributions, solved.
    without_summed : tuple of float
        The same from the sum: |rho| of the worst board less the contribution, and less the tolerances of parts that
        go with a nominal imperfection.
    floor_db : float
        Highest CMRR that the solve can tell; what reads higher is only known to be above it.
    """

    frequency_hz: float
    nominal: complex
    worst: complex
    estimate: complex
    root_sum_square: float
    signs: Mapping[str, float]
    contributions: tuple[Contribution, ...]
    without: tuple[float, ...]
    without_summed: tuple[float, ...]
    floor_db: float

    @property
    def residual(self) -> float:
        """What the sum of the contributions leaves, as a share of the solved |rho|; NaN where this is round-off."""
        if decibels(self.worst) >= self.floor_db:
            return float("nan")
        return abs(self.estimate - self.worst) / abs(self.worst)

    def level_db(self, rho: complex) -> float:
        """CMRR of an error ratio in dB, and no more than the floor."""
        return min(float(decibels(rho)), self.floor_db)


@dataclass(frozen=True)
class CaseBudget:
    """The budget of one case.

    Attributes
    ----------
    drawn : DrawnCase
        The case.
    frequency_hz : ndarray, shape (F,)
        Frequencies.
    nominal : ndarray, shape (F,)
        rho of the nominal circuit, V/V.
    contributions : tuple of Contribution
        Over frequency; tolerances at their upper edges.
    spots : tuple of SpotBudget
        At the spots.
    worst_boards : tuple of mapping of str to float
        Part values of the worst board at each spot.
    """

    drawn: DrawnCase
    frequency_hz: npt.NDArray[np.float64]
    nominal: Complex
    contributions: tuple[Contribution, ...]
    spots: tuple[SpotBudget, ...]
    worst_boards: tuple[Mapping[str, float], ...]


def _stacked(rows: Sequence[Mapping[str, Value]]) -> dict[str, npt.NDArray[np.float64]]:
    """Part values of many circuits as arrays; a part that one of them lacks is zero there."""
    names = dict.fromkeys(name for row in rows for name in row)
    return {name: np.array([float(np.ravel(row.get(name, 0.0))[0]) for row in rows]) for name in names}


class _Case:
    """One case and the circuits near it."""

    def __init__(self, drawn: DrawnCase, solver: BatchSolver, decks: dict[object, Deck]) -> None:
        self.drawn = drawn
        self.solver = solver
        self.decks = decks
        self.defects = {
            name: ideal
            for name, ideal in imperfections(drawn.stage.topology, self.board({})).items()
            # An imported model has no parameters that could be made ideal.
            if not all(part.partition(".")[0] in drawn.stage.models for part in ideal)
        }

    def board(self, edges: Mapping[str, float], without: str = "") -> dict[str, float]:
        """Part values with some tolerances at their edges, and perhaps one imperfection taken away."""
        errors = {cause.key: np.array([edges.get(cause.key, 0.0)]) for cause in self.drawn.causes}
        parts = boards(self.drawn.parts, self.drawn.causes, errors)
        values = {name: float(np.ravel(value)[0]) for name, value in parts.items()}
        if without:
            # What takes the imperfection away carries the error that the board has in that part.
            nominal = self.defects[without]
            values |= {
                name: _carried(value, values.get(name), self.drawn.parts.get(name))
                for name, value in nominal.items()
            }
        return values

    def edges(self, signs: Floats) -> dict[str, float]:
        """Edges of the tolerances by key."""
        return {cause.key: float(sign) for cause, sign in zip(self.drawn.causes, signs, strict=True)}

    def solve(self, rows: Sequence[Mapping[str, Value]], analyses: Analyses) -> ModePair:
        return solve_rows(
            self.solver,
            self.drawn.stage,
            _stacked(rows),
            len(rows),
            analyses,
            self.decks,
        )


def _carried(ideal: float, on_board: float | None, nominal: float | None) -> float:
    """The ideal value with the relative error that the board has in that part."""
    if not on_board or not nominal or not np.isfinite(ideal) or not np.isfinite(on_board):
        return ideal
    return ideal * on_board / nominal


def budget_case(
    drawn: DrawnCase,
    solver: BatchSolver,
    analyses: Analyses,
    spots_hz: Sequence[float],
    decks: dict[object, Deck] | None = None,
) -> CaseBudget:
    """Work out the error budget and the worst case of one case.

    Parameters
    ----------
    drawn : DrawnCase
        The case, with what varies in it.
    solver : BatchSolver
        Where circuits are solved.
    analyses : Analyses
        The frequencies.
    spots_hz : sequence of float
        Spots, among these frequencies.
    decks : dict, optional
        Decks by structure, kept from one case to the next.

    Returns
    -------
    CaseBudget
        Tolerances by central differences from edge to edge, nominal imperfections by taking each away.

    Raises
    ------
    SimulationError
        If a circuit near the case cannot be solved.
    """
    case = _Case(drawn, solver, {} if decks is None else decks)
    causes, defects = drawn.causes, list(case.defects)
    rows: list[Mapping[str, Value]] = [drawn.parts, case.board({})]
    rows += [case.board({cause.key: edge}) for cause in causes for edge in (1.0, -1.0)]
    rows += [case.board({}, without=name) for name in defects]
    pair = case.solve(rows, analyses)
    rho = pair.error_ratio
    centre, edges, without = rho[1], rho[2 : 2 + 2 * len(causes)], rho[2 + 2 * len(causes) :]
    tolerances = [
        Contribution(cause.name, "tolerance", 0.5 * (edges[2 * i] - edges[2 * i + 1]))
        for i, cause in enumerate(causes)
    ]
    nominals = [Contribution(name, "nominal", centre - without[i]) for i, name in enumerate(defects)]
    columns = spot_indices(analyses.frequency_hz, spots_hz)
    found = [
        _spot(case, float(spot), int(column), pair, tolerances, nominals)
        for spot, column in zip(spots_hz, columns.tolist(), strict=True)
    ]
    return CaseBudget(
        drawn,
        analyses.frequency_hz,
        rho[0],
        (*tolerances, *nominals),
        tuple(spot for spot, _ in found),
        tuple(board for _, board in found),
    )


def _worst(case: _Case, centre: complex, slopes: Complex, there: Analyses) -> tuple[Floats, complex]:
    """Find the worst board at one frequency: solve those that first order names.

    Where tolerances are too wide for first order, it is taken anew about the worst board found, by moving one
    tolerance after the other to its other edge, until no board named so is worse.
    """

    def solved(signs: Floats) -> Complex:
        rho: Complex = case.solve([case.board(case.edges(row)) for row in signs], there).error_ratio[:, 0]
        return rho

    named = worst_signs(centre, slopes)[:VERTICES]
    rho = solved(named)
    row = int(np.abs(rho).argmax())
    signs, worst = named[row], complex(rho[row])
    if not signs.size or abs(worst - centre - signs @ slopes) <= LINEAR * abs(worst):
        return signs, worst
    while True:
        flipped = signs * (1.0 - 2.0 * np.eye(signs.size))
        beside = solved(flipped)
        slopes = 0.5 * (worst - beside) * signs
        named = worst_signs(worst - complex(signs @ slopes), slopes)[:VERTICES]
        others, rho = np.concatenate([flipped, named]), np.concatenate([beside, solved(named)])
        row = int(np.abs(rho).argmax())
        if abs(rho[row]) <= abs(worst) * (1.0 + 1e-9):
            return signs, worst
        signs, worst = others[row], complex(rho[row])


def _spot(
    case: _Case,
    frequency_hz: float,
    column: int,
    pair: ModePair,
    tolerances: Sequence[Contribution],
    nominals: Sequence[Contribution],
) -> tuple[SpotBudget, Mapping[str, float]]:
    causes = case.drawn.causes
    nominal, centre = pair.error_ratio[:2, column].tolist()
    slopes = np.array([one.rho[column] for one in tolerances], np.complex128)
    there = spot_analyses([frequency_hz])
    signs, worst = _worst(case, centre, slopes, there)
    edges = case.edges(signs)
    signed = [
        Contribution(one.name, one.kind, one.rho[column : column + 1] * sign)
        for one, sign in zip(tolerances, signs, strict=True)
    ] + [Contribution(one.name, one.kind, one.rho[column : column + 1]) for one in nominals]
    order = sorted(range(len(signed)), key=lambda i: -abs(signed[i].rho[0]))
    gone, summed = [], []
    for i in order[:TOP]:
        along = {i}
        if i < len(causes):
            gone.append(case.board({**edges, causes[i].key: 0.0}))
        else:
            gone.append(case.board(edges, without=signed[i].name))
            parts = parts_gone(case.defects[signed[i].name])
            along |= {index for index, cause in enumerate(causes) if parts.issuperset(cause.parts)}
        summed.append(abs(worst - sum(complex(signed[index].rho[0]) for index in along)))
    without = np.abs(case.solve(gone, there).error_ratio[:, 0]) if gone else np.empty(0)
    spot = SpotBudget(
        frequency_hz,
        nominal,
        worst,
        complex(sum(one.rho[0] for one in signed)),
        float(root_sum_square(np.array([centre]), slopes[:, np.newaxis])[0]),
        {cause.name: edges[cause.key] for cause in causes},
        tuple(signed[i] for i in order),
        tuple(without.tolist()),
        tuple(summed),
        float(pair.floor_db[1, column]),
    )
    return spot, case.board(edges)
