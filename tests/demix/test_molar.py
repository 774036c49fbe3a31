from __future__ import annotations

import numpy as np
import pytest

from poroscan.demix.interaction import ChiFunction, SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture, excess, ideal_energy
from poroscan.demix.molar import mixture_from_molar

VOLUMES = {"volume_nonsolvent": 18.0, "volume_solvent": 74.0, "volume_polymer": 30000.0}


def molar_energy(moles: np.ndarray, molar_volumes: np.ndarray, g_12, chi_13: float, chi_23: float) -> float:
    """ΔG/RT of n1, n2, n3 moles, as membrane papers write it (Altena and Smolders 1982; Yilmaz and McHugh 1986)."""
    volumes = moles * molar_volumes
    phi = volumes / volumes.sum()
    u2 = phi[1] / (phi[0] + phi[1])
    mixing = (moles * np.log(phi)).sum()
    return mixing + g_12(u2) * moles[0] * phi[1] + chi_13 * moles[0] * phi[2] + chi_23 * moles[1] * phi[2]


FORMS = {
    "constant": (1.0, lambda u: 1.0),
    "polynomial": (SharePolynomial((0.785, 0.665)), lambda u: 0.785 + 0.665 * u),
    "rational": (ShareRational(0.661, 0.417, 0.755), lambda u: 0.661 + 0.417 / (1 - 0.755 * u)),
}


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("swapped", [False, True], ids=["small non-solvent", "small solvent"])
def test_potentials_are_those_of_the_molar_expression(form: str, swapped: bool, rng: np.random.Generator) -> None:
    g_12, function = FORMS[form]
    volumes = dict(VOLUMES)
    if swapped:
        volumes["volume_nonsolvent"], volumes["volume_solvent"] = 74.0, 18.0
    mixture = mixture_from_molar(**volumes, g_12=g_12, chi_13=1.4, chi_23=0.45)
    assert mixture.sizes.min() == 1.0
    v = np.array(list(volumes.values()))
    for phi in rng.dirichlet([2, 2, 2], 4):
        moles = phi / v

        expected = []
        for i in range(3):
            step = np.zeros(3)
            step[i] = 1e-5 * moles[i]
            up, down = (molar_energy(moles + sign * step, v, function, 1.4, 0.45) for sign in (1, -1))
            expected.append((up - down) / (2 * step[i]))
        potentials = mixture.potentials(phi[0], phi[2]) * mixture.sizes
        # the site potential carries +1/N_i − Σφ/N, which vanishes for a pure component: the same reference as ΔG
        np.testing.assert_allclose(potentials, expected, rtol=1e-6, atol=1e-6)


def test_reference_volume_does_not_change_the_free_energy_per_volume() -> None:
    mixture = mixture_from_molar(**VOLUMES, g_12=1.0, chi_13=1.4, chi_23=0.45)
    phi = np.array([0.2, 0.5, 0.3])
    per_site = ideal_energy(mixture, phi) + excess(mixture, phi)[0]
    moles = phi / np.array(list(VOLUMES.values()))
    expected = (
        molar_energy(moles, np.array(list(VOLUMES.values())), lambda u: 1.0, 1.4, 0.45) * 18.0
    )  # one site is the volume of the non-solvent molecule
    assert per_site == pytest.approx(expected, rel=1e-12)


def test_parameters_by_hand() -> None:
    # χ_pn = χ13, χ_sn = g12, χ_ps = χ23 v1/v2, N_i = v_i/v1 (per site of the non-solvent)
    mixture = mixture_from_molar(
        volume_nonsolvent=18.0, volume_solvent=72.0, volume_polymer=18000.0, g_12=1.0, chi_13=1.4, chi_23=0.45
    )
    assert mixture == Mixture(N_p=1000.0, N_s=4.0, N_n=1.0, chi_pn=1.4, chi_ps=0.1125, chi_sn=1.0)


@pytest.mark.parametrize("name", VOLUMES)
@pytest.mark.parametrize("volume", [0.0, -1.0, float("nan")])
def test_volumes_that_are_not_positive_are_refused(name: str, volume: float) -> None:
    with pytest.raises(ValueError, match=f"{name} must be a positive molar volume"):
        mixture_from_molar(**{**VOLUMES, name: volume}, g_12=1.0, chi_13=1.4, chi_23=0.45)


def test_a_polymer_smaller_than_a_solvent_molecule_is_refused() -> None:
    with pytest.raises(ValueError, match="give molar mass over density"):
        mixture_from_molar(**{**VOLUMES, "volume_polymer": 10.0}, g_12=1.0, chi_13=1.4, chi_23=0.45)


def test_other_functions_of_composition_must_be_converted_by_hand() -> None:
    flat = ChiFunction(lambda n, s, p: 1 + 0 * n, lambda n, s, p: (0 * n,) * 3, lambda n, s, p: (0 * n,) * 6)
    with pytest.raises(ValueError, match="must be a SharePolynomial or ShareRational"):
        mixture_from_molar(**VOLUMES, g_12=flat, chi_13=1.4, chi_23=0.45)
