from __future__ import annotations

import math

import numpy as np
import pytest
from media import disc, gaussian_field, level_cut
from scipy import special

from poroscan.measure.surface import boundary_length_per_area, count_crossings, directions, surface_per_volume


def everywhere(mask: np.ndarray) -> np.ndarray:
    return np.ones(mask.shape, bool)


@pytest.mark.parametrize("ndim", [2, 3])
def test_direction_weights(ndim: int) -> None:
    steps, weights = directions(ndim)
    assert weights.sum() == pytest.approx(1.0)
    assert len({tuple(s) for s in steps} | {tuple(-s) for s in steps}) == 2 * len(steps)
    if ndim == 2:  # Voronoi: half the gap to the neighbours on both sides, over 180°
        assert weights[0] == pytest.approx(math.degrees(math.atan(0.5)) / 180)
    else:
        # The weights are the shares of the unit sphere nearest to each direction: here by a fine independent sample.
        rng = np.random.default_rng(7)
        sample = rng.standard_normal((200_000, 3))
        unit = steps / np.linalg.norm(steps, axis=1)[:, None]
        nearest = np.abs(sample @ unit.T).argmax(axis=1)
        np.testing.assert_allclose(np.bincount(nearest) / len(sample), weights, atol=0.003)


def test_stripes_are_exact() -> None:
    # Stripes w, P: crossings 2/P across, none along; diagonal lines meet 2/P · cos 45° (oracle: P_L across = 2/P).
    mask = np.zeros((80, 80), bool)
    for start in range(0, 80, 10):
        mask[:, start : start + 4] = True
    counts = count_crossings(mask, everywhere(mask))
    per_length = dict(zip(map(tuple, counts.steps), counts.per_length, strict=True))
    # 79 steps of a row of 80 pixels cross the 15 boundaries that lie inside the frame.
    assert per_length[0, 0, 1] == pytest.approx(15 / 79)
    assert per_length[0, 1, 0] == 0.0
    assert per_length[0, 1, 1] * math.sqrt(2) == pytest.approx(15 / 79)


def test_frame_and_outline_are_not_boundary() -> None:
    # Trap: pores all over the particle have no boundary at all, whatever the frame and the outline do.
    particle = disc(40)
    assert surface_per_volume(particle, particle, pixel_size=1.0) == 0.0
    field = np.ones((50, 50), bool)
    assert boundary_length_per_area(field, field, pixel_size=1.0) == 0.0


def test_frame_correction_is_unbiased(rng: np.random.Generator) -> None:
    # Cut windows of a periodic field: the mean over windows is that of the whole; a frame counted as boundary adds 4/100 · φ.
    whole = level_cut((1000, 1000), length=8, fraction=0.4, rng=rng)
    wide = np.pad(whole, (0, 2), mode="wrap")
    expected = boundary_length_per_area(wide, everywhere(wide), pixel_size=1.0)
    windows = [whole[i : i + 100, j : j + 100] for i in range(0, 1000, 100) for j in range(0, 1000, 100)]
    mean = np.mean([boundary_length_per_area(w, everywhere(w), pixel_size=1.0) for w in windows])
    assert mean == pytest.approx(expected, rel=0.01)


def level_cut_length(fraction: float, length: float) -> float:
    """L_A = ½ √λ2 exp(−u²/2), λ2 = 1/ℓ² (Rice 1944; oracle for level-cut Gaussian fields)."""
    return 0.5 / length * math.exp(-(special.ndtri(1 - fraction) ** 2) / 2)


@pytest.mark.parametrize(("fraction", "length"), [(0.5, 6.0), (0.3, 6.0)])
def test_level_cut_fields_within_one_per_cent(fraction: float, length: float, rng: np.random.Generator) -> None:
    shape = (1024, 1024)
    found = []
    for _ in range(6):
        mask = level_cut(shape, length=length, fraction=fraction, rng=rng)
        found.append(boundary_length_per_area(mask, everywhere(mask), pixel_size=1.0))
    expected = level_cut_length(fraction, length)
    print(
        f"L_A: p {fraction} l {length}: {np.mean(found) / expected - 1:+.4f} ± {np.std(found) / 6**0.5 / expected:.4f}"
    )
    assert np.mean(found) == pytest.approx(expected, rel=0.01)


