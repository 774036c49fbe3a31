"""Reading: pictures, fields, pixel size, banner, image quality, folders.

settings        how pictures are read
folders         list_inputs: from a folder to its pictures
loading         load_picture: from a file to the Picture that is measured
files           opening, and what is wrong with a file
pictures        which reader; tiffs, rasters: the readers; stored: what they hand back
grey            from stored samples to grey 0…1
sidecar         the table beside the pictures
headers         pixel sizes written in headers; pixel_size: which source counts
banner          the data banner; lettering: letters in it
scale_bar       strokes that may be the bar; label_place, ocr, scale_label, bar_reading: what it stands for
image_quality   clipping, noise, resolution, illumination, charging
inspection      a folder looked over; contact_sheet: the same as a picture
fields          simulated fields; field_readers, vtk: their formats; field_sections: from array to Section
"""

from __future__ import annotations

import importlib
from typing import Any

from poroscan.intake.settings import IntakeSettings

_PUBLIC = {
    "load_picture": "poroscan.intake.loading",
    "inspect_picture": "poroscan.intake.loading",
    "list_inputs": "poroscan.intake.folders",
    "companions": "poroscan.intake.folders",
    "Companions": "poroscan.intake.folders",
    "FolderListing": "poroscan.intake.folders",
    "InputFile": "poroscan.intake.folders",
    "Problem": "poroscan.intake.folders",
    "Field": "poroscan.intake.fields",
    "read_field": "poroscan.intake.fields",
    "section_of_field": "poroscan.intake.fields",
    "section_of_array": "poroscan.intake.field_sections",
    "SidecarRow": "poroscan.intake.sidecar",
}

__all__ = ["IntakeSettings", *_PUBLIC]


def __getattr__(name: str) -> Any:
    try:
        module = _PUBLIC[name]
    except KeyError:
        raise AttributeError(f"module 'poroscan.intake' has no attribute {name!r}") from None
    return getattr(importlib.import_module(module), name)
