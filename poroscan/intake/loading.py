"""From a file to the Picture that is measured."""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

import numpy as np
import numpy.typing as npt

from poroscan.intake.banner import find_banner, stretched
from poroscan.intake.bar_reading import BarReading, read_scale_bar
from poroscan.intake.files import bad_input, shown
from poroscan.intake.grey import to_grey
from poroscan.intake.headers import about, header_candidate, ome_candidate, stated_columns
from poroscan.intake.image_quality import Quality, image_quality, judge
from poroscan.intake.overprint import covered
from poroscan.intake.pictures import read_stored
from poroscan.intake.pixel_size import Candidate, choose, resolution_candidate
from poroscan.intake.settings import IntakeSettings
from poroscan.intake.sidecar import SidecarRow
from poroscan.intake.stored import Stored
from poroscan.section import Picture


@dataclass(frozen=True, eq=False)
class Inspection:
    """A picture with everything that was found on the way to it.

    Parameters
    ----------
    picture
        What is measured.
    full
        Grey values of the whole file, banner included.
    depth
        Sample type of the file (``uint8``, ``float32``, …).
    scale_bar
        What the scale bar said.
    quality
        Figures of image quality.
    """

    picture: Picture
    full: npt.NDArray[np.float32]
    depth: str
    scale_bar: BarReading
    quality: Quality


def load_picture(
    path: str | os.PathLike[str],
    settings: IntakeSettings | None = None,
    *,
    sidecar: SidecarRow | None = None,
) -> Picture:
    """Read a picture, cut its data banner, find its pixel size, and look at its quality.

    Parameters
    ----------
    path
        TIFF, PNG, JPEG or BMP file.
    settings
        How it is read; None takes the defaults.
    sidecar
        Its row of the sidecar table.

    Raises
    ------
    InputError
        If the file cannot be read, or its pixels are not square; the message names the file, what is wrong and what to do.
    """
    return inspect_picture(path, settings, sidecar=sidecar).picture


def inspect_picture(
    path: str | os.PathLike[str],
    settings: IntakeSettings | None = None,
    *,
    sidecar: SidecarRow | None = None,
) -> Inspection:
    """As ``load_picture``, with everything that was found on the way.

    Raises
    ------
    InputError
        As ``load_picture``.
    """
    path = Path(path)
    settings = settings or IntakeSettings()
    stored = read_stored(path, settings)
    try:
        grey = to_grey(stored.values)
    except ValueError as error:
        raise bad_input(path, str(error), "export the picture again") from None
    rows = _banner_rows(grey.values, settings, path)
    bar = _scale_bar(grey.values, rows, settings, sidecar)
    try:
        chosen = choose(list(_candidates(stored, settings, sidecar, bar)))
    except ValueError as error:
        raise bad_input(path, *str(error).split("; ", 1)) from None
    kept = np.ascontiguousarray(grey.values[: grey.values.shape[0] - rows])
    quality = image_quality(kept)
    place = _place(bar, kept.shape[0])
    unread = bar.flags if not chosen.size.known else ()
    picture = Picture(
        kept,
        chosen.size,
        name=shown(path.name),
        banner_rows=rows,
        notes=(*stored.notes, *grey.notes, *_stated_size(stored), *bar.notes, *chosen.notes, *place),
        flags=tuple(dict.fromkeys((*grey.flags, *chosen.flags, *unread, *judge(quality)))),
        header=MappingProxyType(_header(stored, sidecar)),
        excluded=_covered(bar, kept),
    )
    return Inspection(picture, grey.values, str(stored.values.dtype), bar, quality)


def _banner_rows(grey: npt.NDArray[np.float32], settings: IntakeSettings, path: Path) -> int:
    if settings.banner == "none":
        return 0
    if isinstance(settings.banner, str):
        return find_banner(grey)
    if settings.banner >= grey.shape[0]:
        raise bad_input(
            path, f"has {grey.shape[0]} rows, not more than the banner of {settings.banner}", "set banner lower"
        )
    return settings.banner


def _scale_bar(
    grey: npt.NDArray[np.float32], banner_rows: int, settings: IntakeSettings, sidecar: SidecarRow | None
) -> BarReading:
    if settings.scale_bar == "none":
        return BarReading()
    stated = sidecar.scale_bar_um if sidecar and sidecar.scale_bar_um else settings.scale_bar_um
    return read_scale_bar(grey, banner_rows=banner_rows, stated_um=stated, use_ocr=settings.ocr)


def _candidates(
    stored: Stored, settings: IntakeSettings, sidecar: SidecarRow | None, bar: BarReading
) -> Iterator[Candidate]:
    if settings.pixel_size_um is not None:
        yield Candidate(settings.pixel_size_um, "option", "the option")
    if sidecar is not None and sidecar.pixel_size_um is not None:
        yield Candidate(sidecar.pixel_size_um, "sidecar", f"the sidecar table (line {sidecar.line})")
    found = [ome_candidate(stored.ome)] if stored.ome else []
    if not stored.ome:
        found += [header_candidate(text, place=place) for place, text in stored.texts.items()]
    for candidate in (*found, resolution_candidate(stored.resolution), bar.candidate):
        if candidate is not None:
            yield candidate


def _place(bar: BarReading, rows: int) -> tuple[str, ...]:
    """A note where the scale bar lies in the picture itself, so that it hides a piece of the specimen."""
    if bar.bar is None or bar.bar.box.top >= rows:
        return ()
    box = bar.bar.box
    return (f"the scale bar lies in the picture (rows {box.top} to {box.bottom}, columns {box.left} to {box.right})",)


def _covered(bar: BarReading, kept: npt.NDArray[np.float32]) -> tuple[tuple[int, int, int, int], ...]:
    """What the scale bar covers where it lies in the picture itself."""
    if bar.bar is None or bar.bar.box.top >= kept.shape[0]:
        return ()
    return covered(stretched(kept), bar.bar.box, bar.label_box)


def _stated_size(stored: Stored) -> tuple[str, ...]:
    """A note where a header speaks of another width than the file has: such a picture may have been scaled."""
    width = stored.values.shape[1]
    for place, text in stored.texts.items():
        columns = stated_columns(text)
        if columns is not None and columns > 16 and columns != width:
            return (f"{place} speaks of {columns} columns, the file has {width}: was the picture scaled or cropped?",)
    return ()


def _header(stored: Stored, sidecar: SidecarRow | None) -> dict[str, str]:
    header = dict(stored.header)
    for text in stored.texts.values():
        for key, value in about(text).items():
            header.setdefault(key, value)
    if sidecar is not None:
        header.update(sidecar.other)
    return header
