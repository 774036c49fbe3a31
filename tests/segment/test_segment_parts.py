"""The parts of the segmentation against closed forms and slow versions."""

from __future__ import annotations

import math

import drawn_scenes as scenes
import numpy as np
import pytest
from scipy import ndimage

from poroscan.segment.cleanup import bands, noise_level, shading
from poroscan.segment.closing import close_mask, cut_pores, fill_holes, split_touching
from poroscan.segment.frame import frame_weight
from poroscan.segment.histogram import find_levels
from poroscan.segment.trained import classify, logistic_regression
from poroscan.segment.variation import smooth_edges_kept
from poroscan.segment.view import fit_circle


def test_frame_weight_closed_form() -> None:
    """Frame 1000 × 800, Feret 100 × 50: P = 0.9 · 0.9375 = 0.84375 (Miles 1974)."""
    assert frame_weight((1000, 800), (100, 50)) == pytest.approx(1 / 0.84375)
    assert math.isnan(frame_weight((100, 100), (100, 20)))


def test_frame_weight_counts_without_bias(rng: np.random.Generator) -> None:
    """Random discs in a plane: the weighted number of whole ones per frame is the number of centres per frame area."""
    side, radius, density, frames = 100, 12, 0.002, 400
    total = plain = 0.0
    for _ in range(frames):
        count = rng.poisson(density * (side + 4 * radius) ** 2)
        centres = rng.uniform(-2 * radius, side + 2 * radius, (count, 2))
        whole = int(((centres > radius) & (centres < side - radius)).all(axis=1).sum())
        plain += whole
        total += whole * frame_weight((side, side), (2 * radius, 2 * radius))
    expected = density * side**2 * frames
    assert total == pytest.approx(expected, abs=4 * math.sqrt(expected) * 1.4)
    assert plain < 0.7 * expected


@pytest.mark.parametrize("radius", [1.0, 2.5, 4.0])
def test_closing_is_the_slow_closing(radius: float, rng: np.random.Generator) -> None:
    mask = rng.random((40, 50)) < 0.1
    mask[:12] = mask[-12:] = mask[:, :12] = mask[:, -12:] = False  # away from the frame, which is continued
    reach = math.ceil(radius)
    offsets = np.arange(-reach, reach + 1)
    element = offsets[:, None] ** 2 + offsets[None, :] ** 2 <= radius**2
    assert np.array_equal(close_mask(mask, radius), ndimage.binary_closing(mask, element))


def test_frame_does_not_close_or_open() -> None:
    half = np.zeros((40, 40), bool)
    half[:, :20] = True
    assert np.array_equal(close_mask(half, 6), half)


def test_fill_holes_leaves_ground_at_the_frame(rng: np.random.Generator) -> None:
    mask = rng.random((60, 60)) < 0.6
    padded = ndimage.binary_fill_holes(np.pad(mask, 1))[1:-1, 1:-1]
    assert np.array_equal(fill_holes(mask), padded | mask)


def test_split_follows_the_neck() -> None:
    """Two discs of radius 30 whose centres lie 40 apart have a neck of half-width √(30² − 20²) = 22.4: 0.75 of the radius."""
    pair = scenes.disc(60, 50, 30, (120, 140)) | scenes.disc(60, 90, 30, (120, 140))
    assert split_touching(pair, 0.7).max() == 1
    assert split_touching(pair, 0.8).max() == 2
    assert split_touching(pair, 0.0).max() == 1


def test_cut_pores_keeps_bays_out() -> None:
    body = scenes.disc(100, 100, 80, (200, 200))
    pore = scenes.disc(100, 178, 12, (200, 200)) & body
    found = cut_pores(body & ~pore, pore=450.0)
    assert (found & pore).sum() > 0.85 * pore.sum()
    bay = scenes.disc(100, 178, 40, (200, 200)) & body
    assert not cut_pores(body & ~bay, pore=450.0).any()


