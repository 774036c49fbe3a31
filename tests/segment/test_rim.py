"""The outline over the mouths of open pores, and the convex hull."""

from __future__ import annotations

import numpy as np
import pytest
from skimage.morphology import convex_hull_image

from poroscan.segment.closing import close_mask, fill_holes
from poroscan.segment.hull import convex_hull
from poroscan.segment.rim import bulge_over_mouths

SHAPE = (300, 300)
ROW, COLUMN = np.mgrid[: SHAPE[0], : SHAPE[1]]


def _disc(row: float, column: float, radius: float) -> np.ndarray:
    return np.hypot(ROW - row, COLUMN - column) <= radius


def test_wide_mouths_of_a_disc_are_bulged_to_the_circle() -> None:
    """Truth: the disc before its rim was cut open. The chords of the closing lose 5 % of it, the arcs half a percent (half a pixel of radius)."""
    disc = _disc(150.3, 149.6, 110)
    angles = np.arange(8) * np.pi / 4 + 0.1
    cuts = np.any([_disc(150.3 + 110 * np.sin(a), 149.6 + 110 * np.cos(a), 26) for a in angles], axis=0)
    material = disc & ~cuts
    chords = fill_holes(close_mask(material, 90))
    bulged = bulge_over_mouths(chords, material)
    assert chords.sum() / disc.sum() < 0.96
    assert bulged.sum() / disc.sum() == pytest.approx(1.0, abs=0.006)
    assert not (chords & ~bulged).any()


def test_a_held_outline_does_not_move() -> None:
    """A square has flat sides, and material lies along all of them."""
    square = (abs(ROW - 150) < 90) & (abs(COLUMN - 150) < 90)
    assert np.array_equal(bulge_over_mouths(square, square), square)


def test_a_quarter_turn_commutes() -> None:
    disc = _disc(150.37, 149.61, 110)
    material = disc & ~_disc(60, 90, 30) & ~_disc(240, 200, 35)
    chords = fill_holes(close_mask(material, 90))
    turned = bulge_over_mouths(np.rot90(chords), np.rot90(material))
    assert np.count_nonzero(turned != np.rot90(bulge_over_mouths(chords, material))) <= 4


def test_hull_against_a_second_implementation(rng: np.random.Generator) -> None:
    """skimage fills the same polygon; pixels exactly on an edge may differ there by rounding."""
    for _ in range(10):
        mask = np.zeros((60, 70), bool)
        mask[rng.integers(5, 55, 12), rng.integers(5, 65, 12)] = True
        mine, other = convex_hull(mask), convex_hull_image(mask, offset_coordinates=False)
        assert not (mask & ~mine).any()
        assert np.count_nonzero(mine != other) <= 3


def test_hull_of_a_line_is_the_line() -> None:
    mask = np.eye(12, dtype=bool)
    assert np.array_equal(convex_hull(mask), mask)
