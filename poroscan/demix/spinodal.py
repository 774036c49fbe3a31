"""The spinodal of a ternary mixture, the area it encloses, and the plait (critical) points on it.

Everything is read from the least eigenvalue of the scaled second variation (``Mixture.stability``): negative where every
composition demixes by itself. A plait point is where the softest direction runs along the spinodal: the third derivative
of the free energy in that direction vanishes (Gibbs; Tompa 1956).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from skimage.measure import find_contours

from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture, excess, scaled_curvature

_COLUMNS = 401
_BISECTIONS = 45
_ON_EDGE = 1e-6
_NEWTON_STEPS = 30


@dataclass(frozen=True)
class Spinodal:
    """The boundary of the region in which every composition is unstable.

    Parameters
    ----------
    curves
        Open or closed curves, each of shape (points, 3) in the order n, s, p; an end on an edge of the triangle lies on it.
    area
        Area of the unstable region over that of the triangle.
    plaits
        Solutions of the plait equations, shape (count, 3), stable or not.
    """

    curves: tuple[FloatArray, ...]
    area: float
    plaits: FloatArray


def find_spinodal(mixture: Mixture) -> Spinodal:
    """Spinodal curves, area and plait points of a mixture."""
    share, polymer = _grid(mixture)
    phi = composition(share[:, None], polymer[None, :])
    level = scaled_curvature(mixture, phi)[0]
    curves = tuple(_polished_curve(mixture, curve, share, polymer) for curve in find_contours(level, 0.0))
    curves = tuple(curve for curve in curves if len(curve) > 1)
    return Spinodal(curves, _area(mixture, level, share, polymer), _plaits(mixture, curves))


def composition(share: FloatArray, polymer: FloatArray) -> FloatArray:
    """Fractions (n, s, p) from the non-solvent's share of the liquid and the polymer fraction."""
    share, polymer = np.broadcast_arrays(share, polymer)
    return np.stack([share * (1 - polymer), (1 - share) * (1 - polymer), polymer])


def _grid(mixture: Mixture) -> tuple[FloatArray, FloatArray]:
    """Shares of non-solvent and polymer fractions, both crowded where a phase can be dilute."""
    share = 0.5 * (1 - np.cos(np.linspace(0, np.pi, _COLUMNS)))
    dilute = np.geomspace(0.01 / mixture.N_p**1.5, 0.02, 60)
    polymer = np.concatenate(
        [[0.0], dilute, np.linspace(0.02, 0.98, 190)[1:], 1 - np.geomspace(0.02, 1e-6, 20)[1:], [1.0]]
    )
    return share, np.unique(polymer)


def _root_between(mixture: Mixture, low: FloatArray, high: FloatArray) -> FloatArray:
    """Zero of the stability between (share, polymer) pairs of opposite sign; shape (2, points)."""
    sign = np.sign(scaled_curvature(mixture, composition(*low))[0])
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        same = np.sign(scaled_curvature(mixture, composition(*middle))[0]) == sign
        low = np.where(same, middle, low)
        high = np.where(same, high, middle)
    return 0.5 * (low + high)


def _polished_curve(mixture: Mixture, curve: FloatArray, share: FloatArray, polymer: FloatArray) -> FloatArray:
    """Contour in grid steps -> points on the spinodal, by bisection along the grid line each point lies on."""
    below = np.floor(curve + 1e-12).astype(int)
    above = np.minimum(below + (curve - below > 1e-12), [share.size - 1, polymer.size - 1])
    low = np.stack([share[below[:, 0]], polymer[below[:, 1]]])
    high = np.stack([share[above[:, 0]], polymer[above[:, 1]]])
    points = composition(*_root_between(mixture, low, high)).T
    moved = np.abs(np.diff(points, axis=0)).sum(axis=1) > 1e-12
    return points[np.concatenate([[True], moved])]


