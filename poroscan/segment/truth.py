"""Reads found and drawn masks from folders for ``score``."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
import tifffile

from poroscan.errors import InputError
from poroscan.intake.pictures import read_stored
from poroscan.intake.settings import IntakeSettings
from poroscan.section import BoolArray
from poroscan.segment.scoring import Score, score_masks

_SUFFIXES = (".png", ".tif", ".tiff", ".bmp")


@dataclass(frozen=True)
class NamedScore:
    """Score of one picture under its name."""

    name: str
    score: Score


def score_folders(found: Path, truth: Path) -> tuple[NamedScore, ...]:
    """Score every picture for which a drawn pore mask exists.

    Parameters
    ----------
    found
        Run folder (``images/NAME/labels.ome.tif``) or a folder of ``NAME_pores`` and, as far as drawn, ``NAME_particles`` masks.
    truth
        Folder of drawn masks ``NAME_pores.png`` and, as far as drawn, ``NAME_particles.png``; NAME with or without the picture's suffix.

    Returns
    -------
    tuple of NamedScore
        Sorted by name.

    Raises
    ------
    InputError
        If a folder is missing, nothing matches, or a mask is unreadable or of another shape.
    """
    for folder in (found, truth):
        if not folder.is_dir():
            raise InputError(f"{folder}: no such folder; give a run folder and a folder of drawn masks")
    scores = []
    for name, pores, particles in sorted(_found(found), key=lambda item: item[0]):
        drawn = _mask_file(truth, name, "pores")
        if drawn is None:
            continue
        outline = _mask_file(truth, name, "particles")
        scores.append(NamedScore(name, _score(name, pores, particles, drawn, outline)))
    if not scores:
        raise InputError(f"{truth}: no NAME_pores.png for any picture of {found}; name drawn masks after the pictures")
    return tuple(scores)


def _score(name: str, pores: BoolArray, particles: BoolArray | None, drawn: Path, outline: Path | None) -> Score:
    try:
        return score_masks(
            pores=pores,
            particles=particles,
            drawn_pores=read_mask(drawn),
            drawn_particles=None if outline is None else read_mask(outline),
        )
    except ValueError as error:
        raise InputError(f"{name}: {error}") from error


def _found(folder: Path) -> Iterator[tuple[str, BoolArray, BoolArray | None]]:
    if (folder / "images").is_dir():
        images = folder / "images"
        for file in sorted(images.rglob("labels.ome.tif")):
            planes = _planes(file)
            if planes.ndim != 3 or planes.shape[0] < 2:
                raise InputError(
                    f"{file}: expected two planes (particles, pores), not shape {planes.shape}; run the scan again"
                )
            labels = np.asarray(planes, dtype=np.int64)
            yield file.parent.relative_to(images).as_posix(), labels[1] > 0, labels[0] > 0
        return
    for file in sorted(folder.iterdir()):
        if file.stem.endswith("_pores") and file.suffix.lower() in _SUFFIXES:
            name = file.stem.removesuffix("_pores")
            outline = _mask_file(folder, name, "particles")
            yield name, read_mask(file), None if outline is None else read_mask(outline)


def _mask_file(folder: Path, name: str, kind: str) -> Path | None:
    last = name.rsplit("/", 1)[-1]
    stems = dict.fromkeys((name, last, str(Path(name).with_suffix("")), Path(last).stem))
    for stem in stems:
        for suffix in _SUFFIXES:
            file = folder / f"{stem}_{kind}{suffix}"
            if file.is_file():
                return file
    return None


def read_mask(path: Path) -> BoolArray:
    """A mask from a picture file: every pixel that is not black is True; alpha does not count.

    Raises
    ------
    InputError
        If the file cannot be read as a picture.
    """
    return np.asarray(read_stored(path, IntakeSettings()).values != 0)


def _planes(path: Path) -> npt.NDArray[np.generic]:
    try:
        return np.asarray(tifffile.imread(path))
    except (OSError, ValueError, tifffile.TiffFileError) as error:
        raise InputError(f"{path}: cannot be read ({error}); run the scan again") from error
