from __future__ import annotations

import math

import edt
import numpy as np
import pytest
from media import boolean_discs, disc, gaussian_field, level_cut
from scipy import ndimage

from poroscan.measure import MeasureSettings, thickness
from poroscan.measure.shared import Shared
from poroscan.measure.thickness import containment_tables, local_thickness, squared_thickness, thickness_table
from poroscan.section import UNKNOWN_PIXEL_SIZE, Section


def brute_force(mask: np.ndarray) -> np.ndarray:
    """The definition itself: every disc painted over every pixel that it covers, distances from scipy."""
    squared = np.rint(ndimage.distance_transform_edt(mask) ** 2).astype(int)
    out = np.zeros(mask.shape, int)
    grid = np.indices(mask.shape)
    for p in zip(*np.nonzero(mask), strict=True):
        near = sum((g - c) ** 2 for g, c in zip(grid, p, strict=True)) < squared[p]
        out[near] = np.maximum(out[near], squared[p])
    return out


@pytest.mark.parametrize(("length", "level"), [(1, 0.0), (2, -0.5), (4, 0.3), (12, -1.0)])
def test_equals_the_definition_pixel_by_pixel(length: float, level: float, rng: np.random.Generator) -> None:
    mask = gaussian_field((96, 96), length=length, rng=rng) > level
    np.testing.assert_array_equal(squared_thickness(mask), brute_force(mask))


def test_equals_the_definition_on_noise_and_discs(rng: np.random.Generator) -> None:
    for mask in (rng.random((96, 96)) < 0.97, ~boolean_discs((96, 96), radius=5, eta=0.3, rng=rng), disc(40)):
        np.testing.assert_array_equal(squared_thickness(mask), brute_force(mask))


def test_equals_the_definition_in_space(rng: np.random.Generator) -> None:
    for shape in ((20, 22, 24), (3, 40, 40), (1, 30, 30), (30, 9, 1)):
        mask = gaussian_field(shape, length=3, rng=rng) > -0.7
        np.testing.assert_array_equal(squared_thickness(mask), brute_force(mask))


def test_containment_tables_equal_brute_force() -> None:
    grid = np.stack(np.meshgrid(*[np.arange(-13, 14)] * 2, indexing="ij"), axis=-1).reshape(-1, 2)
    norm = (grid**2).sum(axis=1)
    steps = np.array([(1, 0), (1, 1), (2, 1), (3, 2)], dtype=np.int32)
    tables = containment_tables(150, steps=steps)
    for k, v in enumerate(steps):
        far = ((grid - v) ** 2).sum(axis=1)
        for d in range(1, 151):
            assert tables[k, d] == far[norm < d].max(), (v, d)


@pytest.mark.parametrize("radius", [7.0, 20.3, 60.0])
def test_disc(radius: float) -> None:
    # A disc has its diameter everywhere (Hildebrand and Rüegsegger 1997).
    mask = disc(radius, margin=2)
    thickness = local_thickness(mask, pixel_size=1.0)[mask]
    assert abs(thickness.max() - 2 * radius) <= 1.0
    assert abs(np.median(thickness) - 2 * radius) <= 1.0


@pytest.mark.parametrize("width", [1, 2, 7, 20, 33])
def test_strip_has_its_width(width: int) -> None:
    mask = np.zeros((60, 80), bool)
    mask[10 : 10 + width] = True
    values = np.unique(local_thickness(mask, pixel_size=1.0)[mask])
    # Exact for odd widths, one pixel less for even ones: no pixel lies on the midline.
    np.testing.assert_allclose(values, width - (width + 1) % 2, atol=1e-5)


def test_annulus() -> None:
    y, x = np.mgrid[-60:61, -60:61]
    r2 = y**2 + x**2
    mask = (r2 <= 50**2) & (r2 > 30**2)
    thickness = local_thickness(mask, pixel_size=1.0)[mask]
    assert abs(np.median(thickness) - 20) <= 1.0
    assert abs(thickness.max() - 20) <= 1.0


def test_square_and_rectangle_means() -> None:
    # Mean over a square 0.928466 a, over a rectangle a × 2a 0.964233 a: 1 − (1 − π/4) a / 3b (closed form).
    for a, b, expected in ((201, 201, 0.928466), (101, 202, 0.964233)):
        mask = np.zeros((a + 4, b + 4), bool)
        mask[2:-2, 2:-2] = True
        mean = float(local_thickness(mask, pixel_size=1.0)[mask].mean())
        assert mean / a == pytest.approx(expected, rel=0.01)


