"""How much of the step must be implicit: the largest relaxation rates of a mixture, and the width of its interface."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from poroscan.demix.mixture import Mixture
from poroscan.demix.simulation_settings import SimulationSettings

FloatArray = npt.NDArray[np.float64]

#: Margin over the half that linear stability asks for.
_MARGIN = 1.1


def mobility(settings: SimulationSettings, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
    """Onsager matrix of the exchange model, order (polymer, non-solvent); shape (…, 2, 2).

    M = Σ over pairs m_ab φa φb (e_a − e_b)(e_a − e_b)ᵀ with m = 1 for solvent and non-solvent, and ``polymer_mobility`` times
    the arrest factor for the two pairs with polymer. It is symmetric and never negative.
    """
    n, p = np.broadcast_arrays(np.asarray(phi_n, float), np.asarray(phi_p, float))
    s = 1 - n - p
    m = settings.polymer_mobility * arrest(settings, p)
    pp, nn, pn = m * p * (n + s), m * p * n + n * s, -m * p * n
    return np.stack([np.stack([pp, pn], -1), np.stack([pn, nn], -1)], -2)


def arrest(settings: SimulationSettings, phi_p: npt.ArrayLike) -> FloatArray:
    """Factor by which the mobility of polymer has fallen: floor + (1 − floor)/(1 + exp((φp − fraction)/width))."""
    y = np.clip((np.asarray(phi_p, float) - settings.arrest_fraction) / settings.arrest_width, -14, 14)
    return np.asarray(settings.arrest_floor + (1 - settings.arrest_floor) / (1 + np.exp(y)))


def hessian_matrix(mixture: Mixture, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
    """Second derivatives of f in the order (polymer, non-solvent); shape (…, 2, 2)."""
    nn, pn, pp = mixture.hessian(phi_n, phi_p)
    return np.stack([np.stack([pp, pn], -1), np.stack([pn, nn], -1)], -2)


def implicit_rates(mixture: Mixture, settings: SimulationSettings) -> tuple[float, float]:
    """A and B of the implicit part: half the largest eigenvalue of M·H and of M·K over the triangle, with a margin.

    A step is stable to small disturbances where A ≥ ½ρ(MH) and B ≥ ½ρ(MK): docs/simulation.md. M·H stays finite on the
    edges of the triangle because each mobility carries the product of the fractions it exchanges.
    """
    steps = np.linspace(1e-3, 1 - 2e-3, 60)
    n, p = (a.ravel() for a in np.meshgrid(steps, steps))
    inside = n + p < 1 - 1e-3
    matrix = mobility(settings, n[inside], p[inside])
    rates = matrix @ hessian_matrix(mixture, n[inside], p[inside])
    gradient = matrix @ np.diag([settings.kappa_polymer, settings.kappa_nonsolvent])
    diffusion = float(np.linalg.eigvals(rates).real.max())
    return _MARGIN * 0.5 * max(diffusion, 0.0), _MARGIN * 0.5 * float(np.linalg.eigvals(gradient).real.max())


def interface_width(mixture: Mixture, settings: SimulationSettings) -> float:
    """10–90 % width in cells of the interface of polymer against non-solvent, estimated from the barrier between them.

    For f = Wc²(1 − c)² the width is 2 ln 9·√(κ/2W) with a barrier of W/16 (Cahn and Hilliard 1958); the same relation is
    used with the barrier above the line from end to end of the polymer–non-solvent edge; inf where there is none.
    """
    p = np.linspace(1e-4, 1 - 1e-4, 400)
    f = np.asarray(mixture.free_energy(1 - p, p), float)
    hull, (left, right) = _hull(p, f)
    barrier = float((f - hull).max())
    if barrier <= 1e-9:
        return float("inf")
    kappa = settings.kappa_polymer + settings.kappa_nonsolvent
    return float(2 * np.log(9) * (right - left) * np.sqrt(kappa / (32 * barrier)))


def _hull(x: FloatArray, f: FloatArray) -> tuple[FloatArray, tuple[float, float]]:
    """Lower convex hull on the nodes and the ends of its longest chord."""
    kept: list[int] = []
    for i in range(x.size):
        while len(kept) > 1:
            a, b = kept[-2], kept[-1]
            if (f[b] - f[a]) * (x[i] - x[a]) < (f[i] - f[a]) * (x[b] - x[a]):
                break
            kept.pop()
        kept.append(i)
    gaps = np.diff(x[kept])
    longest = int(np.argmax(gaps))
    return np.interp(x, x[kept], f[kept]), (float(x[kept[longest]]), float(x[kept[longest + 1]]))
