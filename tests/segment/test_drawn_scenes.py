"""Outline and pores of small drawn scenes against their exact masks; one scene for each thing that misleads a threshold."""

from __future__ import annotations

import math

import drawn_scenes as scenes
import numpy as np
import pytest

from poroscan.section import UNKNOWN_PIXEL_SIZE, Picture
from poroscan.segment import Segmentation, SegmentSettings, segment_picture

#: Allowed error of the equivalent diameter where the outline is not a line of the drawing itself.
DIAMETER = {"walls_as_grey_as_ground": 0.04, "beads": 0.05}
#: Allowed error of porosity where the truth inside the outline is a convention (the rim between beads).
POROSITY = {"beads": 0.05}


def porosity(segmentation: Segmentation) -> float:
    return float(segmentation.pores.sum()) / float((segmentation.labels > 0).sum())


@pytest.mark.parametrize("name", scenes.SINGLE)
def test_scene(name: str, rng: np.random.Generator) -> None:
    scene = scenes.SINGLE[name](rng)
    found = segment_picture(scene.picture)
    inside = scene.labels > 0
    assert len(found.sections) == 1
    assert found.view == "whole"
    diameter = math.sqrt((found.labels > 0).sum() / inside.sum())
    assert diameter == pytest.approx(1.0, abs=DIAMETER.get(name, 0.01))
    assert porosity(found) == pytest.approx(scene.pores.sum() / inside.sum(), abs=POROSITY.get(name, 0.02))


def test_plain_threshold_fails_on_these_scenes(rng: np.random.Generator) -> None:
    """What a script of smoothing, Otsu's threshold and filling would give: the scenes are not trivial."""
    from scipy import ndimage
    from skimage.filters import threshold_otsu

    worst = 0.0
    for make in scenes.SINGLE.values():
        scene = make(rng)
        smooth = ndimage.gaussian_filter(scene.grey, 1.5)
        bright = smooth > threshold_otsu(smooth)
        body = ndimage.binary_fill_holes(bright)
        inside = scene.labels > 0
        error = 1 - bright[body].mean() - scene.pores.sum() / inside.sum()
        worst = max(worst, abs(float(error)))
    assert worst > 0.15


def test_touching_particles_are_split(rng: np.random.Generator) -> None:
    scene = scenes.touching(rng)
    found = segment_picture(scene.picture)
    assert [s.flags for s in found.sections] == [("split_from_touching",)] * 2
    true = sorted(np.bincount(scene.labels.ravel())[1:])
    areas = sorted(int(s.particle.sum()) for s in found.sections)
    assert areas == pytest.approx(true, rel=0.02)
    joined = segment_picture(scene.picture, SegmentSettings(split_touching=False))
    assert len(joined.sections) == 1


def test_particle_cut_by_the_frame(rng: np.random.Generator) -> None:
    """One whole and one cut particle: the cut one is flagged and has no weight, the whole one has Miles' weight."""
    labels = np.zeros((300, 420), np.int32)
    labels[scenes.disc(150, 120, 80, labels.shape)] = 1
    labels[scenes.disc(150, 390, 80, labels.shape)] = 2
    pores = scenes.lattice_pores(labels > 0) & (scenes.disc(150, 120, 70, labels.shape) | (labels == 2))
    found = segment_picture(
        scenes.as_picture(scenes.expose(np.where(labels > 0, np.where(pores, 0.1, 0.6), 0.12), rng))
    )
    assert found.view == "whole"
    by_cut = {"touches_frame" in s.flags: s for s in found.sections}
    assert set(by_cut) == {False, True}
    assert math.isnan(by_cut[True].frame_weight)
    assert by_cut[True].touches_frame
    # box of 161 pixels in a frame of 300 x 420
    assert by_cut[False].frame_weight == pytest.approx(300 * 420 / (139 * 259), rel=0.04)
    assert not by_cut[False].touches_frame


def test_edge_view_gives_the_radius(rng: np.random.Generator) -> None:
    particle = scenes.disc(700, 180, 520)
    pores = scenes.lattice_pores(scenes.disc(700, 180, 505))
    grey = np.where(particle, np.where(pores, 0.1, 0.65), 0.15)
    found = segment_picture(scenes.as_picture(scenes.expose(grey, rng)))
    assert found.view == "edge"
    (section,) = found.sections
    assert section.circle is not None
    assert section.circle.radius == pytest.approx(520, rel=0.03)
    assert abs(section.circle.radius - 520) < 4 * section.circle.radius_sd + 0.01 * 520
    assert {"edge_view", "touches_frame"} <= set(section.flags)


def test_interior_view(rng: np.random.Generator) -> None:
    pores = scenes.lattice_pores(np.ones((scenes.SIZE, scenes.SIZE), bool), radius=9)
    found = segment_picture(scenes.as_picture(scenes.expose(np.where(pores, 0.1, 0.6), rng)))
    assert found.view == "interior"
    assert found.flags == ("interior_view",)
    assert porosity(found) == pytest.approx(pores.mean(), abs=0.01)
    assert found.sections[0].frame_weight == 1.0


def test_textured_particle_on_smooth_ground(rng: np.random.Generator) -> None:
    """Same mean grey inside and outside: only the roughness differs."""
    particle = scenes.disc(180, 180, 120)
    grey = 0.5 + np.where(particle, scenes.rough(rng, grain=1.5, sd=0.15), 0.0) + rng.normal(0, 0.01, particle.shape)
    found = segment_picture(scenes.as_picture(grey))
    assert len(found.sections) == 1
    assert "outline_uncertain" in found.flags
    assert math.sqrt((found.labels > 0).sum() / particle.sum()) == pytest.approx(1.0, abs=0.03)


