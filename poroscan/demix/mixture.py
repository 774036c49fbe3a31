"""Flory–Huggins thermodynamics of polymer (p), solvent (s) and non-solvent (n), per lattice site, in units of kT.

``f = φn/N_n ln φn + φs/N_s ln φs + φp/N_p ln φp + χ_pn φpφn + χ_ps φpφs + χ_sn φsφn``

Flory (1953) *Principles of Polymer Chemistry*; Scott (1949) J. Chem. Phys. 17, 268; Tompa (1956) *Polymer Solutions*.
For χ that depends on composition the same expression holds and every derivative below carries its extra terms.
The formulas are in docs/thermodynamics.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.demix.interaction import FloatArray, Interaction, Parameter, check_parameter

#: Order of the components wherever three stand in one array.
COMPONENTS = ("n", "s", "p")

#: Rounding of fractions that is taken for zero rather than for a mistake.
_ROUNDING = 1e-9


@dataclass(frozen=True, kw_only=True)
class Mixture:
    """Polymer, solvent and non-solvent on a lattice.

    Parameters
    ----------
    N_p, N_s, N_n
        Sites per molecule of polymer, solvent and non-solvent (≥ 1, need not be whole).
    chi_pn, chi_ps, chi_sn
        Interaction parameters per site: polymer–non-solvent, polymer–solvent, solvent–non-solvent. Each a number or a
        function of composition with its derivatives (:class:`poroscan.demix.interaction.Interaction`).

    Raises
    ------
    ValueError
        N below 1, or a parameter that is no number, returns none, or has wrong derivatives.

    Examples
    --------
    >>> m = Mixture(N_p=20, chi_pn=1.5, chi_ps=0.5, chi_sn=1.0)
    >>> float(m.free_energy(0.4, 0.2).round(6))
    -0.429127
    """

    N_p: float
    N_s: float = 1.0
    N_n: float = 1.0
    chi_pn: Parameter
    chi_ps: Parameter
    chi_sn: Parameter

    def __post_init__(self) -> None:
        for name in ("N_p", "N_s", "N_n"):
            size = getattr(self, name)
            if isinstance(size, bool) or not isinstance(size, int | float | np.number) or not 1 <= size < math.inf:
                raise ValueError(f"{name} must be a finite number of sites per molecule, at least 1, got {size!r}")
        for name in ("chi_pn", "chi_ps", "chi_sn"):
            check_parameter(getattr(self, name), name)

    @property
    def sizes(self) -> FloatArray:
        """Sites per molecule in the order n, s, p."""
        return np.array([self.N_n, self.N_s, self.N_p], dtype=float)

    @property
    def is_constant(self) -> bool:
        """True when no interaction parameter depends on composition."""
        return not any(isinstance(chi, Interaction) for chi in (self.chi_pn, self.chi_ps, self.chi_sn))

    def free_energy(self, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
        """Free energy of mixing per site, kT, of the shape of the arguments; pure components have 0.

        Raises
        ------
        ValueError
            Fractions that are negative or sum to more than 1.
        """
        phi = fractions(phi_n, phi_p)
        return np.asarray(ideal_energy(self, phi) + excess(self, phi)[0])

    def potentials(self, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
        """Chemical potentials per site, ``μ_i/N_i``, kT; shape (3, …) in the order n, s, p; −inf where absent.

        ``Σ φ_i μ_i/N_i = f``. Multiply by ``N_i`` for the potential of a molecule.

        Raises
        ------
        ValueError
            Fractions that are negative or sum to more than 1.
        """
        phi = fractions(phi_n, phi_p)
        with np.errstate(divide="ignore"):
            return site_potentials(self, np.log(phi))

    def exchange_potentials(self, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
        """Exchange potentials ``∂f/∂φn`` and ``∂f/∂φp`` (solvent makes up the rest); shape (2, …), kT.

        They equal the differences ``μn/Nn − μs/Ns`` and ``μp/Np − μs/Ns``.

        Raises
        ------
        ValueError
            Fractions that are negative or sum to more than 1.
        """
        n, s, p = self.potentials(phi_n, phi_p)
        return np.stack([n - s, p - s])

    def hessian(self, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
        """Second derivatives ``f_nn, f_np, f_pp`` (solvent makes up the rest); shape (3, …); inf where absent.

        Raises
        ------
        ValueError
            Fractions that are negative or sum to more than 1.
        """
        phi = fractions(phi_n, phi_p)
        second = excess(self, phi)[2]
        with np.errstate(divide="ignore"):
            inverse = 1 / (_column(self.sizes, phi) * phi)
        nn = inverse[0] + inverse[1] + second[0, 0] - 2 * second[0, 1] + second[1, 1]
        cross = inverse[1] + second[0, 2] - second[0, 1] - second[1, 2] + second[1, 1]
        pp = inverse[2] + inverse[1] + second[2, 2] - 2 * second[1, 2] + second[1, 1]
        return np.stack([nn, cross, pp])

    def stability(self, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
        """Least eigenvalue of the scaled Hessian: negative inside the spinodal, zero on it, positive outside.

        With ``y_i = dφ_i/√φ_i`` the second variation is ``y·(1/N + √φ E'' √φ)·y`` on ``Σ √φ_i y_i = 0``; its signs are
        those of the Hessian and it stays finite on the edges and corners of the triangle.

        Raises
        ------
        ValueError
            Fractions that are negative or sum to more than 1.
        """
        return scaled_curvature(self, fractions(phi_n, phi_p))[0]


def fractions(phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> FloatArray:
    """Volume fractions (n, s, p) as one array of shape (3, …).

    Raises
    ------
    ValueError
        Where a fraction is negative or not finite, or non-solvent and polymer sum to more than 1.
    """
    n, p = np.broadcast_arrays(np.asarray(phi_n, dtype=float), np.asarray(phi_p, dtype=float))
    phi = np.stack([n, 1 - n - p, p])
    if not np.isfinite(phi).all():
        raise ValueError("phi_n and phi_p must be finite volume fractions")
    if (phi < -_ROUNDING).any():
        worst = np.unravel_index(np.argmin(phi.min(axis=0)), n.shape)
        raise ValueError(
            f"phi_n and phi_p must be volume fractions that are not negative and sum to at most 1; got phi_n="
            f"{n[worst]:.6g}, phi_p={p[worst]:.6g}"
        )
    return np.maximum(phi, 0.0)  # only rounding below zero is left


def _column(vector: FloatArray, like: FloatArray) -> FloatArray:
    """A vector of three, shaped so that it multiplies an array of shape (3, …)."""
    return vector.reshape((3,) + (1,) * (like.ndim - 1))


def ideal_energy(mixture: Mixture, phi: FloatArray) -> FloatArray:
    """Entropy part ``Σ φ_i/N_i ln φ_i`` of fractions of shape (3, …)."""
    logs = np.log(np.where(phi > 0, phi, 1.0))
    return np.asarray((phi * logs / _column(mixture.sizes, phi)).sum(axis=0))


def excess(mixture: Mixture, phi: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Interaction part of the free energy with its derivatives by the three fractions taken as independent.

    Returns
    -------
    energy, first, second
        Shapes (…), (3, …) and (3, 3, …).
    """
    n, s, p = phi
    energy = np.zeros_like(n)
    first = np.zeros_like(phi)
    second = np.zeros((3, *phi.shape))
    for i, j, chi in ((2, 0, mixture.chi_pn), (2, 1, mixture.chi_ps), (1, 0, mixture.chi_sn)):
        a, b = phi[i], phi[j]
        value = chi.value(n, s, p) if isinstance(chi, Interaction) else float(chi)
        energy = energy + value * a * b
        first[i] += value * b
        first[j] += value * a
        second[i, j] += value
        second[j, i] += value
        if isinstance(chi, Interaction):
            _add_dependence(chi, phi, (i, j), first, second)
    return energy, first, second


