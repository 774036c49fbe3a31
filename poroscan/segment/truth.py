"""Reads found and drawn masks from folders for ``score``."""

from __future__ import annotations

import json
from collections import Counter
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

_LABELS = "labels.ome.tif"
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
        Run folder, or a folder of ``NAME_pores`` and, as far as drawn, ``NAME_particles`` masks, sub-folders included.
    truth
        Folder of drawn masks ``NAME_pores.png`` and, as far as drawn, ``NAME_particles.png``; NAME with or without the picture's suffix.
        Masks lie in sub-folders named like the batches, or, where no two pictures share a name, in the folder itself.

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
    listed = _listed(found)
    stems = Counter(_bare(name) for name, _ in listed)
    scores = []
    for name, file in listed:
        anywhere = stems[_bare(name)] == 1  # a mask that lies in no batch's folder must not stand for two pictures
        drawn = _mask_file(truth, name, "pores", anywhere=anywhere)
        if drawn is None:
            continue
        outline = _mask_file(truth, name, "particles", anywhere=anywhere)
        scores.append(NamedScore(name, _score(name, file, drawn, outline)))
    if not scores:
        raise InputError(f"{truth}: no NAME_pores.png for any picture of {found}; name drawn masks after the pictures")
    return tuple(scores)


def _score(name: str, found: Path, drawn: Path, outline: Path | None) -> Score:
    pores, particles = _found_masks(found)
    whole = (pores.shape[0] + _banner_rows(found), pores.shape[1])

    def drawn_mask(path: Path) -> BoolArray:
        mask = read_mask(path)
        return mask[: pores.shape[0]] if mask.shape == whole else mask

    try:
        return score_masks(
            pores=pores,
            particles=particles,
            drawn_pores=drawn_mask(drawn),
            drawn_particles=None if outline is None else drawn_mask(outline),
        )
    except ValueError as error:
        raise InputError(f"{name}: {error}") from error


def _banner_rows(found: Path) -> int:
    """Rows of the data banner that a run cut off: masks may be drawn on the whole picture."""
    record = found.with_name("image.json")
    if found.name != _LABELS or not record.is_file():
        return 0
    try:
        return int(json.loads(record.read_text(encoding="utf-8")).get("banner_rows") or 0)
    except (OSError, ValueError, AttributeError) as error:
        raise InputError(f"{record}: is no record of a picture ({error}); run the scan again") from error


def _listed(folder: Path) -> list[tuple[str, Path]]:
    """Names of pictures (``BATCH/IMAGE`` where a run says so), sorted, and the file that holds what was found in each."""
    if (folder / "run.json").is_file():
        pairs = [(name, folder / inner / _LABELS) for name, inner in _pictures_of_run(folder / "run.json")]
        return sorted((name, file) for name, file in pairs if file.is_file())
    if (folder / "images").is_dir():
        images = folder / "images"
        return sorted((f.parent.relative_to(images).as_posix(), f) for f in images.rglob(_LABELS))
    masks = (f for f in folder.rglob("*_pores.*") if f.stem.endswith("_pores") and f.suffix.lower() in _SUFFIXES)
    return sorted((f.relative_to(folder).with_name(f.stem.removesuffix("_pores")).as_posix(), f) for f in masks)


def _pictures_of_run(path: Path) -> list[tuple[str, str]]:
    try:
        inputs = json.loads(path.read_text(encoding="utf-8"))["inputs"]
        return [(f"{i['batch']}/{i['image']}", i["folder"]) for i in inputs if i.get("folder")]
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputError(f"{path}: is no record of a run ({error}); run the scan again") from error


def _found_masks(file: Path) -> tuple[BoolArray, BoolArray | None]:
    """Pores and, where they are known, particles."""
    if file.name == _LABELS:
        planes = _planes(file)
        if planes.ndim != 3 or planes.shape[0] < 2:
            raise InputError(
                f"{file}: expected two planes (particles, pores), not shape {planes.shape}; run the scan again"
            )
        return planes[1] > 0, planes[0] > 0
    outline = _mask_file(file.parent, file.stem.removesuffix("_pores"), "particles")
    return read_mask(file), None if outline is None else read_mask(outline)


def _bare(name: str) -> str:
    return Path(name.rsplit("/", 1)[-1]).stem


def _mask_file(folder: Path, name: str, kind: str, *, anywhere: bool = True) -> Path | None:
    """Mask of a picture: below the folder of its batch, or, where that cannot be mistaken, right in the folder."""
    head, _, last = name.rpartition("/")
    here = folder / head
    places = [(here, last), (here, Path(last).stem)]
    if anywhere:
        places += [(folder, last), (folder, Path(last).stem)]
    for place, stem in places:
        for suffix in _SUFFIXES:
            file = place / f"{stem}_{kind}{suffix}"
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
