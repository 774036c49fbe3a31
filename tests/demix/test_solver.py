"""The compiled step against a slow version, its invariances and its conservation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from solver_cases import BINARY, TERNARY, links, quiet_settings, slow_laplacian, slow_rates

from poroscan.demix.lattice import lattice
from poroscan.demix.stability import arrest, hessian_matrix, implicit_rates, mobility
from poroscan.demix.stepper import Stepper
from poroscan.errors import SimulationError

SHAPES = [(12, 16), (8, 6, 10)]


def _random(rng, shape):
    p = 0.1 + 0.5 * rng.random(shape)
    return p, 0.05 + 0.3 * rng.random(shape)


@pytest.mark.parametrize("shape", SHAPES)
def test_rates_equal_slow_version(shape, rng):
    settings = quiet_settings(arrest_fraction=0.4, kappa_nonsolvent=0.4)
    mixture = replace(TERNARY, N_s=2.0)
    p, n = _random(rng, shape)
    fast = Stepper(mixture, settings, p, n).rates(1.0)
    for got, slow in zip(fast, slow_rates(mixture, settings, p, n), strict=True):
        # the compiled arrest factor is within 2 % (six squarings); the rest is exact
        np.testing.assert_allclose(got, slow, rtol=0, atol=0.02 * np.abs(slow).max())
    free = replace(settings, arrest_fraction=5.0)
    fast = Stepper(mixture, free, p, n).rates(1.0)
    for got, slow in zip(fast, slow_rates(mixture, free, p, n), strict=True):
        np.testing.assert_allclose(got, slow, rtol=0, atol=3e-6 * np.abs(slow).max())


@pytest.mark.parametrize("shape", SHAPES)
def test_the_loop_with_noise_has_the_same_fluxes(shape, rng):
    """The compiled loop with thermal flux is another one: with vanishing noise it must give what the quiet one gives."""
    settings = quiet_settings(arrest_fraction=0.4, kappa_nonsolvent=0.4)
    p, n = _random(rng, shape)
    quiet = Stepper(TERNARY, settings, p, n).rates(1.0)
    for got, expected in zip(Stepper(TERNARY, replace(settings, noise=1e-24), p, n).rates(1.0), quiet, strict=True):
        assert (got != expected).any()
        np.testing.assert_allclose(got, expected, rtol=0, atol=1e-10)


@pytest.mark.parametrize("shape", SHAPES)
def test_symbol_is_that_of_the_laplacian(shape, rng):
    field = rng.standard_normal(shape)
    spectral = np.fft.irfftn(-lattice(shape).symbol() * np.fft.rfftn(field), s=shape, axes=range(field.ndim))
    np.testing.assert_allclose(spectral, slow_laplacian(field), atol=1e-12)


def test_laplacian_error_has_no_direction():
    """The symbol is q² − q⁴/12 + O(q⁶) whatever the direction; a five-point stencil is not."""
    weights = dict(links(2))
    q = 0.3
    for angle in np.linspace(0, np.pi / 2, 7):
        k = q * np.array([np.cos(angle), np.sin(angle)])
        symbol = sum(2 * w * (1 - np.cos(np.dot(step, k))) for step, w in weights.items())
        assert symbol == pytest.approx(q**2 - q**4 / 12, abs=2e-3 * q**4)


@pytest.mark.parametrize("precision", ["float32", "float64"])
def test_mass_to_round_off(precision, rng):
    settings = quiet_settings(precision=precision, noise=0.01)
    p, n = _random(rng, (32, 32))
    stepper = Stepper(TERNARY, settings, p, n, seed=3)
    before = [float(a.mean(dtype=float)) for a in stepper.fields()]
    steps = 200
    for _ in range(steps):
        stepper.step(0.2)
    after = [float(a.mean(dtype=float)) for a in stepper.fields()]
    tolerance = 1e-12 * steps if precision == "float64" else 1e-7
    np.testing.assert_allclose(after, before, rtol=0, atol=tolerance)


def test_turning_the_field_turns_the_result(rng):
    p, n = _random(rng, (16, 16))
    straight = Stepper(TERNARY, quiet_settings(), p, n)
    turned = Stepper(TERNARY, quiet_settings(), np.rot90(p), np.rot90(n))
    moved = Stepper(TERNARY, quiet_settings(), np.roll(p, (3, 5), (0, 1)), np.roll(n, (3, 5), (0, 1)))
    for _ in range(20):
        for stepper in (straight, turned, moved):
            stepper.step(0.2)
    np.testing.assert_allclose(np.rot90(straight.fields()[0]), turned.fields()[0], atol=1e-11)
    np.testing.assert_allclose(np.roll(straight.fields()[0], (3, 5), (0, 1)), moved.fields()[0], atol=1e-11)


def test_same_seed_same_bits(rng):
    p, n = _random(rng, (32, 32))
    settings = quiet_settings(noise=0.01, precision="float32")
    runs = []
    for seed in (1, 1, 2):
        stepper = Stepper(TERNARY, settings, p, n, seed=seed)
        for _ in range(10):
            stepper.step()
        runs.append(stepper.fields()[0].tobytes())
    assert runs[0] == runs[1] != runs[2]


def energy(mixture, settings, p, n):
    """F on the lattice: Σf + ½Σκ w (Δφ)² over the links."""
    total = mixture.free_energy(n, p).sum()
    for step, w in links(p.ndim):
        back = [-s for s in step]
        for field, kappa in ((p, settings.kappa_polymer), (n, settings.kappa_nonsolvent)):
            total += 0.5 * kappa * w * ((np.roll(field, back, (0, 1)) - field) ** 2).sum()
    return float(total)


@pytest.mark.parametrize(("fraction", "chi"), [(0.5, 2.5), (0.35, 3.0)])
def test_energy_never_rises_without_noise(fraction, chi, rng):
    mixture = replace(BINARY, chi_ps=chi)
    settings = quiet_settings(polymer_mobility=4.0, kappa_polymer=1.0)
    p = fraction + 0.02 * rng.standard_normal((64, 64))
    n = np.zeros_like(p)
    stepper = Stepper(mixture, settings, p, n)
    energies = [energy(mixture, settings, p, n)]
    for _ in range(400):
        stepper.step(0.5)
        energies.append(energy(mixture, settings, *stepper.fields()))
    assert np.diff(energies).max() <= 1e-9 * abs(energies[0])
    assert energies[-1] < energies[0] - 1


def test_ternary_energy_never_rises(rng):
    settings = quiet_settings(polymer_mobility=2.0, kappa_polymer=1.0, kappa_nonsolvent=1.0)
    p = 0.2 + 0.01 * rng.standard_normal((48, 48))
    n = 0.55 + 0.01 * rng.standard_normal((48, 48))
    mixture = replace(TERNARY, N_p=5, chi_pn=2.5)
    stepper = Stepper(mixture, settings, p, n)
    energies = []
    for _ in range(600):
        stepper.step(0.5)
        energies.append(energy(mixture, settings, *stepper.fields()))
    assert np.diff(energies).max() <= 1e-9 * abs(energies[0])
    assert stepper.fields()[0].std() > 0.05  # it has demixed


def test_outside_the_spinodal_nothing_grows(rng):
    p = 0.6 + 0.01 * rng.standard_normal((32, 32))
    n = 0.1 + 0.01 * rng.standard_normal((32, 32))
    stepper = Stepper(TERNARY, quiet_settings(), p, n)
    spread = [stepper.fields()[0].std()]
    for _ in range(60):
        stepper.step(1.0)
        spread.append(stepper.fields()[0].std())
    assert (np.diff(spread) < 0).all()


def test_error_in_dt_is_of_first_order(rng):
    p = 0.2 + 0.02 * np.cos(2 * np.pi * np.arange(32) / 16)[:, None] * np.ones(8)
    n = 0.45 + 0.02 * np.sin(2 * np.pi * np.arange(32) / 16)[:, None] * np.ones(8)
    ends = {}
    for steps in (40, 80, 160, 1280):
        stepper = Stepper(TERNARY, quiet_settings(kappa_polymer=2.0, kappa_nonsolvent=2.0), p, n)
        for _ in range(steps):
            stepper.step(40.0 / steps)
        ends[steps] = stepper.fields()[0]
    errors = [np.abs(ends[s] - ends[1280]).max() for s in (40, 80, 160)]
    assert 1.8 < errors[0] / errors[1] < 2.3
    assert 1.8 < errors[1] / errors[2] < 2.4


def test_mobility_is_never_negative_and_keeps_traces_diffusing():
    settings = quiet_settings(arrest_fraction=0.6)
    p, n = np.meshgrid(np.linspace(0.001, 0.9, 20), np.linspace(0.001, 0.9, 20))
    inside = p + n < 0.999
    assert np.linalg.eigvalsh(mobility(settings, n[inside], p[inside])).min() >= 0
    # a trace of non-solvent in solvent: D = M_nn f_nn → 1
    product = mobility(settings, 1e-6, 1e-9) @ hessian_matrix(TERNARY, 1e-6, 1e-9)
    assert np.linalg.eigvals(product).real.max() == pytest.approx(1.0, abs=1e-4)


def test_arrest_falls_by_orders_of_magnitude():
    settings = quiet_settings(arrest_fraction=0.6, arrest_width=0.02, arrest_floor=1e-4)
    factor = arrest(settings, np.array([0.4, 0.6, 0.7, 0.9]))
    assert factor[0] == pytest.approx(1, abs=1e-3)
    assert factor[1] == pytest.approx(0.5, abs=1e-3)
    assert factor[2] < 0.01
    assert factor[3] == pytest.approx(1e-4, rel=0.02)


def test_implicit_rates_bound_pure_diffusion():
    ideal = replace(BINARY, chi_ps=0.0)
    diffusion, _ = implicit_rates(ideal, quiet_settings(polymer_mobility=1.0))
    assert diffusion == pytest.approx(0.55, rel=0.02)  # half of D = 1, with the margin of 1.1


def test_bad_fields_are_refused(rng):
    p, n = _random(rng, (16, 16))
    settings = quiet_settings()
    with pytest.raises(ValueError, match="one shape"):
        Stepper(TERNARY, settings, p, n[:8])
    with pytest.raises(ValueError, match="finite"):
        Stepper(TERNARY, settings, np.where(p > 0.3, np.nan, p), n)
    with pytest.raises(ValueError, match="none negative, their sum at most 1"):
        Stepper(TERNARY, settings, p + 0.9, n)
    with pytest.raises(ValueError, match="at least 4 cells"):
        Stepper(TERNARY, settings, p[:3], n[:3])


def test_unstable_step_is_an_error(rng):
    p, n = _random(rng, (16, 16))
    wild = replace(TERNARY, chi_pn=40.0)
    stepper = Stepper(wild, quiet_settings(kappa_polymer=0.01, kappa_nonsolvent=0.01), p, n)

    def run() -> None:
        for _ in range(3000):
            stepper.step(50.0)

    with pytest.raises(SimulationError, match="unstable at step"):
        run()


def test_step_control_refuses_a_step_too_long(rng):
    p, n = _random(rng, (16, 16))
    stepper = Stepper(replace(TERNARY, chi_pn=4.0), quiet_settings(max_step=8.0, max_change=0.002), p, n)
    assert stepper.step() < 1.0
    assert stepper.refused > 0


def test_a_run_goes_on_from_what_noise_left(rng):
    """A start must hold fractions; a run that is taken up again may hold what thermal noise makes of traces, and no more."""
    p, n = _random(rng, (16, 16))
    p[3, 4] = -0.1
    with pytest.raises(ValueError, match="none negative, their sum at most 1"):
        Stepper(TERNARY, quiet_settings(), p, n)
    again = Stepper(TERNARY, quiet_settings(), p, n, count=7)
    assert again.fields()[0][3, 4] == -0.1
    p[3, 4] = -0.3
    with pytest.raises(ValueError, match="none negative, their sum at most 1"):
        Stepper(TERNARY, quiet_settings(), p, n, count=7)