def _add_dependence(
    chi: Interaction, phi: FloatArray, pair: tuple[int, int], first: FloatArray, second: FloatArray
) -> None:
    """Add the terms that come from the derivatives of χ itself (in place)."""
    i, j = pair
    product = phi[i] * phi[j]
    slope = chi.gradient(*phi)
    bend = chi.hessian(*phi)
    row = {(0, 0): 0, (0, 1): 1, (0, 2): 2, (1, 1): 3, (1, 2): 4, (2, 2): 5}
    for k in range(3):
        first[k] += slope[k] * product
        for m in range(3):
            second[k, m] += bend[row[min(k, m), max(k, m)]] * product
            # derivative of the product φiφj by φm times the slope by φk, and the other way round
            second[k, m] += slope[k] * ((m == i) * phi[j] + (m == j) * phi[i])
            second[k, m] += slope[m] * ((k == i) * phi[j] + (k == j) * phi[i])


def site_potentials(mixture: Mixture, logs: FloatArray) -> FloatArray:
    """``μ_i/N_i`` from the logarithms of the fractions, shape (3, …): exact for traces far below the smallest float.

    ``μ_i/N_i = (ln φ_i + 1)/N_i − Σ φ_j/N_j + E + E_i − Σ φ_k E_k`` with the interaction part E and its derivatives.
    """
    phi = np.exp(logs)
    sizes = _column(mixture.sizes, phi)
    energy, first, _ = excess(mixture, phi)
    return (logs + 1) / sizes - (phi / sizes).sum(axis=0) + energy + first - (phi * first).sum(axis=0)


