"""The whole of measure_section: completeness, order, bad input."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from media import disc, gaussian_field

from poroscan.measure import MeasureSettings, measure_section
from poroscan.measure.shared import Shared
from poroscan.quantities import CATALOGUE, FLAGS, PORE_COLUMNS
from poroscan.section import UNKNOWN_PIXEL_SIZE, PixelSize, Section

CURVES = {
    "radial_porosity",
    "radial_porosity_normalised",
    "s2",
    "s2_rows",
    "s2_columns",
    "lineal_path",
    "cluster_function",
    "structure_factor",
    "pore_size_number",
    "pore_size_area",
    "local_thickness_pores",
    "local_thickness_walls",
    "opening_granulometry",
    "chord_pores",
    "chord_walls",
}

#: Bases that need more than one section (known particle diameter); measured over a batch.
BATCH_ONLY = {"section_offset"}


def porous(radius: int, rng: np.random.Generator, *, length: float = 4.0) -> Section:
    particle = disc(radius, margin=2)
    pores = particle & (gaussian_field(particle.shape, length=length, rng=rng) > 0.3)
    return Section(pores, particle, PixelSize(0.5))


def test_every_plane_quantity_has_a_value(rng: np.random.Generator) -> None:
    # A structure with a preferred distance, so that its structure factor has a peak.
    particle = disc(100, margin=2)
    ring = gaussian_field(particle.shape, length=3, rng=rng) - gaussian_field(particle.shape, length=6, rng=rng)
    pores = particle & (ring > 0.5)
    found = measure_section(Section(pores, particle, PixelSize(0.5), grey=(0.8 - 0.6 * pores).astype(np.float32)))
    missing = [
        q.base
        for q in CATALOGUE
        if 2 in q.dimensions and q.base not in found.record.estimates and q.base not in BATCH_ONLY
    ]
    assert missing == []
    assert {c.name for c in found.curves} >= CURVES


def test_fractions_and_intervals_are_sane(rng: np.random.Generator) -> None:
    record = measure_section(porous(90, rng)).record
    for base, e in record.estimates.items():
        if math.isfinite(e.low) and base != "polar_direction":
            assert e.low <= e.value <= e.high, base
        if "porosity" in base and math.isfinite(e.value):
            assert 0 <= e.value <= 1, base
        assert all(u >= 0 for u in e.components.values()), base


def test_same_bytes_twice(rng: np.random.Generator) -> None:
    section = porous(60, rng)
    one, two = (measure_section(section, rng=5) for _ in range(2))
    assert repr(one.record.row(section.pixel_size)) == repr(two.record.row(section.pixel_size))
    for a, b in zip(one.curves, two.curves, strict=True):
        np.testing.assert_array_equal(a.y, b.y)


def test_rotation_by_a_right_angle(rng: np.random.Generator) -> None:
    section = porous(60, rng)
    turned = Section(np.rot90(section.pores), np.rot90(section.particle), section.pixel_size)
    one, two = measure_section(section).record, measure_section(turned).record
    for base in (
        "porosity",
        "surface_per_volume",
        "euler_density",
        "thickness_d50",
        "wall_d50",
        "circularity",
    ):
        assert two[base].value == pytest.approx(one[base].value, rel=1e-6), base
    # Equal distances are flooded in the order of the array, so that a few pixels on necks change sides.
    assert two["pore_d50"].value == pytest.approx(one["pore_d50"].value, rel=0.03)
    assert two["chord_pore_mean_rows"].value == pytest.approx(one["chord_pore_mean_columns"].value)


def test_arrays_of_any_layout(rng: np.random.Generator) -> None:
    section = porous(40, rng)
    row = repr(measure_section(section, rng=1).record.row(section.pixel_size))
    wide = np.zeros((2 * section.pores.shape[0], 3 * section.pores.shape[1]), bool)
    strided = wide[::2, ::3]
    strided[...] = section.pores
    locked = section.particle.copy()
    locked.flags.writeable = False
    for pores, particle in (
        (strided, locked),
        (np.asfortranarray(section.pores), np.asfortranarray(section.particle)),
    ):
        other = measure_section(Section(pores, particle, section.pixel_size), rng=1)
        assert repr(other.record.row(section.pixel_size)) == row


def test_a_volume(rng: np.random.Generator) -> None:
    z, y, x = np.mgrid[-16:17, -16:17, -16:17]
    ball = z**2 + y**2 + x**2 <= 14.5**2
    pores = ball & (gaussian_field(ball.shape, length=3, rng=rng) > 0.2)
    found = measure_section(Section(pores, ball, PixelSize(1.0)))
    assert "volume" in found.record.flags
    assert found.record["volume"].value == ball.sum()
    assert found.record["equivalent_diameter"].value == pytest.approx(29, abs=1)
    for base in (
        "porosity",
        "surface_per_volume",
        "euler_density_3d",
        "thickness_d50",
        "wall_d50",
        "pore_d50",
        "chord_pore_mean",
    ):
        assert math.isfinite(found.record[base].value), base
    assert math.isnan(found.record.row(PixelSize(1.0))["circularity"])
    assert tuple(found.pores) == tuple(PORE_COLUMNS)


@pytest.mark.parametrize(
    "particle",
    [
        np.pad(np.ones((1, 1), bool), 1),
        np.ones((1, 1), bool),
        np.ones((1, 30), bool),
        np.ones((30, 1), bool),
        np.pad(np.ones((1, 30), bool), 1),
        np.ones((2, 2), bool),
        np.pad(np.ones((3, 3, 3), bool), 1),
        np.ones((1, 1, 1), bool),
        np.ones((1, 5, 7), bool),
    ],
    ids=lambda m: f"{m.shape}",
)
def test_tiny_sections_give_nan_and_flags_not_crashes(particle: np.ndarray) -> None:
    for pores in (particle & False, particle.copy(), particle & (np.indices(particle.shape).sum(axis=0) % 2 == 0)):
        for view in ("whole", "interior", "edge"):
            found = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, view=view))  # type: ignore[arg-type]
            assert found.record.flags
            assert 0 <= found.record["porosity"].value <= 1


@pytest.mark.parametrize("kind", [">i2", "int64", "float64", ">f4", "uint8"])
def test_integer_and_float_masks_are_refused_with_a_remedy(kind: str) -> None:
    mask = np.ones((5, 5), kind)
    with pytest.raises(ValueError, match=r"Section.pores must be a bool array \(use array.astype\(bool\)\)"):
        Section(mask, np.ones((5, 5), bool), UNKNOWN_PIXEL_SIZE)  # type: ignore[arg-type]


def test_empty_mask_and_pores_outside_are_refused() -> None:
    mask = np.zeros((5, 5), bool)
    with pytest.raises(ValueError, match=r"Section\.particle is empty"):
        Section(mask, mask, UNKNOWN_PIXEL_SIZE)
    inside = mask.copy()
    inside[2, 2] = True
    with pytest.raises(ValueError, match="pores outside"):
        Section(~mask, inside, UNKNOWN_PIXEL_SIZE)


def test_nan_grey_gives_no_grey_porosity(rng: np.random.Generator) -> None:
    section = porous(40, rng)
    grey = np.where(section.pores, np.nan, 0.5).astype(np.float32)
    record = measure_section(Section(section.pores, section.particle, PixelSize(1.0), grey=grey)).record
    assert math.isnan(record["porosity_grey"].value)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.too_slow], derandomize=True)
@given(data=st.data())
def test_no_section_crashes(data: st.DataObject) -> None:
    shape = data.draw(hnp.array_shapes(min_dims=2, max_dims=3, min_side=1, max_side=12))
    particle = data.draw(hnp.arrays(bool, shape))
    pores = data.draw(hnp.arrays(bool, shape))
    view = data.draw(st.sampled_from(["whole", "edge", "interior"]))
    band = data.draw(st.booleans())
    if not particle.any():
        particle[(0,) * particle.ndim] = True
    pores &= particle
    low, high = (pores & False, particle.copy()) if band else (None, None)
    found = measure_section(Section(pores, particle, UNKNOWN_PIXEL_SIZE, view=view, pores_low=low, pores_high=high))
    assert set(found.record.flags) <= set(FLAGS)
    for base, e in found.record.estimates.items():
        assert not math.isinf(e.value), base


def test_settings_name_what_is_wrong() -> None:
    with pytest.raises(ValueError, match=r"MeasureSettings\.split_depth must lie between"):
        MeasureSettings(split_depth=2)
    with pytest.raises(ValueError, match="pore_split must be 'watershed' or 'none'"):
        MeasureSettings(pore_split="other")  # type: ignore[arg-type]
    with pytest.raises(TypeError, match="unexpected keyword"):
        MeasureSettings(splitdepth=0.1)  # type: ignore[call-arg]


def test_shared_arrays_come_and_go(rng: np.random.Generator) -> None:
    shared = Shared(porous(20, rng), MeasureSettings())
    depth = shared.depth
    assert shared.depth is depth
    shared.release("depth")
    assert "depth" not in shared.__dict__
    assert shared.depth is not depth
    with pytest.raises(ValueError, match="no lazily computed array 'deepness'"):
        shared.release("deepness")
