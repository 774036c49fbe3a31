from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy.ndimage import label
from scipy.special import ndtri

from poroscan.render import structures

SHAPE = (400, 400)


def _crossings(field: np.ndarray) -> float:
    """Boundary crossings per unit length of the rows and columns of a periodic field."""
    return float(np.mean([(field != np.roll(field, 1, axis=a)).mean() for a in (0, 1)]))


def test_level_cut_has_its_porosity_and_interface(rng: np.random.Generator) -> None:
    # Rice 1945: P_L = √2/(πℓ)·exp(−t²/2) for covariance exp(−(r/ℓ)²).
    correlation, porosity = 12.0, 0.3
    fields = [
        structures.level_cut((512, 512), porosity=porosity, correlation=correlation, rng=child)
        for child in rng.spawn(4)
    ]
    expected = np.sqrt(2) / (np.pi * correlation) * np.exp(-(ndtri(porosity) ** 2) / 2)
    assert np.mean(fields) == pytest.approx(porosity, abs=0.02)
    assert np.mean([_crossings(f) for f in fields]) == pytest.approx(expected, rel=0.04)


def test_level_cut_follows_a_porosity_map(rng: np.random.Generator) -> None:
    chance = np.full((600, 600), 0.2)
    chance[:, 300:] = 0.6
    pores = structures.level_cut((600, 600), porosity=chance, correlation=6.0, rng=rng)
    assert pores[:, :300].mean() == pytest.approx(0.2, abs=0.02)
    assert pores[:, 300:].mean() == pytest.approx(0.6, abs=0.02)


def test_gaussian_field_has_unit_variance_and_its_correlation(rng: np.random.Generator) -> None:
    shape, length = (512, 512), 8.0
    spectrum = np.exp(-((structures.wave_number(shape) * length) ** 2) / 8)
    field = structures.gaussian_field(shape, spectrum=spectrum, rng=rng)
    assert field.var() == pytest.approx(1.0, abs=0.06)
    assert (field * np.roll(field, 8, axis=1)).mean() == pytest.approx(np.exp(-1), abs=0.05)


def test_spinodal_field_peaks_at_its_spacing(rng: np.random.Generator) -> None:
    shape, spacing = (512, 512), 24.0
    pores = structures.spinodal(shape, porosity=0.5, spacing=spacing, rng=rng)
    power = np.abs(np.fft.fft2(pores - pores.mean())) ** 2
    q = structures.wave_number(shape)
    edges = np.linspace(0.05, 0.6, 23)
    mean_power = [power[(q >= a) & (q < b)].mean() for a, b in itertools.pairwise(edges)]
    peak = edges[int(np.argmax(mean_power))] + (edges[1] - edges[0]) / 2
    assert peak == pytest.approx(2 * np.pi / spacing, rel=0.08)


def test_boolean_discs_have_porosity_and_two_point_function(rng: np.random.Generator) -> None:
    # Matheron 1975: p = 1 − exp(−ρπR²); void at both ends of a lag r: q²·exp(ρ·lens(r)), lens(R) = (2π/3 − √3/2)R².
    radius, porosity = 10.0, 0.4
    fields = [
        structures.boolean_discs((500, 500), porosity=porosity, radius=radius, rng=child) for child in rng.spawn(6)
    ]
    rho = -np.log(1 - porosity) / (np.pi * radius**2)
    lens = (2 * np.pi / 3 - np.sqrt(3) / 2) * radius**2
    both_void = np.mean([(~f[:, :-10] & ~f[:, 10:]).mean() for f in fields])
    assert np.mean(fields) == pytest.approx(porosity, abs=0.015)
    assert both_void == pytest.approx((1 - porosity) ** 2 * np.exp(rho * lens), abs=0.015)


def test_section_of_boolean_spheres_has_the_volume_porosity(rng: np.random.Generator) -> None:
    # Delesse 1847: area fraction of a section equals the volume fraction 1 − exp(−ρ·4πR³/3).
    fields = [structures.boolean_spheres(SHAPE, porosity=0.3, radius=12.0, rng=child) for child in rng.spawn(8)]
    assert np.mean(fields) == pytest.approx(0.3, abs=0.02)


def test_closed_cells_never_touch_and_keep_their_wall(rng: np.random.Generator) -> None:
    pores, cells = structures.closed_cells(SHAPE, porosity=0.4, diameter=18.0, wall=4.0, rng=rng)
    apart = np.hypot(*(cells[:, None, :2] - cells[None, :, :2]).transpose(2, 0, 1))
    gap = apart - cells[:, None, 2] - cells[None, :, 2]
    np.fill_diagonal(gap, np.inf)
    assert gap.min() >= 4.0
    assert label(pores)[1] == len(cells)
    assert (np.pi * cells[:, 2] ** 2).sum() <= 0.4 * pores.size


def test_closed_cells_are_thinned_by_density(rng: np.random.Generator) -> None:
    density = np.ones(SHAPE)
    density[:, :200] = 0.0
    _, cells = structures.closed_cells(SHAPE, porosity=0.3, diameter=14.0, rng=rng, density=density)
    assert len(cells) > 50
    assert (cells[:, 1] >= 200).all()


def test_foam_walls_have_the_asked_share(rng: np.random.Generator) -> None:
    # A hexagonal lattice of cells of area A: pore hexagons shrink by the wall, so φ = (1 − w/s)², s the distance between
    # neighbouring seeds.
    cell, wall = 30.0, 5.0
    foam = structures.voronoi_foam((480, 480), cell=cell, wall=wall, rng=rng, regularity=1.0)
    neighbour = cell * np.sqrt(2 / np.sqrt(3))
    assert foam.mean() == pytest.approx((1 - wall / neighbour) ** 2, abs=0.02)


def test_bead_packing_in_a_lattice_has_its_solid_share(rng: np.random.Generator) -> None:
    # Touching discs on the hexagonal lattice cover π/(2√3) of the plane.
    pores = structures.bead_packing((480, 480), bead=24.0, rng=rng, overlap=0.0, spread=0.0, jitter=0.0)
    assert 1 - pores.mean() == pytest.approx(np.pi / (2 * np.sqrt(3)), abs=0.01)


def test_disc_is_painted_by_its_pixel_centres() -> None:
    disc = structures.paint_discs((5, 5), centres=np.array([[2.0, 2.0]]), radii=np.array([1.0]))
    assert disc.astype(int).tolist() == [[0] * 5, [0, 0, 1, 0, 0], [0, 1, 1, 1, 0], [0, 0, 1, 0, 0], [0] * 5]


def test_same_seed_same_structure() -> None:
    first, second = (structures.spinodal((64, 64), porosity=0.5, spacing=12.0, rng=5) for _ in range(2))
    assert np.array_equal(first, second)


def test_porosity_out_of_range_is_refused() -> None:
    with pytest.raises(ValueError, match="strictly between 0 and 1"):
        structures.level_cut((8, 8), porosity=1.0, correlation=2.0, rng=0)
    with pytest.raises(ValueError, match="porosity must lie strictly between 0 and 1, not 0"):
        structures.boolean_discs((8, 8), porosity=0, radius=2.0, rng=0)