def test_textured_particle_on_photographed_gravel(rng: np.random.Generator) -> None:
    """A photograph as rough ground: skimage.data.gravel."""
    from skimage.data import gravel

    ground = gravel()[:360, :360].astype(float) / 255
    particle = scenes.disc(180, 180, 120)
    pores = scenes.lattice_pores(scenes.disc(180, 180, 110))
    grey = np.where(particle, np.where(pores, 0.1, 0.85), 0.1 + 0.45 * ground)
    found = segment_picture(scenes.as_picture(scenes.expose(grey, rng)))
    assert len(found.sections) == 1
    assert math.sqrt((found.labels > 0).sum() / particle.sum()) == pytest.approx(1.0, abs=0.02)
    assert porosity(found) == pytest.approx(pores.sum() / particle.sum(), abs=0.02)


def test_band_brackets_the_segmentation(rng: np.random.Generator) -> None:
    (section,) = segment_picture(scenes.lit_bottoms(rng).picture).sections
    assert section.pores_low is not None
    assert section.pores_high is not None
    assert not (section.pores_low & ~section.pores).any()
    assert not (section.pores & ~section.pores_high).any()
    assert section.pores_low.sum() < section.pores.sum() < section.pores_high.sum()


def test_closing_is_reported_and_obeyed(rng: np.random.Generator) -> None:
    picture = scenes.open_pores(rng).picture
    free = segment_picture(picture)
    assert any("closing by" in note for note in free.notes)
    tight = segment_picture(picture, SegmentSettings(closing_radius_px=0.0))
    assert (tight.labels > 0).sum() < (free.labels > 0).sum()


def test_quarter_turn_commutes(rng: np.random.Generator) -> None:
    picture = scenes.streaks(rng).picture
    turned = Picture(np.ascontiguousarray(np.rot90(picture.grey)), UNKNOWN_PIXEL_SIZE)
    first, second = segment_picture(picture), segment_picture(turned)
    assert np.mean(np.rot90(first.labels > 0) != (second.labels > 0)) < 1e-4
    assert np.mean(np.rot90(first.pores) != second.pores) < 1e-4


@pytest.mark.parametrize(("gain", "offset"), [(0.5, 0.0), (0.7, 0.25)])
def test_gain_and_offset_do_not_matter(gain: float, offset: float, rng: np.random.Generator) -> None:
    grey = scenes.pale_on_dark(rng).grey.astype(np.float32)
    first = segment_picture(Picture(grey, UNKNOWN_PIXEL_SIZE))
    second = segment_picture(Picture((gain * grey + np.float32(offset)).astype(np.float32), UNKNOWN_PIXEL_SIZE))
    assert np.mean((first.labels > 0) != (second.labels > 0)) < 1e-3
    assert np.mean(first.pores != second.pores) < 1e-3


def test_inversion_swaps_the_shades(rng: np.random.Generator) -> None:
    scene = scenes.pale_on_dark(rng)
    found = segment_picture(scenes.as_picture(1 - scene.grey), SegmentSettings(pore_shade="bright"))
    assert found.method == "outline: dark"
    assert porosity(found) == pytest.approx(scene.pores.sum() / (scene.labels > 0).sum(), abs=0.01)
    assert found.threshold is not None
    assert found.threshold.bright


@pytest.mark.parametrize("method", ["auto", "global", "local", "two_level"])
def test_every_named_method(method: str, rng: np.random.Generator) -> None:
    scene = scenes.pale_on_dark(rng)
    found = segment_picture(scene.picture, SegmentSettings(pores=method))  # type: ignore[arg-type]
    assert porosity(found) == pytest.approx(scene.pores.sum() / (scene.labels > 0).sum(), abs=0.025)


@pytest.mark.parametrize("method", ["auto", "global", "local", "two_level"])
def test_no_method_splits_the_noise_of_a_dense_particle(method: str, rng: np.random.Generator) -> None:
    found = segment_picture(scenes.dense(rng).picture, SegmentSettings(pores=method))  # type: ignore[arg-type]
    assert porosity(found) < 0.003
    assert set(found.sections[0].flags) & {"no_pores", "no_threshold"}


def test_given_threshold_and_masks(rng: np.random.Generator) -> None:
    scene = scenes.pale_on_dark(rng)
    fixed = segment_picture(scene.picture, SegmentSettings(threshold=0.38))
    assert porosity(fixed) == pytest.approx(scene.pores.sum() / (scene.labels > 0).sum(), abs=0.01)
    given = segment_picture(scene.picture, given_pores=scene.pores, given_particles=scene.labels)
    assert np.array_equal(given.pores, scene.pores)
    assert np.array_equal(given.labels, scene.labels)
    assert given.sections[0].pores_low is None
    assert given.threshold is None


def test_given_mask_of_one_value_holds_separate_particles(rng: np.random.Generator) -> None:
    mask = scenes.disc(90, 90, 50) | scenes.disc(250, 250, 60)
    found = segment_picture(scenes.pale_on_dark(rng).picture, given_particles=np.where(mask, 255, 0))
    assert len(found.sections) == 2
