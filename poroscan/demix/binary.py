"""Two components: critical point, spinodal and miscibility gaps on an edge of the composition triangle.

Critical point and spinodal are closed forms (Flory 1953): ``χ_c = ½(1/√N1 + 1/√N2)²``, ``φ1_c = √N2/(√N1 + √N2)``,
``1/(N1 φ) + 1/(N2 (1 − φ)) = 2χ``.
"""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np

from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture, excess, ideal_energy, site_potential_slopes, site_potentials

#: Edge of the triangle -> its two components in the order of COMPONENTS (n, s, p); the third is absent.
EDGES = {"pn": (0, 2), "ps": (1, 2), "sn": (0, 1)}

#: Edge of the triangle -> the component that is absent on it.
ABSENT = {"pn": 1, "ps": 0, "sn": 2}

_LEAST_FRACTION = 1e-12
_STEPS = 60


def critical_point(size_1: float, size_2: float) -> tuple[float, float]:
    """Critical interaction parameter and volume fraction of component 1 of a binary mixture.

    Parameters
    ----------
    size_1, size_2
        Sites per molecule.

    Raises
    ------
    ValueError
        A size that is not positive.
    """
    if not (size_1 > 0 and size_2 > 0):
        raise ValueError(f"sizes must be positive, got {size_1!r} and {size_2!r}")
    return 0.5 * (1 / math.sqrt(size_1) + 1 / math.sqrt(size_2)) ** 2, math.sqrt(size_2) / (
        math.sqrt(size_1) + math.sqrt(size_2)
    )


def spinodal_fractions(size_1: float, size_2: float, *, chi: float) -> tuple[float, float] | None:
    """Volume fractions of component 1 on the spinodal, lower first; None where the mixture is stable throughout.

    Raises
    ------
    ValueError
        A size that is not positive.
    """
    critical, _ = critical_point(size_1, size_2)
    if chi < critical:
        return None
    # 2χφ² + (1/N2 − 1/N1 − 2χ)φ + 1/N1 = 0
    middle = 2 * chi + 1 / size_1 - 1 / size_2
    root = math.sqrt(max(middle**2 - 8 * chi / size_1, 0.0))
    larger = (middle + root) / (4 * chi)
    return 1 / (size_1 * 2 * chi * larger), larger


def edge_gaps(mixture: Mixture, edge: str) -> tuple[FloatArray, ...]:
    """Miscibility gaps of the two components on one edge of the triangle.

    Parameters
    ----------
    mixture
        The mixture.
    edge
        ``"pn"``, ``"ps"`` or ``"sn"``.

    Returns
    -------
    tuple of ndarray
        One array of shape (3, 2) per gap: logarithms of the fractions (−inf for the absent component), the phase with
        less of the edge's second component (polymer, on its edges) last.
    """
    first, second = EDGES[edge]
    tail = np.geomspace(_LEAST_FRACTION, 1e-2, 160)
    grid = np.unique(np.concatenate([tail, np.linspace(1e-2, 0.99, 800), 1 - tail]))
    phi = np.zeros((3, grid.size))
    phi[first], phi[second] = 1 - grid, grid
    energy = ideal_energy(mixture, phi) + excess(mixture, phi)[0]
    gaps: list[FloatArray] = []
    for low, high in _hull_gaps(grid, energy):
        logs = np.log(np.array([[1 - grid[high], 1 - grid[low]], [grid[high], grid[low]]]))
        solved = _solve_edge(mixture, logs, (first, second))
        if solved is not None and not any(np.allclose(np.exp(solved), np.exp(g), atol=1e-6) for g in gaps):
            gaps.append(solved)
    return tuple(gaps)


def _hull_gaps(grid: FloatArray, energy: FloatArray) -> list[tuple[int, int]]:
    """Pairs of grid points joined by the lower convex hull across a stretch where the energy is concave."""
    hull: list[int] = []
    for k in range(grid.size):
        while len(hull) > 1 and _is_above(grid, energy, hull[-2], hull[-1], k):
            hull.pop()
        hull.append(k)
    pairs = pairwise(hull)
    return [(a, b) for a, b in pairs if b - a > 2]


def _is_above(grid: FloatArray, energy: FloatArray, a: int, b: int, c: int) -> bool:
    chord = energy[a] + (energy[c] - energy[a]) * (grid[b] - grid[a]) / (grid[c] - grid[a])
    return bool(energy[b] >= chord)


def _solve_edge(mixture: Mixture, logs: FloatArray, pair: tuple[int, int]) -> FloatArray | None:
    """Newton for two phases of two components; ``logs`` has shape (2, 2)."""
    rows = list(pair)
    for _ in range(_STEPS):
        full = np.full((3, 2), -np.inf)
        full[rows] = logs
        with np.errstate(invalid="ignore"):
            potentials = site_potentials(mixture, full)[rows]
            each = site_potential_slopes(mixture, full)[np.ix_(rows, rows)]
        phi = np.exp(logs)
        residual = np.concatenate([potentials[:, 1] - potentials[:, 0], phi.sum(axis=0) - 1])
        slopes = np.zeros((4, 4))
        slopes[:2, :2], slopes[:2, 2:] = -each[:, :, 0], each[:, :, 1]
        slopes[2, :2], slopes[3, 2:] = phi[:, 0], phi[:, 1]
        try:
            step = np.linalg.solve(slopes, -residual).reshape(2, 2, order="F")
        except np.linalg.LinAlgError:
            return None
        largest = float(np.abs(np.where(phi > 1e-5, step, 0.0)).max())
        logs = np.minimum(logs + step * min(1.0, 0.5 / max(largest, 1e-300)), 0.0)
        if np.abs(step / np.maximum(1, np.abs(logs))).max() < 1e-13:
            break
    converged = np.abs(residual).max() < 1e-12 and abs(phi[1, 0] - phi[1, 1]) > 1e-4
    full = np.full((3, 2), -np.inf)
    full[rows] = logs
    return full if converged else None