@pytest.mark.slow
@pytest.mark.parametrize("fraction", [0.5, 0.3, 0.2])
def test_level_cut_fields_32_images(fraction: float, rng: np.random.Generator) -> None:
    for length in (6.0, 10.0):
        found = []
        for _ in range(32):
            mask = level_cut((1024, 1024), length=length, fraction=fraction, rng=rng)
            found.append(boundary_length_per_area(mask, everywhere(mask), pixel_size=1.0))
        expected = level_cut_length(fraction, length)
        error, sd = np.mean(found) / expected - 1, np.std(found) / 32**0.5 / expected
        print(f"L_A: p {fraction} l {length}: {error:+.4f} ± {sd:.4f}")
        assert abs(error) < 0.01


def test_volume_within_two_per_cent(rng: np.random.Generator) -> None:
    # S_V = (2/π) √λ2 exp(−u²/2); one volume of 21 ℓ a side has a sampling error of about 1 %.
    mask = level_cut((128, 128, 128), length=6, fraction=0.5, rng=rng)
    found = surface_per_volume(mask, everywhere(mask), pixel_size=1.0)
    assert found == pytest.approx(2 / math.pi / 6, rel=0.03)


def test_ball_surface_in_a_volume() -> None:
    z, y, x = np.mgrid[-20:21, -20:21, -20:21]
    ball = z**2 + y**2 + x**2 <= 15.2**2
    counts = count_crossings(ball, everywhere(ball))
    crossed, _, _ = counts.by_block()
    assert 2 * crossed[0] == pytest.approx(4 * math.pi * 15.2**2, rel=0.01)


def test_section_of_a_volume_gives_the_same_surface(rng: np.random.Generator) -> None:
    volume = gaussian_field((96, 96, 96), length=4, rng=rng) > 0
    planes = [surface_per_volume(volume[k], everywhere(volume[k]), pixel_size=1.0) for k in range(0, 96, 8)]
    assert np.mean(planes) == pytest.approx(surface_per_volume(volume, everywhere(volume), pixel_size=1.0), rel=0.03)


def test_scale_rotation_and_blocks(rng: np.random.Generator) -> None:
    mask = level_cut((90, 70), length=4, fraction=0.4, rng=rng)
    particle = np.zeros(mask.shape, bool)
    particle[5:-5, 8:-3] = True
    mask &= particle
    one = boundary_length_per_area(mask, particle, pixel_size=1.0)
    assert boundary_length_per_area(mask, particle, pixel_size=0.25) == pytest.approx(4 * one)
    assert boundary_length_per_area(np.rot90(mask), np.rot90(particle), pixel_size=1.0) == pytest.approx(one)
    blocks = np.where(particle, 1 + np.arange(90)[:, None] // 20, 0).astype(np.int32)
    counts = count_crossings(mask, particle, blocks=blocks)
    crossed, _, pairs = counts.by_block()
    assert crossed.sum() / pairs.sum() == pytest.approx(2 / math.pi * one, rel=0.01)
    assert crossed[0] == 0


def test_wrong_arguments_are_named() -> None:
    mask = np.zeros((5, 5), bool)
    with pytest.raises(ValueError, match="phase must be a 2-D or 3-D bool array"):
        count_crossings(mask.astype(int), mask)
    with pytest.raises(ValueError, match="must have one shape"):
        count_crossings(mask, mask[:3])
    with pytest.raises(ValueError, match="phase must be 2-D for a boundary length"):
        boundary_length_per_area(np.zeros((3, 3, 3), bool), np.ones((3, 3, 3), bool), pixel_size=1.0)
