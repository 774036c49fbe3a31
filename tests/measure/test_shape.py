from __future__ import annotations

import math

import numpy as np
import pytest
from media import disc

from poroscan.measure.shape import convex_hull, feret_diameters, mask_shape, polygon_shape

NAMES = ("circularity", "form_factor", "roundness", "compactness", "aspect_ratio", "solidity", "convexity")

#: Exact values of the ISO 9276-6 definitions, C, FF, roundness, compactness, aspect, solidity, convexity (six digits).
POLYGONS = {
    "square": ([(0, 0), (0, 1), (1, 1), (1, 0)], (0.886227, 0.785398, 0.636620, 0.797885, 0.707107, 1, 1)),
    "rectangle": ([(0, 0), (0, 2), (1, 2), (1, 0)], (0.835543, 0.698132, 0.509296, 0.713650, 0.447214, 1, 1)),
    "triangle": (
        [(0, 0), (0, 1), (math.sqrt(3) / 2, 0.5)],
        (0.777560, 0.604600, 0.551329, 0.742515, 0.866025, 1, 1),
    ),
    "hexagon": (
        [(math.sin(k * math.pi / 3), math.cos(k * math.pi / 3)) for k in range(6)],
        (0.952313, 0.906900, 0.826993, 0.909392, 0.866025, 1, 1),
    ),
    "L": (
        [(0, 0), (2, 0), (2, 1), (1, 1), (1, 2), (0, 2)],
        # The least width is 2, between the long sides (2.12 across the cut corner is no minimum): aspect 1/√2.
        (0.767495, 0.589049, 0.477465, 0.690988, 0.707107, 0.857143, 0.926777),
    ),
}


@pytest.mark.parametrize("name", POLYGONS)
def test_polygons_are_exact(name: str) -> None:
    points, expected = POLYGONS[name]
    shape = polygon_shape(points)
    for key, value in zip(NAMES, expected, strict=True):
        assert getattr(shape, key) == pytest.approx(value, abs=5.1e-7), key


def test_square_to_nine_digits() -> None:
    shape = polygon_shape([(0, 0), (0, 1), (1, 1), (1, 0)])
    assert shape.circularity == pytest.approx(math.sqrt(math.pi) / 2, abs=1e-9)
    assert shape.form_factor == pytest.approx(math.pi / 4, abs=1e-9)  # the squared definition: a trap of names
    assert shape.roundness == pytest.approx(2 / math.pi, abs=1e-9)
    assert shape.compactness == pytest.approx(math.sqrt(2 / math.pi), abs=1e-9)
    assert shape.ellipse_ratio == pytest.approx(1, abs=1e-9)
    lshape = polygon_shape(POLYGONS["L"][0])
    assert lshape.solidity == pytest.approx(3 / 3.5, abs=1e-9)
    assert lshape.convexity == pytest.approx((6 + math.sqrt(2)) / 8, abs=1e-9)


@pytest.mark.parametrize(
    ("ratio", "circularity"),
    [(1.0, 1.0), (1.5, 0.970071), (2.0, 0.917151), (3.0, 0.814282), (5.0, 0.668710), (10.0, 0.488910)],
)
def test_ellipses_as_fine_polygons(ratio: float, circularity: float) -> None:
    t = np.linspace(0, 2 * math.pi, 2000, endpoint=False)
    shape = polygon_shape(np.column_stack([np.sin(t), ratio * np.cos(t)]))
    assert shape.circularity == pytest.approx(circularity, abs=2e-6)
    assert shape.roundness == pytest.approx(1 / ratio, abs=2e-6)
    assert shape.ellipse_ratio == pytest.approx(1 / ratio, abs=2e-6)
    assert shape.aspect_ratio == pytest.approx(1 / ratio, abs=2e-6)


def test_semi_disc() -> None:
    t = np.linspace(0, math.pi, 2001)
    shape = polygon_shape(np.column_stack([np.sin(t), np.cos(t)]))
    for key, value in zip(NAMES[:5], (0.864106, 0.746680, 0.5, 0.707107, 0.5), strict=True):
        assert getattr(shape, key) == pytest.approx(value, abs=2e-6)


def test_polygon_invariance(rng: np.random.Generator) -> None:
    points = np.array(POLYGONS["L"][0], float)
    turn = np.array([[math.cos(0.7), -math.sin(0.7)], [math.sin(0.7), math.cos(0.7)]])
    one, other = polygon_shape(points), polygon_shape(3 * points[::-1] @ turn + 1000)
    for key in (*NAMES, "ellipse_ratio"):
        assert getattr(one, key) == pytest.approx(getattr(other, key), abs=1e-9)
    assert other.area == pytest.approx(9 * one.area)
    assert other.feret_max == pytest.approx(3 * one.feret_max)


