"""The error budget: which part of the circuit costs how much rejection, as signed phasors of rho.

A tolerance contributes half the difference between rho at its two edges; a nominal imperfection contributes rho
with it less rho without it. Small contributions add, with sign and phase: what their sum leaves of the solved rho is
the residual.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Contribution", "decibels", "root_sum_square", "worst_signs"]

Complex = npt.NDArray[np.complex128]
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Contribution:
    """What one cause adds to rho.

    Parameters
    ----------
    name : str
        The cause: a part, a parameter, or a pair of parts that differ.
    kind : {"tolerance", "nominal"}
        Whether its sign is open, or fixed by the nominal circuit.
    rho : ndarray, shape (F,)
        Complex contribution, V/V; of a tolerance, at its upper edge.
    """

    name: str
    kind: str
    rho: Complex


def decibels(rho: npt.ArrayLike) -> Floats:
    """CMRR in dB of an error ratio: -20 log10 |rho|; infinite where rho is zero."""
    with np.errstate(divide="ignore"):
        level: Floats = -20.0 * np.log10(np.abs(np.asarray(rho)))
    return level


def worst_signs(nominal: complex, tolerances: Complex) -> npt.NDArray[np.float64]:
    """Find the boards at which |rho| can be largest, to first order.

    Parameters
    ----------
    nominal : complex
        rho of the nominal circuit at one frequency, V/V.
    tolerances : ndarray, shape (m,)
        Contributions of the tolerances there, at their upper edges.

    Returns
    -------
    ndarray, shape (v, m)
        Signs, 1 or -1, of at most 2 m boards, by falling |rho| to first order; the first is the worst.

    Notes
    -----
    The largest |nominal + sum of s_i c_i| over all signs has some phase t, and then s_i = sign Re(c_i exp(-jt)),
    or a smaller sum would do. These signs change only where a c_i is at a right angle to t, so the m right angles
    part the circle into at most 2 m arcs, each with one set of signs: the vertices of a zonotope.
    """
    count = len(tolerances)
    if not count:
        return np.ones((1, 0))
    edges = np.sort(np.mod(np.angle(tolerances[tolerances != 0]) + np.pi / 2, np.pi))
    edges = np.concatenate([edges, edges + np.pi]) if edges.size else np.zeros(1)
    middles = edges + 0.5 * np.diff(np.append(edges, edges[0] + 2 * np.pi))
    signs = np.where((tolerances * np.exp(-1j * middles[:, np.newaxis])).real >= 0, 1.0, -1.0)
    signs = np.unique(signs, axis=0)
    size = np.abs(nominal + signs @ tolerances)
    return signs[np.argsort(-size, kind="stable")]


def root_sum_square(nominal: Complex, tolerances: Complex) -> Floats:
    """Estimate the worst |rho| by root-sum-square.

    Parameters
    ----------
    nominal : ndarray, shape (F,)
        rho of the nominal circuit, V/V.
    tolerances : ndarray, shape (m, F)
        Contributions of the tolerances at their edges.

    Returns
    -------
    ndarray, shape (F,)
        |nominal| + sqrt(sum |c_i|^2), V/V: independent tolerances, at the edge of three sigma where each bound is
        three sigma, in the direction of the nominal error.
    """
    total: Floats = np.abs(nominal) + np.sqrt((np.abs(tolerances) ** 2).sum(axis=0))
    return total
