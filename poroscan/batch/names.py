"""Names of pictures as folders and as table cells, however hostile the file names are."""

from __future__ import annotations

import hashlib
import os
import re

#: First characters that make a spreadsheet take a text cell for a formula (full-width forms included).
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")
_RESERVED = re.compile(r"^(con|prn|aux|nul|com\d|lpt\d)(\.|$)", re.IGNORECASE)
_LONGEST = 80


def folder_name(batch: str, image: str) -> str:
    """Name of a picture's folder below ``RUN/images``: plain ASCII, unique on every file system.

    It follows from batch and picture alone, so that a picture keeps its folder when others come or go. Names that
    are not already plain lower-case ones carry eight characters of their SHA-256, because another name could
    differ from them only in case or in a character that had to go.

    Parameters
    ----------
    batch, image
        Name of the batch and of the picture within it.

    Examples
    --------
    >>> folder_name("b1", "bead_01.tif")
    'b1__bead_01.tif'
    >>> folder_name("b1", "Bead 1.tif")
    'b1__bead_1.tif-04de69c8'
    """
    name = f"{batch}__{image}" if batch else image
    plain = re.sub(r"[^a-z0-9._-]+", "_", name.lower()).lstrip("._-")[:_LONGEST].rstrip("._-")
    if plain == name and "__" not in image and "__" not in batch and not _RESERVED.match(plain):
        return plain
    digest = hashlib.sha256(os.fsencode(f"{batch}\0{image}")).hexdigest()[:8]
    return f"{'picture' if not plain or _RESERVED.match(plain) else plain}-{digest}"


def spreadsheet_safe(text: str) -> str:
    """Text that no spreadsheet takes for a formula: an apostrophe goes before a dangerous first character.

    Examples
    --------
    >>> spreadsheet_safe("=1+1"), spreadsheet_safe("bead 1")
    ("'=1+1", 'bead 1')
    """
    return f"'{text}" if text.startswith(_FORMULA_STARTS) else text