@pytest.mark.parametrize("sd", [0.01, 0.05])
def test_noise_level(sd: float, rng: np.random.Generator) -> None:
    ramp = np.linspace(0, 0.5, 200)[:, None] + np.linspace(0, 0.3, 220)[None, :]
    assert noise_level((ramp + rng.normal(0, sd, ramp.shape)).astype(np.float32)) == pytest.approx(sd, rel=0.04)


def test_shading_is_recovered_through_pores(rng: np.random.Generator) -> None:
    y, x = np.meshgrid(np.linspace(-1, 1, 150), np.linspace(-1, 1, 180), indexing="ij")
    true = 0.1 * x - 0.06 * y + 0.05 * x * y + 0.04 * x**2
    pores = rng.random(true.shape) < 0.3
    grey = (0.6 + true + rng.normal(0, 0.01, true.shape) - 0.4 * pores).astype(np.float32)
    found = shading(grey, np.ones(grey.shape, bool))
    assert np.abs((found - found.mean()) - (true - true.mean())).max() < 0.012


def test_bands_are_found_in_both_directions(rng: np.random.Generator) -> None:
    grey = rng.normal(0.5, 0.01, (120, 140))
    grey[30] += 0.05
    grey[:, 77] -= 0.04
    material = rng.random(grey.shape) < 0.7
    found = bands(grey.astype(np.float32), material)
    assert found[30, 10] == pytest.approx(0.05, abs=0.006)
    assert found[5, 77] == pytest.approx(-0.04, abs=0.006)
    assert np.abs(np.delete(np.delete(found, 30, 0), 77, 1)).max() < 0.006


def _energy(u: np.ndarray, f: np.ndarray, weight: float) -> float:
    axis, diagonal = math.pi / 8, math.pi / (8 * math.sqrt(2))
    length = axis * (np.abs(np.diff(u, axis=0)).sum() + np.abs(np.diff(u, axis=1)).sum())
    length += diagonal * (np.abs(u[1:, 1:] - u[:-1, :-1]).sum() + np.abs(u[1:, :-1] - u[:-1, 1:]).sum())
    return float(0.5 * ((u - f) ** 2).sum() + weight * length)


def test_total_variation_minimises_its_energy(rng: np.random.Generator) -> None:
    f = (scenes.disc(20, 20, 9, (40, 44)) * 0.5 + rng.normal(0, 0.1, (40, 44))).astype(np.float32)
    inside = np.ones(f.shape, bool)
    u = smooth_edges_kept(f, inside, weight=0.15, iterations=600).astype(np.float64)
    best = _energy(u, f, 0.15)
    assert best < _energy(f, f, 0.15)
    for _ in range(50):
        assert _energy(u + rng.normal(0, 0.003, u.shape), f, 0.15) > best
    assert u.mean() == pytest.approx(float(f.mean()), abs=1e-6)


def test_total_variation_lowers_a_disc_by_its_perimeter_over_area() -> None:
    """For a disc on nothing the solution is the disc lowered by λ·P/A = 2 λ/r (Strong and Chan 2003), and the frame is raised a little."""
    f = (0.8 * scenes.disc(80, 80, 40, (161, 161))).astype(np.float32)
    u = smooth_edges_kept(f, np.ones(f.shape, bool), weight=1.0, iterations=3000)
    assert 0.8 - float(u[80, 80]) == pytest.approx(2.0 / 40, rel=0.06)


def test_total_variation_turns_with_the_picture(rng: np.random.Generator) -> None:
    f, inside = rng.random((50, 64)).astype(np.float32), rng.random((50, 64)) < 0.8
    first = smooth_edges_kept(f, inside, weight=0.2)
    second = smooth_edges_kept(np.rot90(f).copy(), np.rot90(inside), weight=0.2)
    assert np.array_equal(np.rot90(first), second)
    assert np.array_equal(first[~inside], f[~inside])


