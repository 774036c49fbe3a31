from __future__ import annotations

import math

import numpy as np
import pytest
from media import boolean_discs, disc, level_cut, ring_cut

from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.measure.structure_factor import find_peak, part, structure_factor
from poroscan.section import PixelSize, Section


def measured(pores, particle, view="interior"):
    section = Section(pores & particle, particle, PixelSize(1.0), view=view)
    settings = MeasureSettings()
    return part(section, settings, shared=Shared(section, settings), rng=np.random.default_rng(0))


def test_sum_rule_and_low_wave_number_limit(rng):
    # ∫ S d²q/(2π)² = 1 (Parseval), and S(0) is the integral range: 2π ln 2 ℓ² for a level cut at one half (oracles 2.5)
    low, total = [], []
    for _ in range(8):
        pores = level_cut((512, 512), length=4.0, fraction=0.5, rng=rng)
        factor = structure_factor(pores, np.ones_like(pores))
        near = (factor.q > 0.03) & (factor.q < 0.08)
        low.append(np.average(factor.s[near], weights=factor.modes[near]))
        # Rings end at π; the corners of the square of wave numbers hold the rest (Porod tail, under 2 % here).
        total.append(2 * factor.modes.dot(factor.s) / 512**2)
    assert np.mean(low) == pytest.approx(2 * math.pi * math.log(2) * 16, rel=0.08)
    assert np.mean(total) == pytest.approx(1, abs=0.025)


@pytest.mark.parametrize("shape", [(40, 45), (64, 64)])
def test_rings_equal_the_whole_plane_of_a_plain_transform(shape, rng):
    # Second implementation: full complex transform, every wave number of the plane in its ring, no half-space weights
    pores = rng.random(shape) < 0.3
    factor = structure_factor(pores, np.ones(shape, bool))
    phi = pores.mean()
    power = np.abs(np.fft.fft2(pores - phi)) ** 2 / (pores.size * phi * (1 - phi))
    q = np.hypot(*np.meshgrid(*[2 * np.pi * np.fft.fftfreq(n) for n in shape], indexing="ij"))
    edges = [0.5 * 2 * np.pi / math.sqrt(pores.size)]
    while edges[-1] < np.pi:
        edges.append(edges[-1] + max(2 * edges[0], 0.06 * edges[-1]))
    edges = [e for e in edges if e <= np.pi]
    ring = np.digitize(q, edges)
    counts = np.bincount(ring.ravel(), minlength=len(edges) + 1)[1:-1]
    means = np.bincount(ring.ravel(), power.ravel(), len(edges) + 1)[1:-1]
    assert factor.modes.sum() == pytest.approx(counts.sum() / 2, rel=0.02)
    # A fine table assigns the rings, so that single modes at their borders may change sides.
    close = np.abs(factor.modes - counts[counts > 0] / 2) < 0.6
    assert close.mean() > 0.5
    np.testing.assert_allclose(factor.s[close], (means / np.maximum(counts, 1))[counts > 0][close], rtol=0.25)
    same = np.abs(factor.modes - counts[counts > 0] / 2) < 1e-9
    np.testing.assert_allclose(factor.s[same], (means / np.maximum(counts, 1))[counts > 0][same], rtol=1e-3)
    assert same.sum() >= 3


@pytest.mark.parametrize("spacing", [12.0, 25.0])
def test_spacing_of_a_ring_spectrum_with_its_interval(spacing, rng):
    inside = 0
    for _ in range(12):
        result = measured(ring_cut((400, 400), spacing=spacing, spread=0.12, rng=rng), np.ones((400, 400), bool))
        estimate = result.estimates["characteristic_spacing"]
        assert estimate.value == pytest.approx(spacing, rel=0.05)
        inside += estimate.low <= spacing <= estimate.high
        assert result.estimates["structure_peak_height"].value > 2
        assert result.flags == ()
    assert inside >= 9


def test_stripes_have_their_period():
    pores = np.zeros((300, 300), bool)
    pores[:, np.arange(300) % 15 < 6] = True
    peak = find_peak(structure_factor(pores, np.ones_like(pores)))
    assert peak is not None
    assert peak.spacing == pytest.approx(15, rel=0.03)


def test_spacing_scales_with_the_picture(rng):
    pores = ring_cut((256, 256), spacing=14.0, spread=0.1, rng=rng)
    double = np.kron(pores, np.ones((2, 2), bool))
    small, large = (find_peak(structure_factor(p, np.ones_like(p))) for p in (pores, double))
    assert large.spacing / small.spacing == pytest.approx(2, rel=0.02)


@pytest.mark.parametrize("medium", ["boolean", "level cut"])
@pytest.mark.parametrize("outline", ["whole", "interior"])
def test_no_peak_where_there_is_no_preferred_distance(medium, outline, rng):
    particle = disc(126) if outline == "whole" else np.ones((256, 256), bool)
    found = 0
    for _ in range(12):
        if medium == "boolean":
            pores = boolean_discs(particle.shape, radius=6.0, eta=0.4, rng=rng)
        else:
            pores = level_cut(particle.shape, length=5.0, fraction=0.4, rng=rng)
        result = measured(pores, particle, outline)
        found += math.isfinite(result.estimates["characteristic_spacing"].value)
        assert ("no_spacing" in result.flags) == math.isnan(result.estimates["characteristic_spacing"].value)
    assert found <= 1


def test_a_dense_skin_is_not_taken_for_structure(rng):
    particle = disc(200)
    y, x = np.ogrid[-201:202, -201:202]
    pores = ring_cut((404, 404), spacing=14.0, spread=0.12, rng=rng)[:403, :403] & (y * y + x * x < 170**2)
    estimate = measured(pores, particle, "whole").estimates["characteristic_spacing"]
    assert estimate.value == pytest.approx(14, rel=0.05)


def test_volume_has_its_spacing(rng):
    pores = ring_cut((72, 72, 72), spacing=10.0, spread=0.12, rng=rng)
    peak = find_peak(structure_factor(pores, np.ones_like(pores)))
    assert peak is not None
    assert peak.spacing == pytest.approx(10, rel=0.06)


@pytest.mark.parametrize("fill", [False, True])
def test_without_contrast_all_is_undefined(fill):
    result = measured(np.full((40, 40), fill), np.ones((40, 40), bool))
    assert math.isnan(result.estimates["characteristic_spacing"].value)
    assert result.flags == ("no_spacing",)


def test_tiny_pictures_do_not_crash(rng):
    for shape in ((1, 1), (1, 9), (3, 3), (5, 1), (2, 2, 2)):
        measured(rng.random(shape) < 0.5, np.ones(shape, bool))


def test_expected_of_another_shape_is_refused():
    with pytest.raises(ValueError, match="expected must have the shape of particle"):
        structure_factor(np.eye(4, dtype=bool), np.ones((4, 4), bool), expected=np.zeros((3, 3), np.float32))
