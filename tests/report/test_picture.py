from __future__ import annotations

import imagecodecs
import numpy as np
import pytest

from poroscan.report.picture import ORANGE_INDEX, PORE_INDEX, draw, indexed_png, palette, thumbnail


@pytest.fixture
def scene() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rows, columns = np.mgrid[:80, :100]
    labels = ((rows - 40) ** 2 + (columns - 50) ** 2 < 30**2).astype(np.int32)
    pores = (rows - 40) ** 2 + (columns - 50) ** 2 < 10**2
    grey = np.where(labels > 0, 0.8, 0.2).astype(np.float32)
    grey[pores] = 0.3
    return grey, labels, pores


def test_outline_and_pore_edges_lie_on_the_boundaries(scene: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    grey, labels, pores = scene
    index = draw(grey, labels, pores)
    rows, columns = np.nonzero(index == ORANGE_INDEX)
    assert np.hypot(rows - 40, columns - 50) == pytest.approx(30, abs=1.6)
    rows, columns = np.nonzero(index == PORE_INDEX)
    assert np.hypot(rows - 40, columns - 50) == pytest.approx(9.5, abs=1.0)
    assert not (index == PORE_INDEX)[~pores].any()


def test_palette_png_is_read_back(scene: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    index = draw(*scene, numbers=True)
    decoded = imagecodecs.png_decode(indexed_png(index))
    assert decoded.shape == (80, 100, 3)
    np.testing.assert_array_equal(decoded, palette()[index])


def test_dim_picture_is_stretched_and_constant_one_survives() -> None:
    none = np.zeros((20, 20), dtype=bool)
    dim = np.linspace(0.1, 0.12, 400, dtype=np.float32).reshape(20, 20)
    assert np.ptp(draw(dim, none.astype(int), none)) > 200
    draw(np.full((20, 20), 0.5, dtype=np.float32), none.astype(int), none)


def test_thumbnail_has_the_asked_size_and_shows_outline_and_pores(
    scene: tuple[np.ndarray, np.ndarray, np.ndarray],
) -> None:
    grey, labels, pores = (np.kron(a, np.ones((4, 4), dtype=a.dtype)) for a in scene)
    small = imagecodecs.webp_decode(thumbnail(grey, labels, pores, longest=200, quality=80))
    assert small.shape == (160, 200, 3)
    red, blue = small[..., 0].astype(int), small[..., 2].astype(int)
    assert (red - blue)[80, 40:45].max() > 60  # orange where the outline crosses the middle row
    assert blue[80, 100] - red[80, 100] > 30  # blue inside the pore


def test_colours_differ_in_lightness() -> None:
    """They are told apart without colour: relative luminance (ITU-R BT.709)."""
    light = palette()[[ORANGE_INDEX, PORE_INDEX]] @ np.array([0.2126, 0.7152, 0.0722])
    assert abs(light[0] - light[1]) > 30