def test_levels_of_two_phases_and_of_one(rng: np.random.Generator) -> None:
    inside = np.ones((200, 200), bool)
    pores = scenes.lattice_pores(inside)
    two = np.where(pores, 0.2, 0.7) + rng.normal(0, 0.02, inside.shape)
    found = find_levels(two.astype(np.float32), inside, residual_noise=0.02)
    assert found.material == pytest.approx(0.7, abs=0.01)
    assert found.pore == pytest.approx(0.2, abs=0.02)
    one = rng.normal(0.7, 0.02, inside.shape).astype(np.float32)
    assert math.isnan(find_levels(one, inside, residual_noise=0.02).limit)


def test_circle_through_exact_points() -> None:
    angle = np.linspace(0.2, 1.1, 60)
    found = fit_circle(np.column_stack([300 - 210 * np.sin(angle), 40 + 210 * np.cos(angle)]))
    assert found is not None
    assert (found.row, found.column, found.radius) == pytest.approx((300, 40, 210), rel=1e-6)
    assert found.radius_sd < 1e-4


def test_circle_uncertainty_covers(rng: np.random.Generator) -> None:
    """Independent noise on an arc: the standard uncertainty agrees with the scatter of the radius over repetitions."""
    angle = np.linspace(0, 1.2, 150)
    radii, errors = [], []
    for _ in range(150):
        r = 200 + rng.normal(0, 0.7, angle.size)
        found = fit_circle(np.column_stack([r * np.sin(angle), r * np.cos(angle)]))
        assert found is not None
        radii.append(found.radius)
        errors.append(found.radius_sd)
    assert np.mean(errors) == pytest.approx(np.std(radii), rel=0.35)


def test_no_circle_through_a_line() -> None:
    assert fit_circle(np.column_stack([np.arange(30.0), np.arange(30.0)])) is None
    assert fit_circle(np.zeros((3, 2))) is None


def test_logistic_regression_finds_the_stationary_point(rng: np.random.Generator) -> None:
    """At the optimum the gradient of the penalised likelihood vanishes."""
    design = np.column_stack([np.ones(300), rng.normal(size=(300, 3))])
    truth = np.array([0.3, 1.0, -2.0, 0.0])
    target = (rng.random(300) < 1 / (1 + np.exp(-design @ truth))).astype(float)
    b, covariance = logistic_regression(design, target, weight=np.ones(300), penalty=0.5)
    p = 1 / (1 + np.exp(-design @ b))
    gradient = design.T @ (target - p) - 0.5 * np.r_[0, b[1:]]
    assert np.abs(gradient).max() < 1e-4
    assert np.all(np.abs(b - truth) < 4 * np.sqrt(np.diag(covariance)) + 0.2)


def test_trained_pixels(rng: np.random.Generator) -> None:
    """Pores that differ from the wall by roughness only: no threshold finds them, a few strokes do."""
    from poroscan.segment import SegmentSettings, segment_picture

    pores = scenes.lattice_pores(np.ones((240, 240), bool), radius=16, pitch=50)
    grey = 0.5 + np.where(pores, scenes.rough(rng, grain=0.8, sd=0.12, shape=pores.shape), 0.0)
    picture = scenes.as_picture(grey + rng.normal(0, 0.01, grey.shape))
    strokes = np.zeros(grey.shape, np.int32)
    strokes[95:106, 92:108] = 2
    strokes[20:30, 60:90] = 1
    settings = SegmentSettings(view="interior", pores="trained")
    found = segment_picture(picture, settings, strokes=strokes)
    overlap = 2 * (found.pores & pores).sum() / (found.pores.sum() + pores.sum())
    assert overlap > 0.85
    again = segment_picture(picture, settings, strokes=strokes)
    assert np.array_equal(found.pores, again.pores)


def test_strokes_need_both_classes() -> None:
    from poroscan.errors import SettingsError

    strokes = np.zeros((30, 30), np.int32)
    strokes[:5] = 1
    with pytest.raises(SettingsError, match=r"0 pixels of pore \(2\); draw at least 10"):
        classify(np.zeros((30, 30), np.float32), strokes)
