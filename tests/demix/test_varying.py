"""Interaction parameters that depend on composition, in the solver."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from solver_cases import TERNARY, formulation, link_mean, links, quiet_settings, shifted, slow_laplacian

from poroscan.demix.interaction import ChiFunction, SharePolynomial, ShareRational
from poroscan.demix.lattice import lattice
from poroscan.demix.particle import simulate
from poroscan.demix.stability import hessian_matrix, mobility
from poroscan.demix.stepper import Stepper
from poroscan.demix.varying import varying_potentials
from poroscan.errors import SimulationError

#: χ_sn in the solvent's share of the liquid, χ_ps in the polymer fraction (a form of the literature on polymer solutions)
BY_POLYMER = ChiFunction(
    lambda n, s, p: 0.4 + 0.3 * p**2,
    lambda n, s, p: (0 * n, 0 * n, 0.6 * p),
    lambda n, s, p: (0 * n, 0 * n, 0 * n, 0 * n, 0 * n, 0.6 + 0 * n),
)
VARYING = replace(TERNARY, chi_sn=ShareRational(0.3, 0.5, 0.4), chi_ps=BY_POLYMER)


def _random(rng, shape):
    p = 0.1 + 0.5 * rng.random(shape)
    return p, 0.05 + 0.3 * rng.random(shape)


@pytest.mark.parametrize("shape", [(12, 16), (8, 6, 10)])
def test_a_constant_function_is_the_number(shape, rng):
    p, n = _random(rng, shape)
    number = Stepper(TERNARY, quiet_settings(), p, n)
    function = Stepper(replace(TERNARY, chi_sn=SharePolynomial((1.0,))), quiet_settings(), p, n)
    for a, b in zip(number.rates(1.0), function.rates(1.0), strict=True):
        np.testing.assert_allclose(b, a, rtol=0, atol=1e-12 * np.abs(a).max())


def test_potentials_are_slopes_of_the_energy(rng):
    """Central differences of the free energy, less what the constant parameter and the entropy give."""
    p, n = _random(rng, (40,))
    rest = replace(VARYING, chi_sn=0.0, chi_ps=0.0)
    h = 1e-5

    def energy(x, y):
        return VARYING.free_energy(x, y) - rest.free_energy(x, y)

    got_p, got_n = varying_potentials(VARYING, n, p)
    np.testing.assert_allclose(got_p, (energy(n, p + h) - energy(n, p - h)) / (2 * h), atol=1e-8)
    np.testing.assert_allclose(got_n, (energy(n + h, p) - energy(n - h, p)) / (2 * h), atol=1e-8)


def test_rates_equal_slow_version(rng):
    """Mobility × difference of the mixture's own exchange potentials over every link (docs/simulation.md)."""
    settings = quiet_settings(polymer_mobility=0.4)
    p, n = _random(rng, (10, 12))
    s = 1 - p - n
    e_n, e_p = VARYING.exchange_potentials(n, p)
    mu = {"p": e_p - 0.7 * slow_laplacian(p), "n": e_n - 0.7 * slow_laplacian(n), "s": np.zeros_like(p)}
    phi = {"p": p, "n": n, "s": s}
    change = {name: np.zeros_like(p) for name in "pns"}
    for step, weight in links(2):
        for a, b in (("p", "n"), ("p", "s"), ("n", "s")):
            m = weight * (0.4 if "p" in (a, b) else 1.0)
            m = m * link_mean(phi[a], shifted(phi[a], step)) * link_mean(phi[b], shifted(phi[b], step))
            flux = m * ((shifted(mu[a], step) - mu[a]) - (shifted(mu[b], step) - mu[b]))
            for name, sign in ((a, 1), (b, -1)):
                change[name] += sign * (flux - shifted(flux, [-x for x in step]))
    for got, name in zip(Stepper(VARYING, settings, p, n).rates(1.0), "pn", strict=True):
        np.testing.assert_allclose(got, change[name], rtol=0, atol=3e-6 * np.abs(change[name]).max())


def test_growth_rate():
    """Largest eigenvalue of −λM(H + λK) with the mixture's Hessian (Cahn 1961), inside the spinodal."""
    n, p = 0.5, 0.15
    settings = quiet_settings(kappa_polymer=1.0, kappa_nonsolvent=1.0, polymer_mobility=0.4)
    length, mode = 128, 4
    symbol = lattice((length, 4)).symbol()[mode, 0]
    matrix = -symbol * mobility(settings, n, p) @ (hessian_matrix(VARYING, n, p) + symbol * np.eye(2))
    values, vectors = np.linalg.eig(matrix)
    best = int(np.argmax(values.real))
    wave = 1e-6 * np.cos(2 * np.pi * mode * np.arange(length) / length)[:, None] * np.ones(4)
    vector = vectors[:, best].real
    rates = Stepper(VARYING, settings, p + vector[0] * wave, n + vector[1] * wave).rates(1.0)
    got = [(rate * wave).sum() / (wave**2).sum() for rate in rates]
    np.testing.assert_allclose(got, values.real[best] * vector, rtol=1e-3, atol=1e-9)
    assert values.real[best] > 0


def test_outside_the_triangle_the_nearest_composition_counts():
    inside = varying_potentials(VARYING, np.array([0.0]), np.array([0.4]))
    outside = varying_potentials(VARYING, np.array([-0.05]), np.array([0.42]))
    np.testing.assert_allclose(outside, inside, atol=1e-12)  # 0.42 : 0.63 is 0.4 : 0.6


def test_a_function_that_fails_in_the_run_is_an_error(rng):
    """NaN where nobody looked beforehand: the run stops, no field comes out."""
    hole = ChiFunction(
        lambda n, s, p: np.where(np.abs(p - 0.31234) < 1e-4, np.nan, 0.5),
        lambda n, s, p: (0 * n,) * 3,
        lambda n, s, p: (0 * n,) * 6,
    )
    p, n = _random(rng, (16, 16))
    p[4, 5] = 0.31234
    with pytest.raises(SimulationError, match="a fraction is not finite"):
        Stepper(replace(TERNARY, chi_ps=hole), quiet_settings(), p, n).step()


def test_a_whole_particle_with_a_polynomial():
    """χ_sn falling with the solvent's share: a drop and its bath exchange about as with a constant of its mean, not the same."""
    grid = {"cells": 64, "radius": 22.0, "end_time": 0.2, "record_every": 0.02}
    recipe = formulation(sn=SharePolynomial((0.8, -0.6)), **grid)
    varying, constant = simulate(recipe, seed=2), simulate(formulation(sn=0.5, **grid), seed=2)
    assert varying.polymer.min() >= 0
    assert varying.polymer.tobytes() != constant.polymer.tobytes()
    left, expected = varying.path[-1], constant.path[-1]
    assert left.solvent == pytest.approx(expected.solvent, abs=0.08)
    assert left.solvent != pytest.approx(expected.solvent, abs=1e-4)
