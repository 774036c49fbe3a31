"""The sidecar table: what the pictures of a folder do not say of themselves.

A file ``sidecar.csv`` (or ``pixel_sizes.csv``) in the folder, one row per picture:

``image`` (required)   file name, with or without extension; ``SUBFOLDER/NAME`` for a picture of a sub-folder
``pixel_size_um``      micrometres per pixel
``scale_bar_um``       length that the scale bar stands for
anything else          kept and shown with the picture (``instrument``, ``operator``, ``specimen``, …)

Comma, semicolon or tab separated, UTF-8; a decimal comma is read where the separator is a semicolon or a tab.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

from poroscan.intake.files import bad_input, checked_head

SIDECAR_NAMES = ("sidecar.csv", "pixel_sizes.csv")
_MAX_BYTES = 64 * 2**20


@dataclass(frozen=True)
class SidecarRow:
    """One row of the sidecar table.

    Parameters
    ----------
    image
        As it stands in the table.
    pixel_size_um, scale_bar_um
        Micrometres, or None where the cell is empty.
    other
        Every other column that is filled.
    line
        Line of the table, for messages.
    """

    image: str
    pixel_size_um: float | None = None
    scale_bar_um: float | None = None
    other: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    line: int = 0


def read_sidecar(path: Path) -> tuple[SidecarRow, ...]:
    """Rows of a sidecar table.

    Raises
    ------
    InputError
        If the table cannot be read, has no column ``image``, or a length is not a positive number.
    """
    checked_head(path)
    if path.stat().st_size > _MAX_BYTES:
        raise bad_input(path, "is larger than 64 MiB", "keep one row per picture")
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError):
        raise bad_input(path, "is not UTF-8 text", "save the table as CSV in UTF-8") from None
    delimiter = _delimiter(text)
    try:
        lines = list(csv.reader(io.StringIO(text, newline=""), delimiter=delimiter))
    except csv.Error as error:
        raise bad_input(path, f"is no table ({error})", "save it as CSV") from None
    names = [name.strip().lower() for name in lines[0]] if lines else []
    if "image" not in names:
        raise bad_input(
            path, "has no column 'image'", "name the columns image, pixel_size_um, scale_bar_um in its first line"
        )
    rows = [
        _row(path, names, cells, number, delimiter) for number, cells in enumerate(lines[1:], start=2) if any(cells)
    ]
    return tuple(rows)


def _delimiter(text: str) -> str:
    first = text.split("\n", 1)[0]
    return max((",", ";", "\t"), key=first.count)


def _row(path: Path, names: list[str], cells: list[str], line: int, delimiter: str) -> SidecarRow:
    values = {name: cell.strip() for name, cell in zip(names, cells, strict=False) if name and cell.strip()}
    image = values.pop("image", "")
    if not image:
        raise bad_input(path, f"line {line} names no image", "fill the column 'image'")
    lengths: dict[str, float | None] = {}
    for key in ("pixel_size_um", "scale_bar_um"):
        text = values.pop(key, "")
        lengths[key] = _length(path, key, text, line, decimal_comma=delimiter != ",") if text else None
    return SidecarRow(image.replace("\\", "/"), other=MappingProxyType(values), line=line, **lengths)


def _length(path: Path, key: str, text: str, line: int, *, decimal_comma: bool) -> float:
    try:
        value = float(text.replace(",", ".") if decimal_comma else text)
    except ValueError:
        value = math.nan
    if not (math.isfinite(value) and value > 0):
        raise bad_input(path, f"line {line}: {key} is {text!r}", "give a positive number of micrometres")
    return value
