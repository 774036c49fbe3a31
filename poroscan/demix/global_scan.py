"""Global stability: is a set of coexisting phases the state of least free energy, and was a region missed?

The free energy is tabulated once over the whole triangle, with extra points where a component is a trace. Coexisting
phases are stable when the plane through them lies nowhere above the table (Gibbs' tangent-plane criterion; Michelsen
(1982) Fluid Phase Equilib. 9, 1). The lower convex hull of the table shows where tie lines must be.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial import ConvexHull

from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture, excess, ideal_energy, scaled_curvature
from poroscan.demix.spinodal import composition
from poroscan.errors import SimulationError

#: How far the free energy may lie under the tangent plane by rounding, kT per site.
UNDERCUT = 1e-10

_SHARES = 161
_HULL_STRIDE = 4
_CHORD = np.linspace(0, 1, 17)[1:-1]


@dataclass(frozen=True)
class EnergyTable:
    """Free energy over the composition triangle.

    Parameters
    ----------
    phi
        Fractions, shape (3, points), in the order n, s, p.
    energy
        Free energy per site, kT, shape (points,).
    hull_points
        Indices of the thinner set of points on which the convex hull is built.
    """

    phi: FloatArray
    energy: FloatArray
    hull_points: np.ndarray

    def undercut(self, potentials: FloatArray) -> tuple[FloatArray, np.ndarray]:
        """How far the table lies under planes given by site potentials.

        Parameters
        ----------
        potentials
            ``μ_i/N_i`` of each plane, shape (planes, 3).

        Returns
        -------
        least, where
            Least distance of the table above each plane (negative: unstable), and the index of that point.
        """
        heights = self.energy - potentials @ self.phi
        where = heights.argmin(axis=1)
        return heights[np.arange(len(where)), where], where


def tabulate(mixture: Mixture) -> EnergyTable:
    """Free energy of a mixture over the triangle.

    Raises
    ------
    SimulationError
        Where an interaction parameter is not a number somewhere in the triangle.
    """
    tail = np.geomspace(1e-7, 5e-3, 14)
    inner = np.linspace(0, 1, _SHARES)[1:-1]
    share = np.concatenate([[0.0], tail, inner, 1 - tail[::-1], [1.0]])
    dilute = np.concatenate([np.geomspace(1e-9, 1e-4, 8), np.geomspace(2e-4, 0.02, 24)])
    polymer = np.concatenate([[0.0], dilute, np.linspace(0.02, 0.99, 140)[1:], 1 - np.geomspace(5e-3, 1e-5, 5)])
    phi = composition(share[:, None], polymer[None, :])
    keep = np.zeros(phi.shape[1:], dtype=bool)
    keep[::_HULL_STRIDE, ::_HULL_STRIDE] = True
    keep[-1, ::_HULL_STRIDE] = True
    phi = np.concatenate([phi.reshape(3, -1), [[0.0], [0.0], [1.0]]], axis=1)
    kept = np.nonzero(np.append(keep.ravel(), True))[0]
    energy = ideal_energy(mixture, phi) + excess(mixture, phi)[0]
    _refuse_gaps(phi, energy)
    return EnergyTable(phi, energy, kept)


def _refuse_gaps(phi: FloatArray, energy: FloatArray) -> None:
    bad = ~np.isfinite(energy)
    if bad.any():
        n, s, p = phi[:, np.argmax(bad)]
        raise SimulationError(
            f"the free energy is not a number at phi_n={n:.4g}, phi_s={s:.4g}, phi_p={p:.4g} (and at {bad.sum() - 1} more of "
            f"{bad.size} compositions): mend the interaction parameter that depends on composition"
        )


def hull_chords(mixture: Mixture, table: EnergyTable) -> FloatArray:
    """Chords of the lower convex hull that bridge an unstable stretch: rough tie lines.

    Returns
    -------
    ndarray
        Shape (chords, 2, 3): the two ends (n, s, p) of each.
    """
    phi = table.phi[:, table.hull_points].T
    hull = ConvexHull(np.column_stack([phi[:, 0], phi[:, 2], table.energy[table.hull_points]]))
    lower = hull.simplices[hull.equations[:, 2] < -1e-12]
    sides = np.concatenate([lower[:, [0, 1]], lower[:, [1, 2]], lower[:, [2, 0]]])
    sides = np.unique(np.sort(sides, axis=1), axis=0)
    a, b = phi[sides[:, 0]], phi[sides[:, 1]]
    between = a[:, None] + _CHORD[None, :, None] * (b - a)[:, None]
    bridges = (scaled_curvature(mixture, np.moveaxis(between, -1, 0))[0] < 0).any(axis=1)
    return np.stack([a[bridges], b[bridges]], axis=1)