def test_ball_and_plate_in_space() -> None:
    z, y, x = np.mgrid[-14:15, -14:15, -14:15]
    ball = z**2 + y**2 + x**2 <= 12**2
    assert abs(np.median(local_thickness(ball, pixel_size=1.0)[ball]) - 24) <= 1.0
    plate = np.zeros((20, 20, 20), bool)
    plate[5:12] = True
    np.testing.assert_allclose(local_thickness(plate, pixel_size=0.5)[plate], 3.5, rtol=1e-6)


def test_half_pixel_of_the_distance_transform(rng: np.random.Generator) -> None:
    # Mean distance from a void point to the nearest of Boolean discs, e^η erfc(√η)/(2√ρ) = 0.5088831 R at η = ln 2.
    from poroscan.measure.distance import boundary_distance

    radius, total, raw, n = 16.0, 0.0, 0.0, 0
    for _ in range(4):
        void = ~boolean_discs((512, 512), radius=radius, eta=math.log(2), rng=rng)
        wide = np.pad(void, 64, mode="wrap")
        inner = (slice(64, -64), slice(64, -64))
        total += float(boundary_distance(wide)[inner][void].sum())
        raw += float(edt.edt(wide)[inner][void].sum())
        n += int(void.sum())
    assert total / n / radius == pytest.approx(0.5089, rel=0.06)  # sampling error of 4 × 32 R is about 2 %
    assert (raw - total) / n == pytest.approx(0.5)


def test_frame_bounds_nothing() -> None:
    mask = np.zeros((30, 40), bool)
    mask[:, :10] = True  # a strip of which the frame shows one side only
    thickness = local_thickness(mask, pixel_size=1.0)
    assert thickness[15, 0] == pytest.approx(19.0)


def test_invariance(rng: np.random.Generator) -> None:
    mask = gaussian_field((70, 50), length=3, rng=rng) > 0
    expected = squared_thickness(mask)
    np.testing.assert_array_equal(np.rot90(squared_thickness(np.rot90(mask).copy()), -1), expected)
    np.testing.assert_array_equal(squared_thickness(np.asfortranarray(mask)), expected)
    np.testing.assert_array_equal(squared_thickness(mask[::-1])[::-1], expected)
    double = local_thickness(mask, pixel_size=2.0)
    np.testing.assert_allclose(double, 2 * local_thickness(mask, pixel_size=1.0), rtol=1e-6)


def test_degenerate_masks() -> None:
    assert squared_thickness(np.zeros((4, 5), bool)).sum() == 0
    assert squared_thickness(np.zeros((0, 5), bool)).shape == (0, 5)
    assert np.isinf(local_thickness(np.ones((4, 5), bool), pixel_size=1.0)).all()
    one = np.zeros((1, 9), bool)
    one[0, 4] = True
    assert local_thickness(one, pixel_size=1.0)[0, 4] == 1.0
    assert thickness_table(np.ones((4, 5), bool)).totals.size == 0


@pytest.mark.parametrize("bad", [np.ones((4, 4), int), np.ones((4, 4)), np.ones(4, bool), [[True]]])
def test_wrong_masks_are_named(bad: object) -> None:
    with pytest.raises(ValueError, match="phase must be a 2-D or 3-D bool array"):
        local_thickness(bad, pixel_size=1.0)  # type: ignore[arg-type]


def test_pixel_size_must_be_positive() -> None:
    with pytest.raises(ValueError, match="pixel_size must be a positive length"):
        local_thickness(np.ones((3, 3), bool), pixel_size=0.0)


@pytest.mark.slow
def test_coverage_of_the_intervals_for_thickness_in_round_sections(rng: np.random.Generator) -> None:
    # A thickness has no closed form, and the outline cuts pores: its truth is that of 400 sections pooled.
    particle, found = disc(120, margin=2), []
    for _ in range(400):
        pores = particle & level_cut(particle.shape, length=5.0, fraction=0.35, rng=rng)
        section, settings = Section(pores, particle, UNKNOWN_PIXEL_SIZE), MeasureSettings()
        found.append(thickness.part(section, settings, shared=Shared(section, settings), rng=rng).estimates)
    for base in ("thickness_d50", "wall_d50"):
        estimates = [f[base] for f in found]
        truth = np.mean([e.value for e in estimates])
        covered = np.mean([e.low <= truth <= e.high for e in estimates])
        print(f"{base}: coverage of 400: {covered:.3f}")
        assert 0.92 <= covered <= 0.97, base