@pytest.mark.parametrize("radius", [20.0, 41.3, 100.0])
def test_digital_discs(radius: float) -> None:
    # Shapes of at least 40 px: circularity within 0.02 with a Crofton perimeter (a pixel-edge perimeter errs by 27 %).
    shape = mask_shape(disc(radius), pixel_size=1.0)
    assert shape.circularity == pytest.approx(1.0, abs=0.01)
    assert shape.perimeter == pytest.approx(2 * math.pi * radius, rel=0.01)
    assert shape.feret_max == pytest.approx(2 * radius, abs=1.0)
    assert shape.feret_min == pytest.approx(2 * radius, abs=1.0)
    assert shape.solidity == 1.0
    assert shape.convexity == pytest.approx(1.0, abs=0.015)
    assert shape.ellipse_ratio == pytest.approx(1.0, abs=1e-9)


def test_digital_squares_and_ellipse() -> None:
    square = mask_shape(np.ones((60, 60), bool), pixel_size=1.0)
    assert square.solidity == 1.0
    assert square.circularity == pytest.approx(0.886227, abs=0.02)
    assert square.feret_min == pytest.approx(60.0)
    assert square.ellipse_ratio == pytest.approx(1.0)
    y, x = np.mgrid[-90:91, -90:91]
    for angle in (0.0, 0.4, 1.0):
        u, v = x * math.cos(angle) + y * math.sin(angle), y * math.cos(angle) - x * math.sin(angle)
        shape = mask_shape((u / 80) ** 2 + (v / 40) ** 2 <= 1, pixel_size=1.0)
        assert shape.ellipse_ratio == pytest.approx(0.5, abs=0.002)
        assert shape.aspect_ratio == pytest.approx(0.5, abs=0.01)
        assert shape.circularity == pytest.approx(0.917151, abs=0.02)
        assert shape.solidity == 1.0
    turned = np.abs(x) + np.abs(y) <= 60
    assert mask_shape(turned, pixel_size=1.0).circularity == pytest.approx(0.886227, abs=0.02)


def test_holes_and_scale() -> None:
    mask = disc(30)
    holed = mask.copy()
    holed[28:36, 30:34] = False
    one, other = mask_shape(mask, pixel_size=1.0), mask_shape(holed, pixel_size=0.5)
    assert one.circularity == other.circularity
    assert other.perimeter == pytest.approx(one.perimeter / 2)
    assert other.area == pytest.approx(one.area / 4)


def test_hull_against_scipy(rng: np.random.Generator) -> None:
    from scipy.spatial import ConvexHull
    from scipy.spatial.distance import pdist

    points = rng.standard_normal((200, 2))
    hull = convex_hull(points)
    assert len(hull) == len(ConvexHull(points).vertices)
    assert feret_diameters(hull)[0] == pytest.approx(pdist(points).max())
    turns = np.linspace(0, math.pi, 20_001)
    widths = np.ptp(hull @ np.array([np.cos(turns), np.sin(turns)]), axis=0)
    assert feret_diameters(hull)[1] == pytest.approx(widths.min(), rel=1e-4)


def test_tiny_masks() -> None:
    one = mask_shape(np.ones((1, 1), bool), pixel_size=1.0)
    assert one.solidity == 1.0
    assert one.feret_max == pytest.approx(1.0)
    line = mask_shape(np.ones((1, 9), bool), pixel_size=1.0)
    assert line.feret_max == pytest.approx(9.0)
    assert 0 < line.aspect_ratio < 0.2


@pytest.mark.parametrize("bad", [np.zeros((3, 3), bool), np.ones((3, 3), int), np.ones((3, 3, 3), bool)])
def test_wrong_masks_are_named(bad: np.ndarray) -> None:
    with pytest.raises(ValueError, match="mask must be a 2-D bool array"):
        mask_shape(bad, pixel_size=1.0)


def test_wrong_polygons_are_named() -> None:
    with pytest.raises(ValueError, match="at least 3 finite corners"):
        polygon_shape([(0, 0), (1, 1)])
    with pytest.raises(ValueError, match="at least 3 finite corners"):
        polygon_shape([(0, 0), (1, 1), (math.nan, 2)])
    with pytest.raises(ValueError, match="must enclose an area"):
        polygon_shape([(0, 0), (1, 1), (2, 2)])
