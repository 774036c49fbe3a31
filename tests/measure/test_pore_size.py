from __future__ import annotations

import math

import numpy as np
import pytest
from media import disc, level_cut
from scipy import ndimage
from skimage.measure import regionprops_table

from poroscan.measure import MeasureSettings, measure_section
from poroscan.measure.bodies import beside_outline, pieces, split_bodies
from poroscan.measure.distance import boundary_distance
from poroscan.measure.pore_size import body_diameters, weighted_quantile
from poroscan.measure.pore_table import empty_table
from poroscan.quantities import PORE_COLUMNS
from poroscan.section import UNKNOWN_PIXEL_SIZE, Section


def discs(centres: list[tuple[float, float]], radii: list[float], shape: tuple[int, int]) -> np.ndarray:
    y, x = np.ogrid[: shape[0], : shape[1]]
    mask = np.zeros(shape, bool)
    for (row, column), radius in zip(centres, radii, strict=True):
        mask |= (y - row) ** 2 + (x - column) ** 2 <= radius**2
    return mask


def section(pores: np.ndarray, **more: object) -> Section:
    particle = np.pad(np.ones(pores.shape, bool), 2)
    return Section(np.pad(pores, 2), particle, UNKNOWN_PIXEL_SIZE, **more)  # type: ignore[arg-type]


def test_two_sizes_with_their_weights() -> None:
    # 27 discs of radius 5 and 3 of radius 15: equal areas, so the number median is 10 and the area median lies between.
    centres = [(10 + 14 * i, 10 + 14 * j) for i in range(9) for j in range(3)]
    centres += [(30, 90), (70, 90), (110, 90)]
    record = measure_section(section(discs(centres, [5.0] * 27 + [15.0] * 3, (140, 120)))).record
    small, large = 2 * math.sqrt(81 / math.pi), 2 * math.sqrt(709 / math.pi)  # pixels of these digital discs
    assert record["pore_count"].value == 30
    assert record["pore_d50_number"].value == pytest.approx(small)
    assert record["pore_d10"].value == pytest.approx(small)
    assert record["pore_d90"].value == pytest.approx(large)
    areas = np.array([81.0] * 27 + [709.0] * 3)
    d = 2 * np.sqrt(areas / math.pi)
    assert record["pore_mean"].value == pytest.approx(np.average(d, weights=areas))
    assert record["pore_d32"].value == pytest.approx((d**3).sum() / (d**2).sum())
    assert record["pore_d43"].value == pytest.approx((d**4).sum() / (d**3).sum())
    assert record["porosity"].value == pytest.approx(areas.sum() / (140 * 120))


def test_iso_9276_2_moments() -> None:
    # d = 1…5 with counts 5, 10, 20, 10, 5: D32 = 3.705882, D43 = 3.952381 (worked example).
    d, n = np.arange(1.0, 6.0), np.array([5, 10, 20, 10, 5])
    assert (n * d**3).sum() / (n * d**2).sum() == pytest.approx(3.705882, abs=1e-6)
    assert weighted_quantile(d, n, q=0.5) == pytest.approx(3.0)
    assert weighted_quantile(d, n, q=0.05) == pytest.approx(1.0)


@pytest.mark.parametrize(("distance", "bodies"), [(15, 1), (22, 1), (34, 2), (38, 2), (60, 2)])
def test_touching_discs_part_at_a_narrow_neck(distance: int, bodies: int) -> None:
    # Half the neck between discs of radius 20 is √(400 − distance²/4): 18.5, 16.7, 10.5, 6.2; parted below 0.75 · 20 = 15.
    mask = discs([(30, 30), (30, 30 + distance)], [20.0, 20.0], (61, 121))
    assert body_diameters(mask, pixel_size=1.0).size == bodies
    assert body_diameters(mask, pixel_size=1.0, split_depth=1.0).size == pieces(mask, diagonal=True)[1]


