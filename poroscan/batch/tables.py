"""Columns of the tables of a run, and how rows become CSV and Parquet.

Columns and types are declared here once and hold for empty tables too. Tables are written row group by row group, so
that their size does not count in memory.
"""

from __future__ import annotations

import csv
import functools
import io
import math
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import IO, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from poroscan.batch.names import spreadsheet_safe
from poroscan.quantities import CATALOGUE, PORE_COLUMNS, SUFFIXES, UNITS, Curve, Quantity, by_key
from poroscan.section import PixelSize

#: Keys of particles.csv that scripts may rely on, in their order; twins and intervals stand beside each.
LEADING_KEYS: tuple[str, ...] = (
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
)

_TEXT = {"batch", "image", "particle", "pixel_size_source", "regime", "regime_set", "flags", "view"}
_BOOL = {"touches_frame"}
_OWN = (
    _TEXT
    | _BOOL
    | {
        "centroid_row_px",
        "centroid_col_px",
        "pixel_size_um",
        "frame_weight",
        "regime_probability",
        "atlas_distance",
    }
)


def quantity_columns(q: Quantity) -> tuple[str, ...]:
    """Columns of one quantity in particles.csv: value, ends of the interval, pixel twin.

    Parameters
    ----------
    q
        Catalogue entry.
    """
    ends = (f"{q.key}_low", f"{q.key}_high") if q.interval else ()
    return (q.key, *ends, *((q.pixel_key,) if q.pixel_key else ()))


@functools.cache
def particle_columns() -> tuple[str, ...]:
    """All columns of particles.csv in order: those scripts may rely on, then the rest of the catalogue."""
    columns: list[str] = []
    for key in LEADING_KEYS:
        columns.extend([key] if key in _OWN else quantity_columns(by_key(key)))
    for q in CATALOGUE:
        columns.extend(c for c in quantity_columns(q) if c not in columns)
    return (*columns, "view")


@functools.cache
def particle_schema() -> pa.Schema:
    """Arrow schema of particles.parquet."""
    return pa.schema([(c, _type_of(c)) for c in particle_columns()])


def _type_of(column: str) -> pa.DataType:
    return pa.string() if column in _TEXT else pa.bool_() if column in _BOOL else pa.float64()


@functools.cache
def pore_schema() -> pa.Schema:
    """Arrow schema of pores.parquet: lengths in micrometres, each with its twin in pixels."""
    fields = [(name, pa.string()) for name in ("batch", "image", "particle")]
    for name, column in PORE_COLUMNS.items():
        kind = pa.from_numpy_dtype(np.dtype(column.dtype))
        if column.power:
            fields.append((name + SUFFIXES[column.power][0], kind))
        fields.append((_pore_pixel_key(name), kind))
    return pa.schema(fields)


def _pore_pixel_key(name: str) -> str:
    if name.startswith("centroid_"):
        return f"{name}_px"
    return name + SUFFIXES[PORE_COLUMNS[name].power][1]


#: Arrow schema of curves.parquet. ``x`` and ``y`` are in ``x_unit`` and ``y_unit``: micrometres where the pixel size is known.
CURVE_SCHEMA = pa.schema(
    [(name, pa.string()) for name in ("batch", "image", "particle", "curve")]
    + [(name, pa.float64()) for name in ("x", "y", "low", "high")]
    + [(name, pa.string()) for name in ("x_unit", "y_unit")]
)


def pore_table(pores: Mapping[str, np.ndarray], *, keys: tuple[str, str, str], pixel_size: PixelSize) -> pa.Table:
    """Table of the pores of one particle.

    Parameters
    ----------
    pores
        Columns of ``quantities.PORE_COLUMNS``, in pixels.
    keys
        Batch, image and particle.
    pixel_size
        Scale; micrometre columns are NaN where it is unknown.
    """
    number = len(pores["pore"])
    data: dict[str, Any] = {k: [v] * number for k, v in zip(("batch", "image", "particle"), keys, strict=True)}
    for name, column in PORE_COLUMNS.items():
        values = np.asarray(pores[name], dtype=column.dtype)
        if column.power:
            scale = math.nan if pixel_size.um is None else pixel_size.um**column.power
            data[name + SUFFIXES[column.power][0]] = values * scale
        data[_pore_pixel_key(name)] = values
    return pa.table(data, schema=pore_schema())