def site_potential_slopes(mixture: Mixture, logs: FloatArray) -> FloatArray:
    """``∂(μ_i/N_i)/∂ ln φ_j`` with the three logarithms taken as independent; shape (3, 3, …)."""
    phi = np.exp(logs)
    second = excess(mixture, phi)[2]
    slopes = (second - np.einsum("k...,kj...->j...", phi, second)[None]) * phi[None]
    sizes = _column(mixture.sizes, phi)
    slopes = slopes - (phi / sizes)[None]
    for i in range(3):
        slopes[i, i] += 1 / mixture.sizes[i]
    return slopes


def scaled_curvature(mixture: Mixture, phi: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Least eigenvalue of the scaled second variation, and its direction.

    Returns
    -------
    eigenvalue
        Shape (…); see :meth:`Mixture.stability`.
    direction
        Shape (3, …): the change of fractions dφ (summing to zero) along the softest direction, ``Σ dφ_i²/φ_i = 1``.
    """
    root = np.sqrt(phi / phi.sum(axis=0))
    first_axis, second_axis = _tangent_axes(root)
    second = excess(mixture, phi)[2]
    matrix = root[:, None] * second * root[None, :]
    for i in range(3):
        matrix[i, i] += 1 / mixture.sizes[i]
    aa = np.einsum("i...,ij...,j...->...", first_axis, matrix, first_axis)
    ab = np.einsum("i...,ij...,j...->...", first_axis, matrix, second_axis)
    bb = np.einsum("i...,ij...,j...->...", second_axis, matrix, second_axis)
    angle = 0.5 * np.arctan2(2 * ab, aa - bb) + math.pi / 2  # of the eigenvector with the lesser eigenvalue
    least = 0.5 * (aa + bb) - np.hypot(0.5 * (aa - bb), ab)
    return least, (np.cos(angle) * first_axis + np.sin(angle) * second_axis) * root


def _tangent_axes(root: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Two orthonormal axes perpendicular to the unit vector ``root`` with non-negative entries, shape (3, …)."""
    n, s, p = root
    # Householder reflection that takes root to −(0, 0, 1): the images of the other two unit vectors.
    factor = 1 / (1 + p)
    first = np.stack([1 - n * n * factor, -n * s * factor, -n])
    second = np.stack([-n * s * factor, 1 - s * s * factor, -s])
    return first, second


def params_in_words(mixture: Mixture) -> dict[str, Any]:
    """Sizes and parameters for people: numbers, and functions of the solvent's share of the liquid u as formulas."""
    return {k: v if isinstance(v, float) else str(getattr(mixture, k)) for k, v in params_of(mixture).items()}


def params_of(mixture: Mixture) -> dict[str, Any]:
    """Sizes and parameters as plain values for tables and fingerprints (functions as their ``repr``)."""
    names = ("N_p", "N_s", "N_n", "chi_pn", "chi_ps", "chi_sn")
    values = {name: getattr(mixture, name) for name in names}
    return {name: repr(v) if isinstance(v, Interaction) else float(v) for name, v in values.items()}
