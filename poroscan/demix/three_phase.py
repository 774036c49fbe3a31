"""Three-phase triangles: three compositions whose chemical potentials agree in all components."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from poroscan.demix.equilibrium import potential_gap, solve_phases_cautiously
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture

_LEAST_LOG = -30.0
_DISTINCT = 1e-3
SIDES = ((0, 1), (0, 2), (1, 2))


@dataclass(frozen=True)
class Triangle:
    """Three coexisting phases.

    Parameters
    ----------
    logs
        Logarithms of the fractions, shape (3 components n, s, p; 3 phases), polymer-richest phase first.
    residual
        Largest difference of molecular chemical potentials, kT.
    """

    logs: FloatArray
    residual: float

    @property
    def phases(self) -> FloatArray:
        """Fractions, shape (3 phases, 3), columns n, s, p."""
        return np.exp(self.logs).T

    @property
    def area(self) -> float:
        """Area over that of the composition triangle."""
        (a_n, _, a_p), (b_n, _, b_p), (c_n, _, c_p) = self.phases
        return float(abs((b_n - a_n) * (c_p - a_p) - (b_p - a_p) * (c_n - a_n)))

    def is_same(self, other: Triangle) -> bool:
        """True when the other triangle has the same corners, in whatever order."""
        distance = np.abs(self.phases[:, None] - other.phases[None]).max(axis=2)
        return bool((distance.min(axis=1) < _DISTINCT).all())

    def amounts(self, phi: FloatArray) -> FloatArray:
        """Volume fractions of the three phases that make up a feed (lever rule); negative outside the triangle.

        Parameters
        ----------
        phi
            Feed, shape (3, …), order n, s, p.
        """
        return np.asarray(np.linalg.solve(np.exp(self.logs), phi.reshape(3, -1)).reshape(phi.shape))


def find_triangle(mixture: Mixture, pair: FloatArray, third: FloatArray) -> Triangle | None:
    """Triangle near a tie line and a phase that undercuts it.

    Parameters
    ----------
    mixture
        The mixture.
    pair
        Logarithms of the tie line's phases, shape (3, 2).
    third
        Fractions of the undercutting phase, shape (3,).
    """
    with np.errstate(divide="ignore"):
        logs = np.column_stack([pair, np.log(third)])
    logs[:, 2] = np.maximum(logs[:, 2], _LEAST_LOG)
    logs = np.where(np.isinf(logs), _LEAST_LOG, logs)
    solved = solve_phases_cautiously(mixture, logs)
    if solved is None:
        return None
    phi = np.exp(solved)
    if min(np.abs(phi[:, i] - phi[:, j]).max() for i, j in SIDES) < _DISTINCT:
        return None
    solved = solved[:, np.argsort(-phi[2])]
    return Triangle(solved, potential_gap(mixture, solved))
