from __future__ import annotations

import io
import math

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from poroscan.batch.tables import (
    CURVE_SCHEMA,
    LEADING_KEYS,
    csv_cell,
    curve_table,
    parquet_bytes,
    particle_columns,
    particle_schema,
    pore_schema,
    pore_table,
)
from poroscan.quantities import CATALOGUE, PORE_COLUMNS, Curve, by_key
from poroscan.section import PixelSize


def test_keys_scripts_rely_on_come_first_and_in_order() -> None:
    columns = particle_columns()
    places = [columns.index(key) for key in LEADING_KEYS]
    assert places == sorted(places)
    rest = columns[columns.index("flags") + 1 :]
    assert not set(rest) & set(LEADING_KEYS)
    assert columns[columns.index("porosity") :][:3] == ("porosity", "porosity_low", "porosity_high")


def test_every_quantity_has_its_columns_once() -> None:
    columns = particle_columns()
    assert len(set(columns)) == len(columns)
    for q in CATALOGUE:
        assert q.key in columns
        assert q.pixel_key is None or q.pixel_key in columns
        assert (f"{q.key}_low" in columns) == bool(q.interval)


def test_twins_stand_beside_their_lengths() -> None:
    columns = particle_columns()
    for key in LEADING_KEYS:
        q = by_key(key) if key in {c.key for c in CATALOGUE} else None
        if q and q.pixel_key:
            assert 1 <= columns.index(q.pixel_key) - columns.index(q.key) <= 3


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, ""),
        (math.nan, ""),
        (True, "true"),
        (np.False_, "false"),
        (3, "3"),
        (-0.25, "-0.25"),
        (1 / 3, "0.3333333333"),
        (np.float32(0.5), "0.5"),
        ("=1+1", "'=1+1"),
        ("-5", "'-5"),
        ("plain", "plain"),
    ],
)
def test_cells(value: object, text: str) -> None:
    assert csv_cell(value) == text


def _pores(number: int) -> dict[str, np.ndarray]:
    return {name: np.full(number, 2, dtype=column.dtype) for name, column in PORE_COLUMNS.items()}


def test_pores_scale_with_the_power_of_length() -> None:
    table = pore_table(_pores(1), keys=("b", "i", "1"), pixel_size=PixelSize(0.5)).to_pylist()[0]
    assert (table["area_px2"], table["area_um2"]) == (2.0, 0.5)
    assert (table["diameter_px"], table["diameter_um"]) == (2.0, 1.0)
    assert table["centroid_row_px"] == 2.0
    assert "centroid_row_um" not in table


def test_no_micrometre_is_invented() -> None:
    table = pore_table(_pores(1), keys=("b", "i", "1"), pixel_size=PixelSize(None)).to_pylist()[0]
    assert math.isnan(table["diameter_um"])
    assert table["diameter_px"] == 2.0


def test_empty_tables_keep_their_columns() -> None:
    empty = pore_table(_pores(0), keys=("b", "i", "1"), pixel_size=PixelSize(1.0))
    assert empty.schema == pore_schema()
    assert empty.num_rows == 0
    assert curve_table([], keys=("b", "i", "1"), pixel_size=PixelSize(1.0)).schema == CURVE_SCHEMA
    assert pq.read_table(io.BytesIO(parquet_bytes(particle_schema().empty_table()))).num_rows == 0


def test_curves_carry_their_units() -> None:
    x = np.array([1.0, 2.0])
    curve = Curve("s2", x, x, x, x, x_power=1, y_power=-1)
    known = curve_table([curve], keys=("b", "i", "1"), pixel_size=PixelSize(0.5)).to_pydict()
    assert known["x"] == [0.5, 1.0]
    assert known["y"] == [2.0, 4.0]
    assert (known["x_unit"][0], known["y_unit"][0]) == ("µm", "1/µm")
    unknown = curve_table([curve], keys=("b", "i", "1"), pixel_size=PixelSize(None)).to_pydict()
    assert unknown["x"] == [1.0, 2.0]
    assert (unknown["x_unit"][0], unknown["y_unit"][0]) == ("px", "1/px")


def test_same_table_same_bytes() -> None:
    table = pa.table({"a": [1.0, 2.0]})
    assert parquet_bytes(table) == parquet_bytes(table)
