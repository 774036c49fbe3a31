"""Newton's method for coexisting phases, in the logarithms of their fractions.

Two or three phases coexist when the chemical potentials of all three components agree. The logarithm is the unknown, so
that a polymer fraction of 1e-190 in the lean phase is as exact as one of 0.1: there the equation is linear in it.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture, site_potential_slopes, site_potentials

#: Extra equation of a tie line: logs (3, phases) -> residual and its slopes by the logs, shape (3, phases).
Constraint = Callable[[FloatArray], tuple[float, FloatArray]]

#: Largest difference of molecular chemical potentials between phases that counts as coexistence, kT.
TOLERANCE = 1e-10
_ROUNDING_PER_SITE = 5e-15  # of a potential per site; counts N times in that of a molecule

_STEPS = 40
_LARGEST_LOG_STEP = 0.7  # of a component that is no trace
_CAUTIOUS_LOG_STEP = 0.12
_TRACE = 1e-5


def solve_phases(mixture: Mixture, logs: FloatArray, constraint: Constraint | None = None) -> FloatArray | None:
    """Coexisting phases near a guess.

    Parameters
    ----------
    mixture
        The mixture.
    logs
        Logarithms of the fractions, shape (3, phases); two phases need a constraint, three phases none.
    constraint
        The equation that picks one of the one-parameter family of tie lines.

    Returns
    -------
    ndarray or None
        Logarithms of the fractions of the coexisting phases; None where the iteration does not converge.
    """
    return _iterate(mixture, logs, constraint, _LARGEST_LOG_STEP, _STEPS)


def solve_phases_cautiously(mixture: Mixture, logs: FloatArray) -> FloatArray | None:
    """Three coexisting phases from a rough guess: as :func:`solve_phases`, and again in small steps where that fails."""
    solved = _iterate(mixture, logs, None, _LARGEST_LOG_STEP, _STEPS)
    return _iterate(mixture, logs, None, _CAUTIOUS_LOG_STEP, 4 * _STEPS) if solved is None else solved


def _iterate(
    mixture: Mixture, logs: FloatArray, constraint: Constraint | None, largest_step: float, steps: int
) -> FloatArray | None:
    logs = np.array(logs, dtype=float)
    for _ in range(steps):
        residual, slopes = _equations(mixture, logs, constraint)
        try:
            step = np.linalg.solve(slopes, -residual).reshape(3, -1, order="F")
        except np.linalg.LinAlgError:
            return None
        present = np.exp(logs) > _TRACE
        largest = float(np.abs(np.where(present, step, 0.0)).max())
        proposed = logs + step * min(1.0, largest_step / max(largest, 1e-300))
        logs = np.minimum(proposed, 0.0)  # no fraction above 1 on the way
        if not np.isfinite(logs).all():
            return None
        moved = float(np.abs(np.where(present, step, step / np.maximum(1, np.abs(logs)))).max())
        if moved < 1e-12 or (moved < 1e-7 and potential_gap(mixture, logs) < 1e-12):
            break
    sums = np.exp(logs).sum(axis=0)
    tolerance = max(TOLERANCE, _ROUNDING_PER_SITE * float(mixture.sizes.max()))
    settled = potential_gap(mixture, logs) < tolerance and np.abs(sums - 1).max() < 1e-10
    if settled and constraint is not None:
        settled = abs(constraint(logs)[0]) < 1e-8
    return logs if settled else None


def potential_gap(mixture: Mixture, logs: FloatArray) -> float:
    """Largest difference between phases of the molecular chemical potentials, kT; logs of shape (3, phases)."""
    potentials = site_potentials(mixture, logs) * mixture.sizes[:, None]
    return float(np.abs(potentials[:, 1:] - potentials[:, :1]).max())


def _equations(mixture: Mixture, logs: FloatArray, constraint: Constraint | None) -> tuple[FloatArray, FloatArray]:
    """Residuals and their slopes; unknowns are the logs phase by phase."""
    phases = logs.shape[1]
    phi = np.exp(logs)
    potentials = site_potentials(mixture, logs)
    slopes_each = site_potential_slopes(mixture, logs)
    unknowns = 3 * phases
    residual = np.empty(unknowns)
    slopes = np.zeros((unknowns, unknowns))
    row = 0
    for phase in range(1, phases):
        residual[row : row + 3] = potentials[:, phase] - potentials[:, 0]
        slopes[row : row + 3, 3 * phase : 3 * phase + 3] = slopes_each[:, :, phase]
        slopes[row : row + 3, 0:3] = -slopes_each[:, :, 0]
        row += 3
    for phase in range(phases):
        residual[row] = phi[:, phase].sum() - 1
        slopes[row, 3 * phase : 3 * phase + 3] = phi[:, phase]
        row += 1
    if constraint is not None:
        residual[row], by_logs = constraint(logs)
        slopes[row] = by_logs.reshape(-1, order="F")
    return residual, slopes


def fixed_fraction(component: int, phase: int, value: float) -> Constraint:
    """The fraction of one component in one phase has a given value."""

    def equation(logs: FloatArray) -> tuple[float, FloatArray]:
        slopes = np.zeros_like(logs)
        slopes[component, phase] = np.exp(logs[component, phase])
        return float(slopes[component, phase] - value), slopes

    return equation


def through_feed(phi_n: float, phi_p: float) -> Constraint:
    """The tie line passes through a feed."""

    def equation(logs: FloatArray) -> tuple[float, FloatArray]:
        phi = np.exp(logs)
        along_n, along_p = phi[0, 1] - phi[0, 0], phi[2, 1] - phi[2, 0]
        from_n, from_p = phi_n - phi[0, 0], phi_p - phi[2, 0]
        slopes = np.zeros_like(logs)
        slopes[0, 1], slopes[2, 1] = from_p, -from_n
        slopes[0, 0], slopes[2, 0] = along_p - from_p, from_n - along_n
        return float(along_n * from_p - along_p * from_n), slopes * phi

    return equation


def along_tangent(start: FloatArray, tangent: FloatArray, length: float) -> Constraint:
    """The fractions lie on the plane across ``tangent`` at ``length`` from ``start`` (all of shape (3, phases))."""

    def equation(logs: FloatArray) -> tuple[float, FloatArray]:
        phi = np.exp(logs)
        return float((tangent * (phi - start)).sum() - length), tangent * phi

    return equation


def family_tangent(mixture: Mixture, logs: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Direction in which a tie line moves along its family.

    Returns
    -------
    by_logs, by_fractions
        Shape (3, 2): change of the logarithms and of the fractions for unit length in the space of fractions.
    """
    slopes = _equations(mixture, logs, _no_constraint)[1][:5]
    null = np.linalg.svd(slopes)[2][-1].reshape(3, 2, order="F")
    fractions = null * np.exp(logs)
    length = float(np.linalg.norm(fractions))
    return null / length, fractions / length


def _no_constraint(logs: FloatArray) -> tuple[float, FloatArray]:
    """Placeholder for the last equation of a tie line when only the first five are wanted."""
    return 0.0, np.zeros_like(logs)
