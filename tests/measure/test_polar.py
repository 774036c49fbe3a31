from __future__ import annotations

import math

import numpy as np
import pytest
from media import disc, level_cut
from scipy import stats

from poroscan.measure.polar import amplitude_interval, dipole, estimates
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.section import PixelSize, Section


def field(radius=300):
    particle = disc(radius)
    half = particle.shape[0] // 2
    y, x = np.mgrid[-half : half + 1, -half : half + 1]
    return particle, x, y, np.arctan2(-y, x)


@pytest.mark.parametrize("direction", [0, 37, 130, -75, 180])
def test_dipole_gives_its_amplitude_and_direction(direction, rng):
    # oracles 1.9: φ0 (1 + ε cos θ) has the first-harmonic amplitude ε
    particle, _, _, theta = field()
    pores = particle & (rng.random(particle.shape) < 0.5 * (1 + 0.4 * np.cos(theta - math.radians(direction))))
    fit = dipole(pores, particle)
    print(f"\namplitude {fit.amplitude:.4f} (0.4), direction {fit.direction:.2f}° ({direction}°)")
    assert fit.amplitude == pytest.approx(0.4, rel=0.02)
    assert abs((fit.direction - direction + 180) % 360 - 180) < 1
    assert fit.mean == pytest.approx(0.5, abs=0.01)


def test_up_on_the_screen_is_plus_90_degrees():
    particle, _, y, _ = field(60)
    assert dipole(particle & (y < 0), particle).direction == pytest.approx(90, abs=0.5)


def test_half_filled_disc():
    # Square wave of angle: first harmonic 4/π × ½ over the mean ½ = 4/π
    particle, x, _, _ = field()
    assert dipole(particle & (x > 0), particle).amplitude == pytest.approx(4 / math.pi, rel=0.01)


@pytest.mark.parametrize("turns", [1, 2, 3])
def test_turning_the_picture_turns_the_direction(turns, rng):
    particle, _, _, theta = field(100)
    pores = particle & (rng.random(particle.shape) < 0.4 * (1 + 0.5 * np.cos(theta - 0.4)))
    still, turned = dipole(pores, particle), dipole(np.rot90(pores, turns), np.rot90(particle, turns))
    assert turned.amplitude == pytest.approx(still.amplitude, rel=1e-9)
    assert (turned.direction - still.direction - 90 * turns) % 360 == pytest.approx(0, abs=1e-6) or (
        turned.direction - still.direction - 90 * turns
    ) % 360 == pytest.approx(360, abs=1e-6)


def test_an_odd_outline_filled_evenly_shows_nothing():
    particle, x, y, _ = field(150)
    odd = particle & ~((x > 40) & (y > 30))
    pores = odd & ((x + y) % 2 == 0)
    assert dipole(pores, odd).amplitude < 0.003


def test_uniform_structure_is_zero_within_its_interval(rng):
    particle, _, _, _ = field(120)
    covered = 0
    for _ in range(40):
        pores = particle & level_cut(particle.shape, length=4.0, fraction=0.5, rng=rng)
        section = Section(pores, particle, PixelSize(1.0))
        result = estimates(section, Shared(section, MeasureSettings()))
        e = result["polar_asymmetry"]
        assert 0 <= e.low <= e.value <= e.high
        covered += e.low == 0
        if e.low == 0:
            direction = result["polar_direction"]
            assert direction.high - direction.low == 360
    assert covered >= 35


def test_a_radial_gradient_does_not_widen_the_interval(rng):
    particle, x, y, _ = field(200)
    r = np.hypot(x, y) / 200
    section = Section(particle & (rng.random(particle.shape) < 0.1 + 0.8 * r), particle, PixelSize(1.0))
    shared = Shared(section, MeasureSettings())
    plain = dipole(section.pores, particle, blocks=shared.blocks)
    informed = dipole(section.pores, particle, blocks=shared.blocks, expected=(0.1 + 0.8 * r).astype(np.float32))
    assert np.trace(informed.cov) < 0.3 * np.trace(plain.cov)
    assert informed.amplitude == plain.amplitude


def test_amplitude_interval_inverts_the_rice_law():
    # End points by definition: at the true amplitude the observed one is the 97.5 % or 2.5 % point (scipy's own Rice law).
    low, high = amplitude_interval(5.0, 1.0)
    assert stats.rice.cdf(5.0, low) == pytest.approx(0.975, abs=1e-6)
    assert stats.rice.cdf(5.0, high) == pytest.approx(0.025, abs=1e-6)
    assert amplitude_interval(1.0, 1.0)[0] == 0
    assert amplitude_interval(0.1, 1.0)[1] == amplitude_interval(1.0, 1.0)[1] > 2
    assert amplitude_interval(0.3, 0.0) == (0.3, 0.3)


def test_rice_interval_covers(rng):
    for truth in (0.0, 1.0, 3.0):
        draws = np.hypot(truth + rng.standard_normal(1500), rng.standard_normal(1500))
        ends = np.array([amplitude_interval(d, 1.0) for d in draws])
        assert np.mean((ends[:, 0] <= truth) & (truth <= ends[:, 1])) == pytest.approx(
            0.95 if truth else 0.975, abs=0.03
        )


def test_no_pores_and_thin_masks():
    particle = disc(20)
    assert dipole(np.zeros_like(particle), particle) is None
    assert dipole(np.ones((1, 1), bool), np.ones((1, 1), bool)) is None
    with pytest.raises(ValueError, match="particle must be 2-D"):
        dipole(np.ones((2, 2, 2), bool), np.ones((2, 2, 2), bool))
