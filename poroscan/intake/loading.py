"""From a file to the Picture that is measured."""

from __future__ import annotations

import os
from pathlib import Path
from types import MappingProxyType

from poroscan.intake.files import bad_input, shown
from poroscan.intake.grey import to_grey
from poroscan.intake.pictures import read_stored
from poroscan.intake.settings import IntakeSettings
from poroscan.intake.sidecar import SidecarRow
from poroscan.section import Picture, PixelSize


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
        If the file cannot be read; the message names the file, what is wrong and what to do.
    """
    path = Path(path)
    settings = settings or IntakeSettings()
    stored = read_stored(path, settings)
    try:
        grey = to_grey(stored.values)
    except ValueError as error:
        raise bad_input(path, str(error), "export the picture again") from None
    um = settings.pixel_size_um or (sidecar.pixel_size_um if sidecar else None)
    size = PixelSize(um, "option" if settings.pixel_size_um else "sidecar") if um else PixelSize(None)
    flags = grey.flags if size.known else (*grey.flags, "no_pixel_size")
    return Picture(
        grey.values,
        size,
        name=shown(path.name),
        notes=stored.notes + grey.notes,
        flags=flags,
        header=MappingProxyType(dict(stored.header)),
    )
