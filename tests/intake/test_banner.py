"""The banner is cut where it begins, and nothing is cut where there is none."""

from __future__ import annotations

import io

import numpy as np
import pytest
from drawn_pictures import burnt_in, texture, with_banner
from PIL import Image
from scipy import ndimage

from poroscan.intake.banner import find_banner


def _jpeg(grey: np.ndarray, quality: int) -> np.ndarray:
    stream = io.BytesIO()
    Image.fromarray(grey).save(stream, "JPEG", quality=quality)
    return np.asarray(Image.open(stream))


def _rows(grey: np.ndarray) -> int:
    return find_banner(grey.astype(np.float32) / 255)


@pytest.mark.parametrize("kind", ["porous", "disc", "flat"])
@pytest.mark.parametrize(
    ("ground", "ink", "line"), [(0, 255, True), (0, 255, False), (96, 255, False), (255, 0, False)]
)
@pytest.mark.parametrize("quality", [None, 85])
def test_rows_are_exact(
    rng: np.random.Generator, kind: str, ground: int, ink: int, line: bool, quality: int | None
) -> None:
    for rows in (48, 64, 97):
        drawn = with_banner(
            texture(400, 640, rng, kind=kind),
            length=280,
            label="20 µm",
            um=20,
            rows=rows,
            size=17,
            ground=ground,
            ink=ink,
            line=line,
        )
        grey = drawn.grey if quality is None else _jpeg(drawn.grey, quality)
        assert _rows(grey) == rows


def test_gain_offset_and_depth_do_not_matter(rng: np.random.Generator) -> None:
    drawn = with_banner(texture(300, 512, rng), length=200, label="5 µm", um=5)
    grey = drawn.grey.astype(np.float32)
    assert find_banner(grey / 65535 + 0.1) == find_banner(grey) == 64


@pytest.mark.parametrize("kind", ["porous", "disc", "black", "flat"])
def test_pictures_without_banner_lose_nothing(rng: np.random.Generator, kind: str) -> None:
    for noise in (0.0, 3.0, 12.0):
        grey = texture(400, 500, rng, kind=kind, noise=noise)
        assert _rows(grey) == 0
        assert _rows(_jpeg(grey, 50)) == 0


def test_a_dark_featureless_bottom_is_no_banner(rng: np.random.Generator) -> None:
    grey = texture(400, 500, rng)
    for level in (0, 20):
        dark = grey.copy()
        dark[330:] = level
        assert _rows(dark) == 0
        dark[330:] = np.clip(level + rng.normal(0, 3, dark[330:].shape), 0, 255)
        assert _rows(dark) == 0
        dark[360:366, 100:109] = 230  # debris
        dark[381:389, 300:304] = 240
        assert _rows(dark) == 0


def test_beads_on_a_black_bottom_are_no_letters(rng: np.random.Generator) -> None:
    y, x = np.mgrid[:400, :600]
    grey = np.zeros((400, 600))
    for row, column, radius in (
        (150, 200, 90),
        (170, 430, 80),
        (330, 60, 25),
        (345, 190, 30),
        (360, 330, 33),
        (340, 500, 28),
    ):
        grey[(y - row) ** 2 + (x - column) ** 2 < radius**2] = 180
    grey = ndimage.gaussian_filter(grey, 1) + rng.normal(0, 4, grey.shape) * (grey > 0)
    assert _rows(np.clip(grey, 0, 255).astype(np.uint8)) == 0


def test_masks_have_no_banner(rng: np.random.Generator) -> None:
    smooth = ndimage.gaussian_filter(rng.normal(size=(300, 300)), 4)
    assert find_banner((smooth > 0).astype(np.float32)) == 0


@pytest.mark.parametrize("shape", [(1, 1), (5, 500), (500, 5), (40, 40)])
def test_tiny_and_constant_pictures(shape: tuple[int, int]) -> None:
    assert find_banner(np.zeros(shape, np.float32)) == 0
    assert find_banner(np.random.default_rng(0).random(shape, np.float32)) == 0


@pytest.mark.parametrize(("ink", "box"), [(255, None), (0, 255), (255, 0)])
def test_a_burnt_in_bar_is_no_banner(rng: np.random.Generator, ink: int, box: int | None) -> None:
    for kind in ("porous", "disc"):
        drawn = burnt_in(texture(400, 600, rng, kind=kind), length=150, label="20 µm", um=20, ink=ink, box=box)
        assert _rows(drawn.grey) == 0
