"""What one file holds: its samples as stored, and the text that may tell the pixel size."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
import numpy.typing as npt

#: EXIF/TIFF orientation -> quarter turns anticlockwise after a possible left-right flip (TIFF 6.0, tag 274).
_ORIENTATIONS: Mapping[int, tuple[bool, int]] = MappingProxyType(
    {2: (True, 0), 3: (False, 2), 4: (True, 2), 5: (True, 1), 6: (False, 3), 7: (True, 3), 8: (False, 1)}
)


@dataclass(frozen=True)
class Resolution:
    """Resolution tags of a file.

    Parameters
    ----------
    x_um, y_um
        Micrometres per pixel along a row and along a column, as the tags say.
    words
        The tag for people.
    stated_in_words
        True where the unit stands as a word in the file's description.
    """

    x_um: float
    y_um: float
    words: str
    stated_in_words: bool = False


@dataclass(frozen=True, eq=False)
class Stored:
    """Samples of one picture with the text around them.

    Parameters
    ----------
    values
        2-D array in the file's own type.
    notes
        What was done on reading, in words for people.
    ome
        OME-XML text, else empty.
    texts
        Readable text by its place (``TIFF tag 34682``).
    resolution
        Resolution tags, or None.
    header
        What the file says of itself (maker, date, …).
    """

    values: npt.NDArray
    notes: tuple[str, ...] = ()
    ome: str = ""
    texts: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    resolution: Resolution | None = None
    header: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))


def upright(values: npt.NDArray, *, orientation: int) -> npt.NDArray:
    """Values turned and flipped as an orientation tag says (TIFF 6.0, tag 274; the same numbers in EXIF).

    Parameters
    ----------
    values
        Array whose first two axes are (row, column).
    orientation
        1 to 8; 1 and unknown numbers change nothing.
    """
    flip, turns = _ORIENTATIONS.get(orientation, (False, 0))
    return np.rot90(values[:, ::-1] if flip else values, turns)


def too_many_pixels(rows: int, columns: int, limit: int) -> tuple[str, str] | None:
    """What is wrong with a size and the remedy, or None where it is fine."""
    if rows < 1 or columns < 1:
        return f"has {rows} × {columns} pixels", "export the picture again"
    if rows * columns > limit:
        return (
            f"says it has {rows} × {columns} pixels, above the limit of {limit}",
            "crop or scale it, or raise max_pixels in the recipe if the size is true",
        )
    return None
