from __future__ import annotations

import math

import numpy as np
import pytest
from media import disc, gaussian_field

from poroscan.measure import measure_section
from poroscan.section import UNKNOWN_PIXEL_SIZE, Circle, PixelSize, Section


def test_hand_count_on_five_by_five() -> None:
    particle = np.pad(np.ones((5, 5), bool), 1)
    pores = np.zeros_like(particle)
    pores[2, 2] = pores[3, 4] = pores[5, 5] = True
    record = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE)).record
    assert record["porosity"].value == pytest.approx(3 / 25)
    assert record["area"].value == 25
    assert record["equivalent_diameter"].value == pytest.approx(2 * math.sqrt(25 / math.pi))
    assert "tiny_particle" in record.flags


def test_independent_of_scale(rng: np.random.Generator) -> None:
    particle = disc(40)
    pores = particle & (gaussian_field(particle.shape, length=5, rng=rng) > 0.3)
    rows = [measure_section(Section(pores, particle, p)).record.row(p) for p in (PixelSize(1.0), PixelSize(0.2))]
    assert rows[0]["porosity"] == rows[1]["porosity"]
    assert rows[1]["area_um2"] == pytest.approx(rows[0]["area_um2"] * 0.04)


def test_dense_and_hollow_particles() -> None:
    particle = disc(30)
    dense = measure_section(Section(particle & False, particle, UNKNOWN_PIXEL_SIZE)).record
    assert dense["porosity"].value == 0.0
    assert math.isnan(dense["porosity"].low)
    assert "no_pores" in dense.flags
    hollow = measure_section(Section(particle, particle, UNKNOWN_PIXEL_SIZE)).record
    assert hollow["porosity"].value == 1.0
    assert "all_pores" in hollow.flags


def test_threshold_component_is_half_the_band(rng: np.random.Generator) -> None:
    particle = disc(90)
    field = gaussian_field(particle.shape, length=5, rng=rng)
    low, pores, high = (particle & (field > u) for u in (0.35, 0.3, 0.25))
    record = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, pores_low=low, pores_high=high)).record
    found = record["porosity"]
    assert found.components["threshold"] == pytest.approx((high.sum() - low.sum()) / 2 / particle.sum())
    assert set(found.components) == {"sampling", "threshold"}
    assert found.low < found.value < found.high
    for base in ("surface_per_volume", "pore_d50", "thickness_d50", "chord_pore_mean", "core_porosity"):
        assert record[base].components["threshold"] >= 0, base
        alone = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE)).record[base]
        assert "threshold" not in alone.components
        if math.isnan(alone.high):
            continue  # the core of a small particle holds too few blocks
        assert record[base].high - record[base].low >= 0.999 * (alone.high - alone.low), base


def test_thickness_threshold_to_first_order() -> None:
    # Discs whose radius moves by 1 px: every diameter moves by 2 px, which is what porosity over boundary length says.
    particle = disc(150)
    y, x = np.mgrid[-151:152, -151:152]
    u, v = (y + 151) % 60 - 30, (x + 151) % 60 - 30
    low, pores, high = (particle & (np.hypot(u, v) <= r) for r in (17.0, 18.0, 19.0))
    record = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, pores_low=low, pores_high=high)).record
    assert record["thickness_d50"].components["threshold"] == pytest.approx(2.0, rel=0.1)
    assert record["pore_d50"].components["threshold"] == pytest.approx(2.0, rel=0.1)


def test_porosity_from_grey_counts_unresolved_pores(rng: np.random.Generator) -> None:
    # Grey = mixture of wall 0.8 and pore 0.2; half-pore pixels, which the mask calls wall, are found again.
    particle = disc(80)
    pores = particle & (gaussian_field(particle.shape, length=6, rng=rng) > 0.5)
    share = pores.astype(float)
    hidden = particle & ~pores & (rng.random(particle.shape) < 0.04)
    share[hidden] = 0.5
    grey = (0.8 - 0.6 * share + 0.02 * rng.standard_normal(particle.shape)).astype(np.float32)
    record = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, grey=grey)).record
    expected = share[particle].mean()
    assert record["porosity_grey"].value == pytest.approx(expected, abs=0.003)
    assert record["porosity"].value < expected - 0.01
    flat = np.full(particle.shape, 0.5, np.float32)
    assert math.isnan(
        measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, grey=flat)).record["porosity_grey"].value
    )


def test_mid_plane_section_is_biased_for_a_graded_particle() -> None:
    # Trap: φ = a + b r/R gives a + 2b/3 in the mid-plane and a + 3b/4 in the particle (closed forms).
    rng = np.random.default_rng(3)
    z, y, x = np.mgrid[-40:41, -40:41, -40:41]
    r = np.sqrt(z**2 + y**2 + x**2) / 39.5
    ball = r <= 1
    pores = ball & (rng.random(r.shape) < 0.1 + 0.6 * r)
    assert pores.sum() / ball.sum() == pytest.approx(0.1 + 0.45, abs=0.005)
    middle = measure_section(Section(pores[40], ball[40], UNKNOWN_PIXEL_SIZE)).record["porosity"].value
    assert middle == pytest.approx(0.1 + 0.4, abs=0.02)


def test_views() -> None:
    particle = np.ones((60, 60), bool)
    pores = np.zeros_like(particle)
    pores[10:20, 10:20] = True
    interior = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, view="interior")).record
    assert math.isnan(interior["equivalent_diameter"].value)
    assert math.isnan(interior["circularity"].value)
    assert math.isnan(interior["open_porosity"].value)
    assert interior["porosity"].value == pytest.approx(100 / 3600)
    assert "interior_view" in interior.flags
    y, x = np.mgrid[:60, :60]
    arc = (y - 100) ** 2 + (x - 30) ** 2 <= 90**2
    circle = Circle(100, 30, 90, 1.5)
    edge = Section(arc & False, arc, UNKNOWN_PIXEL_SIZE, view="edge", circle=circle)
    diameter = measure_section(edge).record["equivalent_diameter"]
    assert diameter.value == 180
    assert diameter.components == {"frame": 3.0}
    assert diameter.high == pytest.approx(180 + 1.959964 * 3)