def _area(mixture: Mixture, level: FloatArray, share: FloatArray, polymer: FloatArray) -> float:
    """Unstable area over that of the triangle: exact along the polymer axis, trapezium rule over the shares."""
    unstable = level < 0
    column, row = np.nonzero(unstable[:, 1:] != unstable[:, :-1])
    roots = _root_between(
        mixture, np.stack([share[column], polymer[row]]), np.stack([share[column], polymer[row + 1]])
    )[1]
    leaving = np.where(unstable[column, row], 1.0, -1.0)
    # dA = (1 − p) dp d(share): its integral over p is p − p²/2
    inside = np.bincount(column, leaving * (roots - roots**2 / 2), minlength=share.size) + 0.5 * unstable[:, -1]
    return float(2 * np.trapezoid(inside, share))


def third_derivative(mixture: Mixture, phi: FloatArray, direction: FloatArray) -> FloatArray:
    """Third derivative of the free energy along a direction; both arrays of shape (3, …)."""
    sizes = mixture.sizes.reshape((3,) + (1,) * (phi.ndim - 1))
    ideal = -(direction**3 / (sizes * phi**2)).sum(axis=0)
    if mixture.is_constant:
        return np.asarray(ideal)
    # a step that stays inside: the direction has Σ d²/φ = 1, so |d| ≤ √φ
    step = 1e-3 * np.sqrt(phi.min(axis=0))
    bend = [
        np.einsum("i...,ij...,j...->...", direction, excess(mixture, phi + sign * step * direction)[2], direction)
        for sign in (1, -1)
    ]
    return np.asarray(ideal + (bend[0] - bend[1]) / (2 * step))


def _plaits(mixture: Mixture, curves: tuple[FloatArray, ...]) -> FloatArray:
    found: list[FloatArray] = []
    for curve in curves:
        inside = curve[(curve > _ON_EDGE).all(axis=1)].T
        if inside.shape[1] < 2:
            continue
        direction = scaled_curvature(mixture, inside)[1]
        flips = np.sign((direction[:, 1:] * direction[:, :-1] / inside[:, 1:]).sum(axis=0))
        direction = direction * np.concatenate([[1.0], np.cumprod(np.where(flips == 0, 1, flips))])
        third = third_derivative(mixture, inside, direction)
        for k in np.nonzero(third[1:] * third[:-1] <= 0)[0]:
            weight = third[k] / (third[k] - third[k + 1]) if third[k] != third[k + 1] else 0.5
            start = inside[:, k] + weight * (inside[:, k + 1] - inside[:, k])
            plait = _solve_plait(mixture, start, direction[:, k])
            if plait is not None and not any(np.abs(plait - other).max() < 1e-6 for other in found):
                found.append(plait)
    return np.array(found).reshape(-1, 3)


def plait_near(mixture: Mixture, start: FloatArray) -> FloatArray | None:
    """The plait point near a composition (n, s, p), or None where the equations have no solution there."""
    return _solve_plait(mixture, start, scaled_curvature(mixture, start[:, None])[1][:, 0])


def _solve_plait(mixture: Mixture, start: FloatArray, heading: FloatArray) -> FloatArray | None:
    """Newton with differenced slopes for (stability, third derivative) = 0 in (ln φn, ln φp)."""

    def equations(x: FloatArray) -> tuple[FloatArray, FloatArray]:
        n, p = np.exp(x)
        phi = np.stack([n, 1 - n - p, p])
        value, direction = scaled_curvature(mixture, phi)
        direction = direction * np.where((direction * heading[:, None] / phi).sum(axis=0) < 0, -1, 1)
        return np.stack([value, third_derivative(mixture, phi, direction)]), phi

    x = np.log(start[[0, 2]])
    step = 1e-6
    for _ in range(_NEWTON_STEPS):
        probes = x[:, None] + np.array([[0, step, -step, 0, 0], [0, 0, 0, step, -step]])
        values, phi = equations(probes)
        if not (phi > 0).all() or not np.isfinite(values).all():
            return None
        slopes = np.stack([values[:, 1] - values[:, 2], values[:, 3] - values[:, 4]], axis=1) / (2 * step)
        try:
            move = np.linalg.solve(slopes, -values[:, 0])
        except np.linalg.LinAlgError:
            return None
        x = x + move * min(1.0, 0.2 / max(float(np.abs(move).max()), 1e-300))
        if np.abs(move).max() < 1e-11:
            plait = equations(x[:, None])[1][:, 0]
            return plait if plait.min() > _ON_EDGE else None
    return None
