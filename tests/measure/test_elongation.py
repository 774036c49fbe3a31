from __future__ import annotations

import math

import numpy as np
import pytest
from media import boolean_discs, disc, level_cut

from poroscan.measure.elongation import directed_boundary, estimates
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.section import PixelSize, Section


def measured(pores, particle):
    section = Section(pores & particle, particle, PixelSize(1.0))
    return estimates(section, Shared(section, MeasureSettings()))


def ellipses(radius, *, along, across, rng, number=180):
    """Separate elliptical pores with one axis towards the centre of the particle."""
    particle = disc(radius)
    half = particle.shape[0] // 2
    y, x = np.mgrid[-half : half + 1, -half : half + 1]
    pores, taken = np.zeros_like(particle), np.zeros_like(particle)
    reach = max(along, across)
    for _ in range(number * 30):
        r, t = radius * math.sqrt(rng.uniform(0.1, 1)) - reach - 6, rng.uniform(0, 2 * math.pi)
        if r < 3 * reach:
            continue
        u = (x - r * math.cos(t)) * math.cos(t) + (y - r * math.sin(t)) * math.sin(t)
        v = -(x - r * math.cos(t)) * math.sin(t) + (y - r * math.sin(t)) * math.cos(t)
        body = (u / along) ** 2 + (v / across) ** 2 <= 1
        if not (body & taken).any():
            pores |= body
            taken |= (u / (along + 3)) ** 2 + (v / (across + 3)) ** 2 <= 1
            number -= 1
        if number == 0:
            break
    return pores, particle


@pytest.mark.parametrize(("along", "across"), [(8, 8), (16, 6), (6, 16)])
def test_ellipses_towards_the_centre(along, across, rng):
    # Mean chord of an ellipse along an axis of half-length a: area/width = π a b/2b = π a/2 (Cauchy)
    result = measured(*ellipses(200, along=along, across=across, rng=rng, number=60))
    ratio = result["radial_elongation"]
    assert ratio.value == pytest.approx(along / across, rel=0.06)
    assert ratio.low < along / across * 1.03 < ratio.high * 1.06
    assert result["chord_pore_radial"].value == pytest.approx(math.pi * along / 2, rel=0.06)
    assert result["chord_pore_tangential"].value == pytest.approx(math.pi * across / 2, rel=0.06)


@pytest.mark.parametrize("medium", ["discs", "level cut"])
def test_sponges_have_no_direction(medium, rng):
    particle = disc(150)
    inside = 0
    for _ in range(10):
        if medium == "discs":
            pores = boolean_discs(particle.shape, radius=6.0, eta=0.6, rng=rng)
        else:
            pores = level_cut(particle.shape, length=4.0, fraction=0.5, rng=rng)
        e = measured(pores, particle)["radial_elongation"]
        assert e.value == pytest.approx(1, abs=0.12)
        inside += e.low <= 1 <= e.high
    assert inside >= 8


def test_chords_of_a_level_cut_follow_rice(rng):
    # oracles 2.5: P_L = sqrt(λ2)/π at one half, mean chord = 2 φ/P_L = π ℓ
    particle = disc(300)
    result = measured(level_cut(particle.shape, length=8.0, fraction=0.5, rng=rng), particle)
    for name in ("chord_pore_radial", "chord_pore_tangential"):
        assert result[name].value == pytest.approx(math.pi * 8, rel=0.06)


def test_the_outline_is_no_pore_boundary():
    # One pore fills the section: no boundary is met, so no chord has a length.
    particle = disc(60)
    assert all(math.isnan(e.value) for e in measured(np.ones_like(particle), particle).values())
    assert all(math.isnan(e.value) for e in measured(np.zeros_like(particle), particle).values())


def test_volumes_are_refused():
    with pytest.raises(ValueError, match="pores must be 2-D"):
        directed_boundary(
            np.ones((3, 3, 3), bool),
            np.ones((3, 3, 3), bool),
            centre=(1, 1),
            inner=0,
            blocks=np.ones((3, 3, 3), np.int32),
        )
