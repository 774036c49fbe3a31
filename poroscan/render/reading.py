"""Masks from anyone, turned into pores, particle and depth."""

from __future__ import annotations

import zipfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
import tifffile
from PIL import Image, UnidentifiedImageError

from poroscan.errors import InputError
from poroscan.render.depth import FloatImage, depth_below
from poroscan.section import BoolArray

#: Endings of files that may hold masks.
MASK_ENDINGS = (".npz", ".npy", ".png", ".bmp", ".tif", ".tiff")
Image.MAX_IMAGE_PIXELS = 1 << 28


Particle = npt.NDArray[np.bool_] | npt.NDArray[np.integer]


@dataclass(frozen=True, eq=False)
class Masks:
    """A two-dimensional cut: pores, particle (bool or numbers), and depth below it where a volume was given."""

    pores: BoolArray
    particle: Particle
    depth: FloatImage | None = None


def read_masks(path: Path, *, plane: int | None = None) -> Masks | None:
    """Read masks; None where the file holds a field of many values, which is no mask.

    Parameters
    ----------
    path
        ``.npz`` with ``pores`` and, if there are surroundings, ``particle`` (bool, or particle numbers); or one array as
        ``.npy``, ``.npz`` or picture. A single array of two values is a pore mask (the higher value is pore) that
        fills the picture; one of three values shows surroundings, polymer and pore in rising order.
    plane
        Plane of a volume that is cut and looked at; None takes the middle one.

    Raises
    ------
    InputError
        If the file cannot be read as one of these.
    """
    arrays = _arrays(path)
    if "pores" in arrays:
        pores = arrays["pores"].astype(bool)
        return cut(path, pores, _numbers(path, arrays.get("particle", np.ones(pores.shape, dtype=bool))), plane=plane)
    if len(arrays) != 1:
        return None
    found = _of_values(path, next(iter(arrays.values())))
    return None if found is None else cut(path, *found, plane=plane)


def cut(path: Path, pores: BoolArray, particle: Particle, *, plane: int | None) -> Masks:
    """Masks of a plane: the arrays themselves in two dimensions, a plane of a volume with the depth below it in three.

    Parameters
    ----------
    path
        File they come from, for messages.
    pores, particle
        Arrays of one shape, two- or three-dimensional; pores outside the particle are surroundings.
    plane
        Plane of a volume; None takes the middle one.

    Raises
    ------
    InputError
        If the shapes do not fit, or there is no such plane.
    """
    if pores.shape != particle.shape or pores.ndim not in (2, 3) or pores.size == 0:
        raise _bad(
            path, f"has pores of shape {pores.shape} and a particle of {particle.shape}", "give two or three dimensions"
        )
    pores = pores & (particle > 0)
    if pores.ndim == 2:
        if plane is not None:
            raise _bad(path, "is two-dimensional", "leave out --plane")
        return Masks(pores, particle)
    index = pores.shape[0] // 2 if plane is None else plane
    if not 0 <= index < pores.shape[0]:
        raise _bad(path, f"has no plane {index}", f"give one from 0 to {pores.shape[0] - 1}")
    if not (particle[index] > 0).any():
        raise _bad(path, f"shows no particle in plane {index}", "give another plane")
    return Masks(pores[index], particle[index], np.where(pores[index], depth_below(pores, plane=index), 0.0))


def _numbers(path: Path, particle: npt.NDArray[np.generic]) -> Particle:
    if particle.dtype.kind not in "bui" or particle.ndim == 0:
        raise _bad(path, f"has a particle of {particle.dtype} values", "give a bool mask or particle numbers")
    # Every connected piece of a bool mask is a particle; numbers are kept as they are.
    return particle.astype(bool) if particle.dtype.kind == "b" else particle.astype(np.int64)


def _of_values(path: Path, array: npt.NDArray[np.generic]) -> tuple[BoolArray, BoolArray] | None:
    if array.dtype.kind not in "buif" or array.size == 0:
        raise _bad(path, f"holds {array.size} {array.dtype} values", "give numbers")
    values = array.astype(np.float64)
    if not np.isfinite(values).all():
        raise _bad(path, "holds values that are not finite", "replace them")
    distinct = np.unique(values)
    if len(distinct) <= 2:
        return values > distinct[0], np.ones(values.shape, dtype=bool)
    return (values == distinct[2], values > distinct[0]) if len(distinct) == 3 else None


def _arrays(path: Path) -> dict[str, npt.NDArray[np.generic]]:
    ending = path.suffix.lower()
    if not path.is_file():
        raise _bad(path, "is not there", "check the path")
    if ending not in MASK_ENDINGS:
        raise _bad(path, f"ends in {ending or 'nothing'}", f"give one of {', '.join(MASK_ENDINGS)}")
    try:
        if ending == ".npz":
            with np.load(path, allow_pickle=False) as file:
                return {name: file[name] for name in file.files}
        if ending == ".npy":
            return {"field": np.load(path, allow_pickle=False)}
        if ending.startswith(".tif"):
            return {"field": tifffile.imread(path)}
        with Image.open(path) as image:
            return {"field": np.asarray(image.convert("L"))}
    except (OSError, ValueError, zipfile.BadZipFile, UnidentifiedImageError, tifffile.TiffFileError) as error:
        raise _bad(path, f"cannot be read ({error})", "write it again") from None


def _bad(path: Path, wrong: str, remedy: str) -> InputError:
    return InputError(f"{path.name} {wrong}; {remedy}")