@pytest.mark.parametrize(("distance", "bodies"), [(33, 1), (38, 2)])
def test_the_smaller_of_two_unlike_discs_decides(distance: int, bodies: int) -> None:
    # Radii 30 and 10, half-necks 9.0 and 5.3: parted below 0.75 · 10, whatever the size of the larger one.
    mask = discs([(40, 40), (40, 40 + distance)], [30.0, 10.0], (81, 101))
    assert body_diameters(mask, pixel_size=1.0).size == bodies


def test_split_halves_are_equal() -> None:
    d = body_diameters(discs([(30, 30), (30, 66)], [20.0, 20.0], (61, 101)), pixel_size=0.5)
    assert d[0] == pytest.approx(d[1], rel=0.02)
    assert d[0] == pytest.approx(20.0, rel=0.02)


def test_bodies_are_parts_of_pieces(rng: np.random.Generator) -> None:
    mask = level_cut((120, 130), length=5, fraction=0.45, rng=rng)
    labels, n = split_bodies(mask, boundary_distance(mask), split_depth=0.25)
    assert ((labels > 0) == mask).all()
    assert set(np.unique(labels)) == set(range(n + 1))
    hull, count = pieces(mask, diagonal=True)
    for k in range(1, n + 1):
        assert len(np.unique(hull[labels == k])) == 1
        assert ndimage.label(labels == k, np.ones((3, 3)))[1] == 1
    assert count <= n
    joined, m = split_bodies(mask, boundary_distance(mask), split_depth=1.0)
    assert m == count
    assert ((joined == 0) == (hull == 0)).all()


def test_more_depth_never_makes_more_bodies(rng: np.random.Generator) -> None:
    mask = level_cut((100, 100), length=4, fraction=0.5, rng=rng)
    distance = boundary_distance(mask)
    counts = [split_bodies(mask, distance, split_depth=s)[1] for s in (0.0, 0.1, 0.25, 0.5, 1.0)]
    assert counts == sorted(counts, reverse=True)


def test_split_in_space() -> None:
    z, y, x = np.mgrid[:31, :31, :51]
    two = ((z - 15) ** 2 + (y - 15) ** 2 + (x - 15) ** 2 <= 100) | (
        (z - 15) ** 2 + (y - 15) ** 2 + (x - 34) ** 2 <= 100
    )
    d = body_diameters(two, pixel_size=1.0)
    assert d.size == 2
    np.testing.assert_allclose(d, 20.0, rtol=0.03)


def test_table_equals_scikit_image(rng: np.random.Generator) -> None:
    # Second implementation, on pieces (no splitting): place, area, axes, orientation.
    mask = level_cut((150, 160), length=6, fraction=0.3, rng=rng)
    particle = np.ones(mask.shape, bool)
    s = Section(mask, particle, UNKNOWN_PIXEL_SIZE, view="interior", origin=(100, 200))
    table = measure_section(s, MeasureSettings(pore_split="none", smallest_pore_px=1)).pores
    assert tuple(table) == tuple(PORE_COLUMNS)
    labels, _ = pieces(mask, diagonal=True)
    names = ("centroid", "area", "axis_major_length", "axis_minor_length", "orientation", "bbox")
    ref = regionprops_table(labels, properties=names)
    np.testing.assert_allclose(table["area"], ref["area"])
    np.testing.assert_allclose(table["centroid_row"], ref["centroid-0"] + 100)
    np.testing.assert_allclose(table["centroid_col"], ref["centroid-1"] + 200)
    # There a pixel is a point, here a square with second moments of 1/12.
    major, minor = ((ref[f"axis_{name}_length"] / 4) ** 2 + 1 / 12 for name in ("major", "minor"))
    np.testing.assert_allclose(table["ellipse_ratio"], np.sqrt(minor / major), rtol=1e-6)
    long = table["ellipse_ratio"] < 0.95
    turn = np.degrees(ref["orientation"]) + 90 - table["orientation_deg"]
    np.testing.assert_allclose((turn[long] + 90) % 180 - 90, 0, atol=1e-6)
    touching = (ref["bbox-0"] == 0) | (ref["bbox-1"] == 0) | (ref["bbox-2"] == 150) | (ref["bbox-3"] == 160)
    np.testing.assert_array_equal(table["touches_frame"], touching)
    assert np.isnan(table["depth"]).all()
    assert not table["open"].any()
    assert (table["solidity"] <= 1).all()


