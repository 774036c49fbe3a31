from __future__ import annotations

import math
from pathlib import Path

import pytest

from poroscan.quantities import (
    CATALOGUE,
    FLAGS,
    PORE_COLUMNS,
    ROW_COLUMNS,
    Estimate,
    Record,
    by_key,
    groups,
    quantity,
    reference_page,
)
from poroscan.section import VIEWS, PixelSize

#: Columns of particles.csv that scripts may rely on.
PROMISED = [
    "batch",
    "image",
    "particle",
    "centroid_row_px",
    "centroid_col_px",
    "pixel_size_um",
    "pixel_size_source",
    "area_um2",
    "equivalent_diameter_um",
    "circularity",
    "solidity",
    "touches_frame",
    "frame_weight",
    "porosity",
    "porosity_low",
    "porosity_high",
    "core_porosity",
    "shell_porosity",
    "pore_count",
    "pore_d10_um",
    "pore_d50_um",
    "pore_d90_um",
    "thickness_d50_um",
    "wall_d50_um",
    "chord_pore_mean_um",
    "chord_wall_mean_um",
    "surface_per_volume_per_um",
    "euler_density_per_um2",
    "skin_thickness_um",
    "radial_asymmetry",
    "polar_asymmetry",
    "polar_direction_deg",
    "correlation_length_um",
    "characteristic_spacing_um",
    "regime",
    "regime_probability",
    "regime_set",
    "atlas_distance",
    "flags",
]


def test_promised_columns_are_there() -> None:
    columns = set(Record({}).row(PixelSize(1.0))) | set(ROW_COLUMNS)
    assert set(PROMISED) <= columns
    assert {key[:-2] + "px" for key in PROMISED if key.endswith("_um")} <= columns | {"pixel_size_px"}


def test_every_entry_is_complete_and_unique() -> None:
    keys = [key for q in CATALOGUE for key in (q.key, q.pixel_key) if key]
    assert len(keys) == len(set(keys))
    assert not set(keys) & set(ROW_COLUMNS)
    for q in CATALOGUE:
        assert q.label, q.base
        assert q.definition.endswith((".", ")")), q.base
        assert q.source, q.base
        assert q.group, q.base
        assert set(q.dimensions) <= {2, 3}, q.base
        assert q.dimensions, q.base
        assert set(q.views) <= set(VIEWS), q.base
        assert -3 <= q.power <= 3, q.base
        assert "|" not in q.definition + q.label + q.source, q.base


def test_groups_keep_the_order_of_the_catalogue() -> None:
    listed = [q for _, members in groups() for q in members]
    assert listed == list(CATALOGUE)


def test_flags_say_what_to_do() -> None:
    for key, flag in FLAGS.items():
        assert key == key.lower()
        assert flag.words, key
        assert flag.remedy, key


def test_row_in_micrometres_and_pixels() -> None:
    record = Record(
        {"pore_d50": Estimate(10.0, 8.0, 12.0), "euler_density": Estimate(0.5), "polar_direction": Estimate(30.0)}
    )
    row = record.row(PixelSize(0.5))
    assert (row["pore_d50_um"], row["pore_d50_um_low"], row["pore_d50_um_high"], row["pore_d50_px"]) == (5, 4, 6, 10)
    assert (row["euler_density_per_um2"], row["euler_density_per_px2"]) == (2.0, 0.5)
    assert row["polar_direction_deg"] == 30.0
    assert math.isnan(row["porosity"])


def test_no_length_without_a_pixel_size() -> None:
    row = Record({"pore_d50": Estimate(10.0), "porosity": Estimate(0.3)}).row(PixelSize(None))
    assert math.isnan(row["pore_d50_um"])
    assert row["pore_d50_px"] == 10.0
    assert row["porosity"] == 0.3


def test_pixel_size_uncertainty_widens_lengths_only() -> None:
    record = Record({"pore_d50": Estimate(10.0, 9.0, 11.0), "porosity": Estimate(0.3, 0.2, 0.4)})
    row = record.row(PixelSize(1.0, "header", relative_uncertainty=0.05))
    half = math.hypot(1.0, 1.959964 * 0.05 * 10.0)
    assert row["pore_d50_um_high"] == pytest.approx(10 + half)
    assert row["pore_d50_um_low"] == pytest.approx(10 - half)
    assert row["porosity_high"] == 0.4


def test_unknown_names_are_answered_with_near_ones() -> None:
    assert quantity("pore_d50").key == by_key("pore_d50_px").key == "pore_d50_um"
    with pytest.raises(KeyError, match="pore_d50"):
        quantity("pore_d5")
    with pytest.raises(KeyError, match="pore_d50_um"):
        by_key("pore_d50_nm")
    with pytest.raises(KeyError, match="no quantity 'porosit'"):
        Record({"porosit": Estimate(1.0)})
    with pytest.raises(KeyError, match="unknown flag 'odd'"):
        Record({}, ("odd",))


def test_reference_page_is_up_to_date() -> None:
    page = Path(__file__).parents[1] / "docs" / "quantities.md"
    assert page.read_text(encoding="utf-8") == reference_page(), (
        "run: python -m poroscan.quantities > docs/quantities.md"
    )


def test_pore_columns_have_known_types() -> None:
    assert {c.dtype for c in PORE_COLUMNS.values()} <= {"int32", "float64", "bool"}
