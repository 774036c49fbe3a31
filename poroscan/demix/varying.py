"""Exchange potentials of interaction parameters that depend on composition, for the particle solver."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from poroscan.demix.interaction import Interaction
from poroscan.demix.mixture import Mixture

FloatArray = npt.NDArray[np.floating]


def varying_potentials(mixture: Mixture, phi_n: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Part of ∂f/∂φp and ∂f/∂φn (solvent makes up the rest) that varying interaction parameters add.

    With E = Σ χ_ij(φ) φi φj over the pairs whose χ is a function of composition, this is E_p − E_s and E_n − E_s, E_k = Σ χ_ij
    (δ_ik φj + δ_jk φi) + φi φj ∂χ_ij/∂φk. Constant parameters are left to the compiled loop.

    Parameters
    ----------
    mixture
        Thermodynamics.
    phi_n, phi_p
        Fractions of any shape. Thermal noise may leave them slightly outside the triangle, where a χ need not be defined:
        χ is evaluated at the nearest composition inside (negative ones set to 0, the three divided by their sum).

    Returns
    -------
    polymer, nonsolvent
        Arrays of that shape, kT per site.
    """
    phi = np.maximum(np.stack([phi_n, 1 - phi_n - phi_p, phi_p]).astype(float), 0.0)
    phi /= phi.sum(axis=0)
    first = np.zeros_like(phi)
    for i, j, chi in ((2, 0, mixture.chi_pn), (2, 1, mixture.chi_ps), (1, 0, mixture.chi_sn)):
        if isinstance(chi, Interaction):
            value = chi.value(*phi)
            first[i] += value * phi[j]
            first[j] += value * phi[i]
            for k, slope in enumerate(chi.gradient(*phi)):
                first[k] += slope * phi[i] * phi[j]
    return first[2] - first[1], first[0] - first[1]
