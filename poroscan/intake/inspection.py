"""A folder looked over: one row per picture with what intake found, and what could not be read."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from poroscan.errors import InputError
from poroscan.intake.banner import stretched
from poroscan.intake.files import shown
from poroscan.intake.folders import FolderListing, InputFile, list_inputs
from poroscan.intake.loading import Inspection, inspect_picture
from poroscan.intake.settings import IntakeSettings

#: Longest side of a thumbnail in pixels.
THUMBNAIL = 240


@dataclass(frozen=True, eq=False)
class InspectedRow:
    """One picture as ``poroscan inspect`` shows it; fields are None where they are not known."""

    batch: str
    image: str
    rows: int | None = None
    columns: int | None = None
    depth: str | None = None
    pixel_size_um: float | None = None
    pixel_size_source: str = "unknown"
    banner_rows: int | None = None
    scale_bar_px: float | None = None
    scale_bar_um: float | None = None
    noise: float | None = None
    resolution_px: float | None = None
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    problem: str = ""
    thumbnail: npt.NDArray[np.uint8] | None = None

    def as_dict(self) -> dict[str, object]:
        """Plain values for JSON, without the thumbnail."""
        values: dict[str, object] = {k: v for k, v in vars(self).items() if k != "thumbnail"}
        values["flags"], values["notes"] = list(self.flags), list(self.notes)
        return values


@dataclass(frozen=True, eq=False)
class Inspected:
    """A folder looked over.

    Parameters
    ----------
    rows
        One per picture, readable or not, in the order of the folder.
    problems
        What else could not be read (folders, tables), one line each.
    notes
        What a reader should know although nothing failed.
    """

    rows: tuple[InspectedRow, ...]
    problems: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()

    @property
    def unread(self) -> bool:
        """True where something could not be read."""
        return bool(self.problems) or any(row.problem for row in self.rows)


def inspect_folder(
    path: str | os.PathLike[str],
    settings: IntakeSettings | None = None,
    *,
    thumbnails: bool = False,
    progress: Callable[[Iterable[InputFile], int], Iterable[InputFile]] | None = None,
) -> Inspected:
    """Look over a folder of pictures, or one picture.

    Parameters
    ----------
    path
        Folder or picture.
    settings
        How pictures are read; None takes the defaults.
    thumbnails
        Whether small pictures are kept for a contact sheet.
    progress
        Wraps the pictures while they are gone through, given their number.

    Raises
    ------
    InputError
        If the path does not exist or may not be read.
    """
    path = Path(path)
    if path.is_file():
        listing = FolderListing((InputFile(path.resolve().parent.name, shown(path.name), path),))
    else:
        listing = list_inputs(path)
    items = progress(listing.items, len(listing.items)) if progress else listing.items
    rows = tuple(_row(item, listing, settings, thumbnails) for item in items)
    return Inspected(rows, tuple(str(p) for p in listing.problems), listing.notes)


def _row(item: InputFile, listing: FolderListing, settings: IntakeSettings | None, thumbnails: bool) -> InspectedRow:
    try:
        found = inspect_picture(item.path, settings, sidecar=listing.sidecar_of(item))
    except InputError as error:
        return InspectedRow(item.batch, item.image, flags=("failed",), problem=str(error))
    picture, bar = found.picture, found.scale_bar
    return InspectedRow(
        item.batch,
        item.image,
        rows=picture.grey.shape[0],
        columns=picture.grey.shape[1],
        depth=found.depth,
        pixel_size_um=picture.pixel_size.um,
        pixel_size_source=picture.pixel_size.source,
        banner_rows=picture.banner_rows,
        scale_bar_px=round(bar.bar.length, 2) if bar.bar else None,
        scale_bar_um=bar.um,
        noise=round(found.quality.noise, 4),
        resolution_px=None if math.isnan(found.quality.resolution_px) else round(found.quality.resolution_px, 2),
        flags=picture.flags,
        notes=picture.notes,
        thumbnail=thumbnail(found) if thumbnails else None,
    )


def thumbnail(found: Inspection, *, side: int = THUMBNAIL) -> npt.NDArray[np.uint8]:
    """Small colour picture (rows, columns, 3) of the whole file: the banner tinted, the scale bar underlined.

    Parameters
    ----------
    found
        From ``inspect_picture``.
    side
        Longest side in pixels.
    """
    from PIL import Image

    grey = stretched(found.full)
    colour = np.repeat((grey * 255 + 0.5).astype(np.uint8)[..., None], 3, axis=2)
    rows = found.picture.banner_rows
    if rows:
        colour[-rows:] = (0.55 * colour[-rows:] + 0.45 * np.array([0, 114, 178])).astype(np.uint8)
    if found.scale_bar.bar is not None:
        box = found.scale_bar.bar.box
        thick = max(3, grey.shape[0] // 120)
        colour[box.bottom + 1 : box.bottom + 1 + thick, box.left : box.right] = (230, 159, 0)
    scale = side / max(grey.shape)
    size = (max(1, round(grey.shape[1] * scale)), max(1, round(grey.shape[0] * scale)))
    return np.asarray(
        Image.fromarray(colour).resize(size, Image.Resampling.BILINEAR if scale < 1 else Image.Resampling.NEAREST)
    )