def test_table_of_one_disc() -> None:
    pores = discs([(30, 40)], [12.0], (70, 80))
    table = measure_section(section(pores, origin=(5, 6))).pores
    assert table["diameter"][0] == pytest.approx(24, abs=0.5)
    assert abs(table["inscribed_diameter"][0] - 24) <= 1.0
    assert table["circularity"][0] == pytest.approx(1, abs=0.02)
    assert (table["centroid_row"][0], table["centroid_col"][0]) == (30 + 2 + 5, 40 + 2 + 6)
    assert table["feret_max"][0] == pytest.approx(24, abs=1)
    assert not table["open"][0]


def test_no_pores_is_a_typed_empty_table() -> None:
    table = measure_section(section(np.zeros((40, 40), bool))).pores
    for name, column in PORE_COLUMNS.items():
        assert table[name].shape == (0,)
        assert table[name].dtype == np.dtype(column.dtype)
    assert empty_table(3)["area"].shape == (3,)


def test_small_pores_are_not_counted_but_porous() -> None:
    pores = np.zeros((50, 50), bool)
    pores[10, 10] = pores[20, 20:23] = True
    pores[30:35, 30:35] = True
    record = measure_section(section(pores)).record
    assert record["pore_count"].value == 1
    assert record["porosity"].value == pytest.approx(29 / 2500)
    assert measure_section(section(pores), MeasureSettings(smallest_pore_px=1)).record["pore_count"].value == 3
    assert "few_pores" in record.flags


def test_under_resolved_flag() -> None:
    pores = np.zeros((60, 60), bool)
    pores[::6, ::6] = pores[1::6, ::6] = pores[::6, 1::6] = pores[1::6, 1::6] = True
    record = measure_section(section(pores)).record
    assert record["under_resolved_fraction"].value == 1.0
    assert "under_resolved" in record.flags


def test_size_scales_with_the_picture(rng: np.random.Generator) -> None:
    mask = level_cut((100, 100), length=6, fraction=0.3, rng=rng)
    one = measure_section(section(mask)).record
    two = measure_section(section(np.kron(mask, np.ones((2, 2), bool)))).record
    assert two["pore_d50"].value == pytest.approx(2 * one["pore_d50"].value, rel=0.06)
    assert two["thickness_mean"].value == pytest.approx(2 * one["thickness_mean"].value, rel=0.12)


def test_beside_outline_leaves_out_the_frame() -> None:
    particle = np.zeros((6, 6), bool)
    particle[:4, :4] = True
    near = beside_outline(particle)
    assert near[3].sum() == 4
    assert not near[0, :3].any()


def test_outline_of_a_disc_is_one_ring() -> None:
    particle = disc(10)
    assert beside_outline(particle).sum() == (particle & ~ndimage.binary_erosion(particle)).sum()


def test_wrong_arguments_are_named() -> None:
    with pytest.raises(ValueError, match="pores must be a 2-D or 3-D bool array"):
        body_diameters(np.zeros((3, 3)), pixel_size=1.0)
    with pytest.raises(ValueError, match="split_depth must lie between 0 and 1"):
        body_diameters(np.zeros((3, 3), bool), pixel_size=1.0, split_depth=2.0)
    with pytest.raises(ValueError, match="pores and distance must have one shape"):
        split_bodies(np.zeros((3, 3), bool), np.zeros((3, 4), np.float32), split_depth=0.2)
