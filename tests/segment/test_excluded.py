"""A burnt-in scale bar is neither particle nor pore."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.section import Picture, PixelSize
from poroscan.segment import segment_picture
from poroscan.segment.excluded import box_mask, fill_unknown

SHAPE = (300, 400)
BOX = (262, 250, 292, 390)


def _scene(rng: np.random.Generator, centre: tuple[int, int] = (140, 160)) -> np.ndarray:
    row, column = np.mgrid[: SHAPE[0], : SHAPE[1]]
    grey = np.where(np.hypot(row - centre[0], column - centre[1]) < 90, 0.6, 0.15)
    for dr, dc in ((0, 0), (-40, 20), (35, 40), (10, -45)):
        grey[np.hypot(row - centre[0] - dr, column - centre[1] - dc) < 12] = 0.2
    return (grey + rng.normal(0, 0.015, SHAPE)).astype(np.float32)


def _with_bar(grey: np.ndarray) -> np.ndarray:
    drawn = grey.copy()
    drawn[BOX[0] : BOX[2], BOX[1] : BOX[3]] = 0.0
    drawn[BOX[0] + 12 : BOX[0] + 18, BOX[1] + 10 : BOX[3] - 10] = 1.0
    return drawn


def _picture(grey: np.ndarray, excluded: tuple = ()) -> Picture:
    return Picture(grey, PixelSize(1.0), excluded=excluded)


def test_a_plane_is_filled_exactly() -> None:
    """Planes are harmonic."""
    row, column = np.mgrid[:30, :40]
    plane = (0.01 * row + 0.005 * column).astype(np.float32)
    mask = box_mask(plane.shape, [(8, 10, 20, 30)])
    broken = np.where(mask, np.float32(1.0), plane)
    assert fill_unknown(broken, mask) == pytest.approx(plane, abs=1e-6)


def test_filled_values_lie_between_those_around(rng: np.random.Generator) -> None:
    """The maximum principle, also at the frame."""
    grey = rng.random((40, 50)).astype(np.float32)
    mask = box_mask(grey.shape, [(25, 30, 40, 50)])
    filled = fill_unknown(grey, mask)
    ring = np.concatenate([grey[24, 30:], grey[25:, 29]])
    assert filled[mask].min() > ring.min()
    assert filled[mask].max() < ring.max()
    assert np.array_equal(filled[~mask], grey[~mask])


def test_a_bar_on_the_ground_changes_nothing(rng: np.random.Generator) -> None:
    grey = _scene(rng)
    plain = segment_picture(_picture(grey))
    marked = segment_picture(_picture(_with_bar(grey), (BOX,)))
    assert np.array_equal(plain.labels > 0, marked.labels > 0)
    assert (plain.pores != marked.pores).mean() < 1e-3


def test_a_bar_on_a_particle_is_no_pore(rng: np.random.Generator) -> None:
    """The plate, black as a pore, lies on dense material."""
    grey = _scene(rng, centre=(230, 320))
    grey = np.where(box_mask(SHAPE, [BOX]) & (grey < 0.4) & (np.indices(SHAPE)[0] > 262), np.float32(0.6), grey)
    marked = segment_picture(_picture(_with_bar(grey), (BOX,)))
    inside = box_mask(SHAPE, [(BOX[0] + 4, BOX[1] + 4, BOX[2] - 4, BOX[3] - 30)])
    assert marked.labels[inside].all()
    assert marked.pores[inside].mean() < 0.1


@pytest.mark.parametrize("box", [(0, 0, 0, 5), (0, 0, 301, 5), (-1, 0, 5, 5)])
def test_boxes_outside_the_picture_are_refused(box: tuple) -> None:
    with pytest.raises(ValueError, match="within the picture of shape"):
        _picture(np.zeros(SHAPE, np.float32), (box,))
