"""Which view particles in contact and particles cut by the frame are taken for."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.section import UNKNOWN_PIXEL_SIZE, Picture
from poroscan.segment import segment_picture
from poroscan.segment.outline import Candidate, like_debris
from poroscan.segment.view import frame_share, is_edge


def _discs(shape: tuple[int, int], centres: list[tuple[int, int]], radius: float) -> np.ndarray:
    row, column = np.mgrid[: shape[0], : shape[1]]
    return np.any([np.hypot(row - r, column - c) < radius for r, c in centres], axis=0)


def test_three_particles_in_contact_are_whole_particles(rng: np.random.Generator) -> None:
    """Their common hull is hardly filled, yet each of them fills its own."""
    shape, centres = (420, 560), [(110, 130), (210, 280), (310, 430)]
    particle = _discs(shape, centres, 91)
    pores = _discs(shape, [(r + a, c + b) for r, c in centres for a in (-40, 0, 40) for b in (-40, 0, 40)], 10)
    grey = np.where(particle & ~pores, 0.55, 0.12) + rng.normal(0, 0.02, shape)
    found = segment_picture(Picture(grey.astype(np.float32), UNKNOWN_PIXEL_SIZE))
    assert found.view == "whole"
    assert len(found.sections) == 3


def test_a_narrow_gap_of_ground_is_no_pore(rng: np.random.Generator) -> None:
    """Two dense discs ten pixels apart: the ground that a closing bridges belongs to neither, and no pore opens there."""
    shape, centres, radius = (420, 720), [(210, 185), (210, 535)], 170
    grey = np.where(_discs(shape, centres, radius), 0.55, 0.12) + rng.normal(0, 0.02, shape)
    found = segment_picture(Picture(grey.astype(np.float32), UNKNOWN_PIXEL_SIZE))
    assert len(found.sections) == 2
    for section in found.sections:
        assert np.count_nonzero(section.particle) == pytest.approx(np.pi * radius**2, rel=0.01)
        assert np.count_nonzero(section.pores) < 0.0005 * np.count_nonzero(section.particle)


@pytest.mark.parametrize(
    ("centre", "edge"), [((150, 150), False), ((150, 60), False), ((150, 0), True), ((0, 0), True)]
)
def test_a_disc_cut_in_half_is_an_edge(centre: tuple[int, int], edge: bool) -> None:
    labels = _discs((300, 300), [centre], 120).astype(np.int32)
    assert is_edge(labels) is edge


def test_frame_share_of_half_a_disc() -> None:
    """Closed form: the diameter over diameter and half circumference, 2/(2 + π)."""
    assert frame_share(_discs((401, 300), [(200, 0)], 150)) == pytest.approx(2 / (2 + np.pi), abs=0.01)


@pytest.mark.parametrize(("contrast", "share", "debris"), [(0.2, 0.01, True), (2.0, 0.01, False), (0.2, 0.3, False)])
def test_debris_is_small_and_hardly_stands_out(
    rng: np.random.Generator, contrast: float, share: float, debris: bool
) -> None:
    """Otsu's threshold splits one Gaussian mode into halves whose medians are 2.5 to 3.5 of their spreads apart."""
    feature = rng.normal(0.3, 0.1, (200, 200)).astype(np.float32)
    bodies = np.zeros(feature.shape, bool)
    bodies[: int(200 * share)] = True
    feature[bodies] += contrast
    assert like_debris(Candidate("pale", feature, 0.4, bodies, bodies, 3.0, 0.5)) is debris