def curve_table(curves: Iterable[Curve], *, keys: tuple[str, str, str], pixel_size: PixelSize) -> pa.Table:
    """Long table of the curves of one particle.

    Parameters
    ----------
    curves
        Curves in pixels.
    keys
        Batch, image and particle.
    pixel_size
        Scale; where it is unknown the curves stay in pixels, which ``x_unit`` and ``y_unit`` say.
    """
    parts = [_one_curve(curve, keys=keys, pixel_size=pixel_size) for curve in curves]
    return pa.concat_tables(parts) if parts else CURVE_SCHEMA.empty_table()


def _one_curve(curve: Curve, *, keys: tuple[str, str, str], pixel_size: PixelSize) -> pa.Table:
    um, n = pixel_size.um, len(curve.x)
    x_scale, y_scale = (1.0 if um is None else um**power for power in (curve.x_power, curve.y_power))
    units = [UNITS[p] if um is not None else UNITS[p].replace("µm", "px") for p in (curve.x_power, curve.y_power)]
    columns: list[Any] = [[key] * n for key in (*keys, curve.name)]
    columns += [np.asarray(curve.x, dtype=np.float64) * x_scale]
    columns += [np.asarray(v, dtype=np.float64) * y_scale for v in (curve.y, curve.low, curve.high)]
    columns += [[unit] * n for unit in units]
    return pa.table(dict(zip(CURVE_SCHEMA.names, columns, strict=True)), schema=CURVE_SCHEMA)


def parquet_bytes(table: pa.Table) -> bytes:
    """A table as a Parquet file in memory.

    Parameters
    ----------
    table
        The table.
    """
    sink = io.BytesIO()
    pq.write_table(table, sink, compression="zstd")
    return sink.getvalue()


class ParquetStream:
    """Writes a Parquet file from many small tables or rows, gathering them into row groups of useful size.

    Parameters
    ----------
    path
        File to write.
    schema
        Its columns; written also when no row comes.
    """

    _ROWS, _TABLES, _PLAIN_ROWS = 50_000, 400, 500

    def __init__(self, path: Path, schema: pa.Schema) -> None:
        self._writer = pq.ParquetWriter(path, schema, compression="zstd")
        self._schema = schema
        self._tables: list[pa.Table] = []
        self._plain: list[Mapping[str, Any]] = []

    def add(self, table: pa.Table) -> None:
        """Append a table.

        Parameters
        ----------
        table
            Rows of the declared schema.
        """
        self._tables.append(table.cast(self._schema))
        if len(self._tables) >= self._TABLES or sum(t.num_rows for t in self._tables) >= self._ROWS:
            self._flush()

    def add_rows(self, rows: Iterable[Mapping[str, Any]]) -> None:
        """Append rows that are plain dicts; undefined values are None.

        Parameters
        ----------
        rows
            Rows with the columns of the schema.
        """
        self._plain.extend(rows)
        if len(self._plain) >= self._PLAIN_ROWS:
            self._flush()

    def _flush(self) -> None:
        if self._plain:
            self._tables.append(pa.Table.from_pylist(self._plain, schema=self._schema))
        table = pa.concat_tables(self._tables).combine_chunks() if self._tables else None
        if table is not None and table.num_rows:
            self._writer.write_table(table, row_group_size=table.num_rows)
        self._tables, self._plain = [], []

    def close(self) -> None:
        """Write what is left and finish the file."""
        self._flush()
        self._writer.close()


def csv_writer(handle: IO[str], columns: Sequence[str]) -> csv.DictWriter[str]:
    """Writer for a table with a header row; every row must hold every column.

    Parameters
    ----------
    handle
        Text file opened with ``newline=""``.
    columns
        Columns in order.
    """
    writer = csv.DictWriter(handle, fieldnames=list(columns), lineterminator="\n")
    writer.writeheader()
    return writer


def csv_row(row: Mapping[str, Any]) -> dict[str, str]:
    """Cells as text: numbers with ten digits, undefined ones empty, text safe in a spreadsheet.

    Parameters
    ----------
    row
        Values by column.
    """
    return {key: csv_cell(value) for key, value in row.items()}


def csv_cell(value: Any) -> str:
    """One cell as text.

    Parameters
    ----------
    value
        Text, number, truth value or None.
    """
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    if isinstance(value, bool | np.bool_):
        return "true" if value else "false"
    if isinstance(value, int | np.integer):
        return str(int(value))
    if isinstance(value, float | np.floating):
        return format(float(value), ".10g")
    return spreadsheet_safe(str(value))
