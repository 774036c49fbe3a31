"""Simulated (or otherwise known) fields: which array of a file, its axes, its spacing."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from poroscan.errors import InputError
from poroscan.intake.field_readers import READERS, Loaded
from poroscan.intake.field_sections import FieldView, section_of_array
from poroscan.intake.files import bad_input, checked_head, shown
from poroscan.section import UNKNOWN_PIXEL_SIZE, PixelSize, Section

FIELD_SUFFIXES = (".npy", ".npz", ".h5", ".hdf5", ".tif", ".tiff", ".vti", ".vtk")

#: Names under which the polymer fraction is looked for where a file holds several arrays.
FIELD_NAMES = ("polymer", "phi_polymer", "polymer_fraction", "phi_p", "phi", "field", "composition", "labels", "data")

MAX_VOXELS = 1024**3
_NOT_CUBIC = 0.01


@dataclass(frozen=True, eq=False)
class Field:
    """A scalar field on a grid of squares or cubes.

    Parameters
    ----------
    values
        2-D (row, column) or 3-D (plane, row, column) float64 array, finite.
    pixel_size
        Length of an edge; unknown where the file states none.
    name
        File name without its folder.
    array
        Name of the array within the file; empty where it has none.
    notes
        What was done on reading, in words for people.
    """

    values: npt.NDArray[np.float64]
    pixel_size: PixelSize = UNKNOWN_PIXEL_SIZE
    name: str = ""
    array: str = ""
    notes: tuple[str, ...] = ()


def read_field(
    path: str | os.PathLike[str],
    *,
    spacing_um: float | Sequence[float] | None = None,
    array: str | None = None,
    axes: str | None = None,
    component: int = 0,
    max_voxels: int = MAX_VOXELS,
) -> Field:
    """Read a field from ``.npy``, ``.npz``, ``.h5``/``.hdf5``, a TIFF stack, ``.vti`` or ``.vtk`` structured points.

    Parameters
    ----------
    path
        File. Nothing in it is ever executed (no pickled objects).
    spacing_um
        Micrometres between neighbours, one number or one per axis; None takes what the file says. A VTK spacing counts as
        micrometres unless it is 1, which is what files without a scale carry.
    array
        Name of the array, where the file holds several.
    axes
        Meaning of the array's axes, one letter each of ``z`` (plane), ``y`` (row), ``x`` (column), ``c`` (component): ``"cyx"``.
        Needed for arrays of more than three axes, and for 3-D ones with an axis of at most 4.
    component
        Which component is taken where ``axes`` holds a ``c``; 0 is the first.
    max_voxels
        Larger arrays are refused before they are read.

    Raises
    ------
    InputError
        If the file cannot be read, holds no or several candidate arrays, its axes are unclear, its voxels are not cubic, or
        values are not finite.
    """
    path = Path(path)
    checked_head(path)
    reader = READERS.get(path.suffix.lower())
    if reader is None:
        raise bad_input(path, "is no field format that is read", f"use one of {', '.join(FIELD_SUFFIXES)}")
    try:
        loaded = reader(path, max_voxels)
    except InputError:
        raise
    except Exception as error:  # every reader has errors of its own
        text = " ".join(str(error).split())[:120] or type(error).__name__
        raise bad_input(path, f"cannot be read as a field ({text})", "export it again") from None
    name, values = _selected(path, loaded, array)
    values, letters = _oriented(path, values, axes, component)
    spacing = _given(path, spacing_um, len(letters)) or loaded.spacing
    size = _pixel_size(path, spacing, letters)
    numbers = _finite(path, values)
    return Field(numbers, size, shown(path.name), name)


def _selected(path: Path, loaded: Loaded, wanted: str | None) -> tuple[str, npt.NDArray]:
    candidates = {n: a for n, a in loaded.arrays.items() if a.ndim >= 2 and a.dtype.kind in "buif"}
    names = ", ".join(shown(n) for n in list(candidates)[:12]) or "none"
    if wanted is not None:
        if wanted not in candidates:
            raise bad_input(path, f"holds no field {wanted!r} (fields: {names})", "name one of these")
        return wanted, candidates[wanted]
    if len(candidates) == 1:
        return next(iter(candidates.items()))
    by_name = {n.rpartition("/")[2].lower(): n for n in candidates}
    for known in FIELD_NAMES:
        if known in by_name:
            return by_name[known], candidates[by_name[known]]
    if not candidates:
        raise bad_input(path, "holds no array of numbers with two or three axes", "export the field itself")
    raise bad_input(path, f"holds several fields ({names})", "name the one to take")


def _oriented(path: Path, values: npt.NDArray, axes: str | None, component: int) -> tuple[npt.NDArray, str]:
    if axes is None:
        if values.ndim == 3 and 1 in values.shape:
            values = values.squeeze()
        if values.ndim not in (2, 3) or (values.ndim == 3 and min(values.shape) <= 4):
            raise bad_input(
                path, f"has shape {values.shape}, whose axes are unclear", 'say axes, for example "cyx" or "zyx"'
            )
        return values, "zyx"[-values.ndim :]
    axes = axes.lower()
    if len(axes) != values.ndim or len(set(axes)) != len(axes) or not {"y", "x"} <= set(axes) <= set("czyx"):
        raise ValueError(
            f"axes must name the {values.ndim} axes of shape {values.shape} with y, x and z or c, not {axes!r}"
        )
    if "c" in axes:
        place = axes.index("c")
        if not 0 <= component < values.shape[place]:
            raise ValueError(f"component must be 0 to {values.shape[place] - 1}, not {component}")
        values, axes = values.take(component, axis=place), axes.replace("c", "")
    order = [axes.index(a) for a in "zyx" if a in axes]
    return values.transpose(order), "zyx"[-values.ndim :]


def _given(path: Path, spacing: float | Sequence[float] | None, ndim: int) -> tuple[float, ...] | None:
    if spacing is None:
        return None
    numbers = (float(spacing),) * ndim if isinstance(spacing, (int, float)) else tuple(float(s) for s in spacing)
    if len(numbers) != ndim:
        raise ValueError(f"spacing_um must be one number or {ndim}, not {len(numbers)}")
    if not all(math.isfinite(s) and s > 0 for s in numbers):
        raise ValueError(f"spacing_um must be positive, not {spacing!r}")
    return numbers


def _pixel_size(path: Path, spacing: tuple[float, ...] | None, letters: str) -> PixelSize:
    if spacing is None:
        return PixelSize(None)
    if len(spacing) < len(letters):
        return PixelSize(None)  # the distance of planes is not stated, and is not invented
    spacing = spacing[-len(letters) :] if len(spacing) > len(letters) else spacing
    if not all(math.isfinite(s) and s > 0 for s in spacing):
        raise bad_input(path, f"states the spacing {spacing}", "give spacing_um")
    if max(spacing) > (1 + _NOT_CUBIC) * min(spacing):
        words = " × ".join(f"{s:g}" for s in spacing)
        raise bad_input(
            path, f"has a spacing of {words}, and only squares and cubes are measured", "resample it to equal spacing"
        )
    return PixelSize(float(np.mean(spacing)), "field")


def _finite(path: Path, values: npt.NDArray) -> npt.NDArray[np.float64]:
    if values.size == 0:
        raise bad_input(path, f"is empty (shape {values.shape})", "export the field again")
    numbers = np.ascontiguousarray(values, dtype=np.float64)
    bad = numbers.size - int(np.count_nonzero(np.isfinite(numbers)))
    if bad:
        raise bad_input(path, f"holds {bad} values that are NaN or infinite", "mend the simulation or fill them")
    return numbers


def section_of_field(
    field: Field,
    *,
    threshold: float | None = None,
    closing_px: float | None = None,
    view: FieldView = "auto",
    labels: Mapping[str, int] | None = None,
) -> Section:
    """The particle in a field as a Section; parameters as in ``section_of_array``."""
    return section_of_array(
        field.values,
        pixel_size=field.pixel_size,
        threshold=threshold,
        closing_px=closing_px,
        view=view,
        labels=labels,
        name=field.name,
    )
