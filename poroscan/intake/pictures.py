"""Reading a picture file: which reader, and its samples as they are stored."""

from __future__ import annotations

import dataclasses
from pathlib import Path

from poroscan.intake.files import PICTURE_KINDS, checked_head, kind_of, not_a_picture
from poroscan.intake.rasters import read_raster
from poroscan.intake.settings import IntakeSettings
from poroscan.intake.stored import Stored
from poroscan.intake.tiffs import read_tiff


def read_stored(path: Path, settings: IntakeSettings) -> Stored:
    """Samples and texts of a picture file; its first bytes decide how it is read, not its extension.

    Raises
    ------
    InputError
        If the file cannot be read as a picture; the message names the file, what is wrong and what to do.
    """
    head = checked_head(path)
    kind = kind_of(head)
    if kind not in PICTURE_KINDS:
        raise not_a_picture(path, head)
    if kind == "tiff":
        stored = read_tiff(path, page=settings.page, max_pixels=settings.max_pixels)
    else:
        stored = read_raster(path, kind=kind, max_pixels=settings.max_pixels)
    if path.suffix.lower() not in PICTURE_KINDS[kind]:
        note = f"is a {kind.upper()} file in spite of its extension"
        stored = dataclasses.replace(stored, notes=(note, *stored.notes))
    return stored
