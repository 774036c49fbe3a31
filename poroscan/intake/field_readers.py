"""Readers of field files: arrays by name and the spacing, nothing decided yet."""

from __future__ import annotations

import math
import zipfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.intake.vtk import ImageData, parse_vti, parse_vtk

#: Names under which a spacing in micrometres is looked for beside the arrays.
SPACING_NAMES = ("spacing_um", "pixel_size_um", "voxel_size_um", "element_size_um")


@dataclass(frozen=True, eq=False)
class Loaded:
    """Arrays of a file by name, and the spacing it states (micrometres; last axes last), or None."""

    arrays: Mapping[str, npt.NDArray]
    spacing: tuple[float, ...] | None = None


def _check_size(shape: tuple[int, ...], max_voxels: int) -> None:
    if math.prod(shape) > max_voxels:
        raise ValueError(f"shape {shape} is above the limit of {max_voxels} values")


def _npy(path: Path, max_voxels: int) -> Loaded:
    with path.open("rb") as stream:
        _check_npy(stream, max_voxels)
    return Loaded({"": np.load(path, allow_pickle=False)})


def _check_npy(stream: Any, max_voxels: int) -> None:
    version = np.lib.format.read_magic(stream)
    read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
    shape, _, dtype = read(stream)
    if dtype.hasobject:
        raise ValueError("it holds Python objects, which are never loaded")
    _check_size(shape, max_voxels)


def _npz(path: Path, max_voxels: int) -> Loaded:
    with zipfile.ZipFile(path) as archive:
        for member in archive.namelist():
            if member.endswith(".npy"):
                with archive.open(member) as stream:
                    _check_npy(stream, max_voxels)
    with np.load(path, allow_pickle=False) as archive_:
        arrays = {name: archive_[name] for name in archive_.files}
    return Loaded(arrays, _beside({n: arrays[n] for n in SPACING_NAMES if n in arrays}))


def _beside(values: Mapping[str, Any]) -> tuple[float, ...] | None:
    """Spacing from arrays or attributes: one number per axis, a single one standing for all."""
    for name in SPACING_NAMES:
        if name in values:
            numbers = tuple(float(v) for v in np.ravel(values[name]))
            return numbers * 3 if len(numbers) == 1 else numbers
    return None


def _hdf5(path: Path, max_voxels: int) -> Loaded:
    import h5py

    arrays: dict[str, npt.NDArray] = {}
    spacing: list[tuple[float, ...] | None] = []
    with h5py.File(path, "r") as file:

        def take(name: str, item: Any) -> None:
            if isinstance(item, h5py.Dataset) and item.dtype.kind in "buif" and item.ndim >= 2:
                _check_size(item.shape, max_voxels)
                arrays[name] = item[()]
                spacing.append(_beside(item.attrs))

        file.visititems(take)
        spacing.append(_beside(file.attrs))
        for name in SPACING_NAMES:
            if isinstance(file.get(name), h5py.Dataset):
                spacing.append(_beside({name: file[name][()]}))
    return Loaded(arrays, next((s for s in spacing if s is not None), None))


def _tiff(path: Path, max_voxels: int) -> Loaded:
    import tifffile

    from poroscan.intake.headers import ome_spacing
    from poroscan.intake.tiffs import quiet, refuse_truncated

    with quiet(), tifffile.TiffFile(path) as file:
        series = file.series[0]
        _check_size(series.shape, max_voxels)
        for page in series.pages:
            if isinstance(page, tifffile.TiffPage | tifffile.TiffFrame):
                refuse_truncated(page, path)
        spacing = ome_spacing(file.ome_metadata) if file.is_ome and file.ome_metadata else None
        return Loaded({"": series.asarray()}, spacing)


def _vti(path: Path, max_voxels: int) -> Loaded:
    return _from_image_data(parse_vti(path.read_bytes(), max_voxels=max_voxels))


def _vtk(path: Path, max_voxels: int) -> Loaded:
    return _from_image_data(parse_vtk(path.read_bytes(), max_voxels=max_voxels))


def _from_image_data(image: ImageData) -> Loaded:
    return Loaded(image.arrays, None if all(s == 1.0 for s in image.spacing) else image.spacing)


#: Reader by file extension; each takes the path and the largest number of values, and raises errors of many types.
READERS: Mapping[str, Callable[[Path, int], Loaded]] = MappingProxyType(
    {
        ".npy": _npy,
        ".npz": _npz,
        ".h5": _hdf5,
        ".hdf5": _hdf5,
        ".tif": _tiff,
        ".tiff": _tiff,
        ".vti": _vti,
        ".vtk": _vtk,
    }
)
