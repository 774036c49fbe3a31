"""Growth of single modes, the most unstable wavelength, interface, coarsening. Sources: Cahn (1961) Acta Metall. 9, 795;
Cahn and Hilliard (1958) J. Chem. Phys. 28, 258."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from solver_cases import BINARY, TERNARY, links, quiet_settings

from poroscan.demix.lattice import lattice
from poroscan.demix.stability import hessian_matrix, mobility
from poroscan.demix.stepper import Stepper

# Flory–Huggins mixtures with M = κ = 1: N, χ, φ, f'', k_m, λ_m, R_m (closed form, Cahn 1961)
CAHN = [
    (1, 3.0, 0.5, -2.0, 1.0, 6.283185, 1.0),
    (20, 1.5, 0.2, -1.5, 0.8660254, 7.255197, 0.5625),
    (100, 0.7, 0.1, -0.1888889, 0.3073182, 20.445214, 0.00891975),
]
FINE = 16.0  # the tables have κ = 1; κ = FINE² sees the same physics on a grid FINE times finer


def _growth(mixture, settings, phi_p, phi_n, mode, length, eigenvector=(1.0, 0.0), dt=1e-3):
    wave = 1e-6 * np.cos(2 * np.pi * mode * np.arange(length) / length)[:, None] * np.ones(4)
    stepper = Stepper(mixture, settings, phi_p + eigenvector[0] * wave, phi_n + eigenvector[1] * wave)
    before = np.array([(a[:, 0] * wave[:, 0]).sum() for a in stepper.fields()])
    for _ in range(3):
        stepper.step(dt)
    after = np.array([(a[:, 0] * wave[:, 0]).sum() for a in stepper.fields()])
    strongest = int(np.argmax(np.abs(eigenvector)))
    mean = (phi_p, phi_n)[strongest] * wave.sum()
    return float(np.log((after[strongest] - mean) / (before[strongest] - mean)) / (3 * dt))


@pytest.mark.parametrize(("N", "chi", "phi", "curvature", "k_m", "wavelength", "rate"), CAHN)
def test_binary_growth_rate(N, chi, phi, curvature, k_m, wavelength, rate):
    mixture = replace(BINARY, N_p=N, chi_ps=chi)
    assert hessian_matrix(mixture, 1e-12, phi)[0, 0] == pytest.approx(curvature, rel=1e-6)
    length = 256
    for share in (0.5, 1.0, 1.3):
        mode = round(share * k_m / FINE * length / (2 * np.pi)) or 1
        k = 2 * np.pi * mode / length * FINE
        settings = quiet_settings(kappa_polymer=FINE**2, polymer_mobility=1 / (phi * (1 - phi)))
        expected = -(k**2) * (curvature + k**2)
        got = _growth(mixture, settings, phi, 0.0, mode, length, dt=1e-4 * FINE**2) * FINE**2
        # the lattice's k² is k²(1 − k²h²/12): 0.1 % needs (k/FINE)²/12 below it
        symbol = lattice((length, 4)).symbol()[mode, 0] * FINE**2
        assert got == pytest.approx(-symbol * (curvature + symbol), rel=1e-3)
        assert got == pytest.approx(expected, rel=4e-3, abs=0.004 * rate)


def test_most_unstable_wavelength():
    """Of all modes of a noisy field the one nearest to k_m = 1 grows fastest (N=1, χ=3, φ=½)."""
    length, fine = 512, 8.0
    settings = quiet_settings(kappa_polymer=fine**2, polymer_mobility=4.0)
    field = np.zeros((length, 4))
    field[0] = 1.0  # a delta function holds every mode with the same amplitude
    p = 0.5 + 1e-6 * (field - field.mean())
    stepper = Stepper(BINARY, settings, p, np.zeros_like(p))
    rates = np.fft.rfft(stepper.rates(1.0)[0][:, 0]).real / np.fft.rfft(p[:, 0] - 0.5).real.clip(1e-9) * fine**2
    k = 2 * np.pi * np.arange(rates.size) / length * fine
    best = 1 + int(np.argmax(rates[1:]))
    assert k[best] == pytest.approx(1.0, abs=k[1])
    assert 2 * np.pi / k[best] == pytest.approx(6.283185, rel=0.1)
    assert rates[best] == pytest.approx(1.0, rel=5e-3)


@pytest.mark.parametrize("composition", [(0.4, 0.2), (0.5, 0.15), (0.6, 0.1)])
def test_ternary_growth_rate(composition):
    """Largest eigenvalue of −λM(H + λK), along its own direction."""
    n, p = composition
    settings = quiet_settings(kappa_polymer=1.0, kappa_nonsolvent=1.0, polymer_mobility=0.4)
    length, mode = 128, 6
    symbol = lattice((length, 4)).symbol()[mode, 0]
    matrix = -symbol * mobility(settings, n, p) @ (hessian_matrix(TERNARY, n, p) + symbol * np.eye(2))
    values, vectors = np.linalg.eig(matrix)
    best = int(np.argmax(values.real))
    got = _growth(TERNARY, settings, p, n, mode, length, eigenvector=tuple(vectors[:, best].real))
    assert got == pytest.approx(values.real[best], rel=1e-3)


def test_ternary_hessian_of_the_table():
    """H at (φn, φp) = (0.4, 0.2): [[3, 2.5], [2.5, 1.75]] in the order (n, p)."""
    np.testing.assert_allclose(hessian_matrix(TERNARY, 0.4, 0.2), [[1.75, 2.5], [2.5, 3.0]], atol=1e-12)


def test_error_in_dx_is_of_second_order():
    """Growth rate of one wavelength against the continuum: halving the cell quarters the error."""
    errors = []
    for fine in (2.0, 4.0, 8.0):
        length = int(32 * fine)
        settings = quiet_settings(kappa_polymer=fine**2, polymer_mobility=4.0)
        k = 2 * np.pi * 4 / length * fine
        got = _growth(BINARY, settings, 0.5, 0.0, 4, length, dt=1e-6 * fine**2) * fine**2
        errors.append(abs(got + k**2 * (-2 + k**2)))
    assert 3.7 < errors[0] / errors[1] < 4.3
    assert 3.7 < errors[1] / errors[2] < 4.3


@pytest.mark.parametrize(("N", "chi", "lean", "rich", "tension"), [
    (1, 3.0, 0.070720182, 0.92927982, 0.288272),
    (1, 2.5, 0.14479411, 0.85520589, 0.130258),
    (20, 1.5, 1.5796243e-6, 0.84812351, 0.250886),
])  # fmt: skip
def test_interface_tension(N, chi, lean, rich, tension):
    """σ/√κ = ∫√(2Δf)dφ; excess energy of a relaxed flat interface, at least six nodes across it."""
    mixture = replace(BINARY, N_p=N, chi_ps=chi)
    kappa = 12.0
    settings = quiet_settings(kappa_polymer=kappa, polymer_mobility=4.0, max_step=4.0)
    length = 192
    x = np.arange(length)
    inside = 0.5 * (np.tanh((x - length / 4) / 5) - np.tanh((x - 3 * length / 4) / 5))
    p = (lean + (rich - lean) * inside)[:, None] * np.ones(4)
    stepper = Stepper(mixture, settings, p, np.zeros_like(p))
    for _ in range(2500):
        stepper.step(2.0)
    p = stepper.fields()[0]
    assert p.min() > -1e-3  # positivity is not forced: docs/simulation.md
    f = mixture.free_energy(np.zeros_like(p), np.clip(p, 0, 1))
    f_lean, f_rich = mixture.free_energy(0.0, lean), mixture.free_energy(0.0, rich)
    excess = (f - (f_lean + (f_rich - f_lean) * (p - lean) / (rich - lean))).sum()
    for step, w in links(2):
        excess += 0.5 * kappa * w * ((np.roll(p, [-s for s in step], (0, 1)) - p) ** 2).sum()
    assert excess / 4 / 2 / np.sqrt(kappa) == pytest.approx(tension, rel=0.01)
    assert p.max() == pytest.approx(rich, abs=2e-3)


@pytest.mark.slow
def test_coarsening_slows_as_it_should(rng):
    """Interface length grows about as t^(1/3) (Lifshitz and Slyozov 1961; Huse 1986): wide gate, trend only."""
    settings = quiet_settings(kappa_polymer=1.0, polymer_mobility=4.0, precision="float32")
    p = 0.5 + 0.05 * rng.standard_normal((192, 192))
    stepper = Stepper(replace(BINARY, chi_ps=2.5), settings, p, np.zeros_like(p))
    lengths = []
    for until in (100, 200, 400, 800, 1600):
        while stepper.time < until:
            stepper.step(0.5)
        high = stepper.fields()[0] > 0.5
        edges = sum(int((high != np.roll(high, 1, axis)).sum()) for axis in (0, 1))
        lengths.append(high.size / edges)
    exponents = np.diff(np.log(lengths)) / np.log(2)
    assert (exponents > 0).all()
    assert 0.22 < exponents[1:].mean() < 0.40
