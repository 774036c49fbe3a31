"""From the molar convention of the membrane literature to parameters per lattice site.

Membrane papers write ``ΔG/RT = Σ n_i ln φ_i + g12 n1 φ2 + χ13 n1 φ3 + χ23 n2 φ3`` with 1 the non-solvent, 2 the solvent,
3 the polymer (Altena and Smolders (1982) Macromolecules 15, 1491; Yilmaz and McHugh (1986) J. Appl. Polym. Sci. 31, 997).
χ13 and g12 count per mole of non-solvent, χ23 per mole of *solvent*: without the molar volumes they mean nothing.
Per site of the non-solvent's volume ``χ_pn = χ13``, ``χ_sn = g12``, ``χ_ps = χ23·v1/v2`` and ``N_i = v_i/v1``.
"""

from __future__ import annotations

import math
from dataclasses import replace

from poroscan.demix.interaction import Interaction, Parameter, SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture


def mixture_from_molar(
    *,
    volume_nonsolvent: float,
    volume_solvent: float,
    volume_polymer: float,
    g_12: Parameter,
    chi_13: Parameter,
    chi_23: Parameter,
) -> Mixture:
    """Mixture from molar volumes and parameters in the molar convention.

    Parameters
    ----------
    volume_nonsolvent, volume_solvent, volume_polymer
        Molar volumes v1, v2, v3, all in one unit (cm³/mol); that of the polymer is molar mass over density.
    g_12, chi_13, chi_23
        Non-solvent–solvent, non-solvent–polymer, solvent–polymer. ``g_12`` may be a :class:`SharePolynomial` or
        :class:`ShareRational` in the solvent's share ``u2``.

    Returns
    -------
    Mixture
        On sites of the volume of the smaller of the two liquids, so that no size falls below 1.

    Raises
    ------
    ValueError
        A volume that is not positive, or a function of composition of another kind.
    """
    volumes = {
        "volume_nonsolvent": volume_nonsolvent,
        "volume_solvent": volume_solvent,
        "volume_polymer": volume_polymer,
    }
    for name, volume in volumes.items():
        if not (math.isfinite(volume) and volume > 0):
            raise ValueError(f"{name} must be a positive molar volume, got {volume!r}")
    if volume_polymer < min(volume_nonsolvent, volume_solvent):
        raise ValueError(
            f"volume_polymer ({volume_polymer:g}) is smaller than that of a solvent molecule; give molar mass over density"
        )
    site = min(volume_nonsolvent, volume_solvent)
    per_nonsolvent = site / volume_nonsolvent
    return Mixture(
        N_n=volume_nonsolvent / site,
        N_s=volume_solvent / site,
        N_p=volume_polymer / site,
        chi_pn=scaled(chi_13, per_nonsolvent),
        chi_ps=scaled(chi_23, site / volume_solvent),
        chi_sn=scaled(g_12, per_nonsolvent),
    )


def scaled(parameter: Parameter, factor: float) -> Parameter:
    """An interaction parameter times a factor.

    Raises
    ------
    ValueError
        For a function of composition other than the two share forms, which has to be scaled where it is written.
    """
    if isinstance(parameter, SharePolynomial | ShareRational):
        return replace(parameter, scale=parameter.scale * factor)
    if isinstance(parameter, Interaction):
        raise ValueError(
            "a function of composition in the molar convention must be a SharePolynomial or ShareRational; "
            "convert other functions to parameters per site and make a Mixture from them"
        )
    return float(parameter) * factor
