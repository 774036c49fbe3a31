"""Descriptors of what is to be matched: rows of a run folder, or simulated fields."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from poroscan.atlas.views import clean_section
from poroscan.errors import InputError, StoreError
from poroscan.intake import read_field
from poroscan.intake.fields import section_of_field
from poroscan.measure import measure_section
from poroscan.measure.descriptors import descriptors
from poroscan.quantities import CATALOGUE, Curve, Estimate, Record

_TABLE, _CURVES = "particles.parquet", "curves.parquet"
_FIELDS = frozenset({".npy", ".npz", ".h5", ".hdf5", ".tif", ".tiff", ".vti", ".vtk"})


@dataclass(frozen=True)
class Described:
    """One particle with what a match needs.

    Parameters
    ----------
    batch, image, particle
        Its keys; a field has its file name as image.
    view
        ``whole``, ``edge`` or ``interior``.
    values
        Descriptors.
    """

    batch: str
    image: str
    particle: str
    view: str
    values: Mapping[str, float]


def is_run(path: str | Path) -> bool:
    """Whether a path is a run folder."""
    return (Path(path) / "run.json").exists()


def particles_of_run(folder: str | Path) -> Iterator[Described]:
    """Every measured particle of a run folder.

    Raises
    ------
    StoreError
        If its tables are missing, damaged, or lack a column.
    """
    root = Path(folder)
    rows = _read(root / _TABLE).to_pylist()
    curves = _curves_by_particle(_read(root / _CURVES))
    for row in rows:
        if row.get("particle") is None:
            continue
        keys = (str(row["batch"]), str(row["image"]), str(row["particle"]))
        record = record_of_row(row, name=str(root / _TABLE))
        found = curves.get(keys, ())
        yield Described(*keys, row.get("view") or "whole", descriptors(record, _in_pixels(found, row)))


def record_of_row(row: Mapping[str, Any], *, name: str) -> Record:
    """The estimates of a row of ``particles.csv``, in pixels.

    Raises
    ------
    StoreError
        If a column of the catalogue is missing.
    """
    estimates: dict[str, Estimate] = {}
    for q in CATALOGUE:
        column = q.pixel_key or q.key
        if column not in row:
            raise StoreError(f"{name}: the column {column!r} is missing; scan the folder again with this version")
        value = row[column]
        estimates[q.base] = Estimate(math.nan if value is None else float(value))
    return Record(estimates)


def _curves_by_particle(table: pa.Table) -> dict[tuple[str, str, str], list[Curve]]:
    """Curves as they are written, in the units of the table."""
    frame = table.select(["batch", "image", "particle", "curve", "x", "y"]).to_pandas()
    found: dict[tuple[str, str, str], list[Curve]] = {}
    for (batch, image, particle, curve), part in frame.groupby(["batch", "image", "particle", "curve"], sort=False):
        x, y = part["x"].to_numpy(dtype=float), part["y"].to_numpy(dtype=float)
        nothing = np.full_like(x, np.nan)
        found.setdefault((str(batch), str(image), str(particle)), []).append(Curve(str(curve), x, y, nothing, nothing))
    return found


def _in_pixels(curves: list[Curve] | tuple[()], row: Mapping[str, Any]) -> list[Curve]:
    """Curves over a length are written in micrometres where the pixel size is known."""
    um = row.get("pixel_size_um")
    scale = 1.0 if um is None or not math.isfinite(um) else float(um)
    over_length = ("s2", "lineal_path")  # the curves that descriptors read off at lengths
    return [
        Curve(c.name, c.x / scale if c.name in over_length else c.x, c.y, c.low, c.high) for c in curves
    ]  # fmt: skip


def particle_of_field(path: str | Path) -> Described:
    """The particle in a simulated field, 2-D or 3-D (its middle plane).

    Raises
    ------
    InputError
        If the file cannot be read as a field, or holds no particle.
    """
    field = read_field(path)
    name = Path(path).name
    if field.values.ndim == 3:
        field = replace(field, values=np.ascontiguousarray(field.values[field.values.shape[0] // 2]))
    try:
        section = section_of_field(field)
        if section.view == "whole":  # outlined as the particles of the atlas were
            section = clean_section(field.values)
    except ValueError as error:
        raise InputError(f"{name}: {error}; give the polymer fraction of one particle with bath around it") from error
    measured = measure_section(section, rng=0)
    return Described("", name, "1", section.view, descriptors(measured.record, measured.curves))


def is_field(path: str | Path) -> bool:
    """Whether the name of a file is that of a field."""
    return Path(path).suffix.lower() in _FIELDS


def _read(path: Path) -> pa.Table:
    try:
        return pq.read_table(path)
    except (OSError, pa.ArrowException, ValueError) as error:
        raise StoreError(f"{path}: cannot be read ({error}); scan the folder again") from error
