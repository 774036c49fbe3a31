"""PNG, JPEG and BMP."""

from __future__ import annotations

import io
import warnings
from pathlib import Path
from typing import Any

import imagecodecs
import numpy as np
import numpy.typing as npt
from PIL import BmpImagePlugin, Image, JpegImagePlugin, PngImagePlugin

from poroscan.intake.files import bad_input
from poroscan.intake.grey import to_luminance
from poroscan.intake.stored import Resolution, Stored, too_many_pixels, upright

# The plug-ins are called by name: the file's own bytes decide, and the size is known before anything is decoded.
_OPENERS: dict[str, Any] = {
    "png": PngImagePlugin.PngImageFile,
    "jpeg": JpegImagePlugin.JpegImageFile,
    "bmp": BmpImagePlugin.BmpImageFile,
}
_ORIENTATION_TAG = 274
_MAX_FILE_BYTES = 4 * 2**30


def read_raster(path: Path, *, kind: str, max_pixels: int) -> Stored:
    """Read a PNG, JPEG or BMP file.

    Parameters
    ----------
    path
        File.
    kind
        ``png``, ``jpeg`` or ``bmp``, as its first bytes show.
    max_pixels
        Larger pictures are refused before they are decoded.

    Raises
    ------
    InputError
        If the header is corrupt, the picture is too large, or the file is truncated or damaged.
    """
    data = _bytes_of(path)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            picture = _OPENERS[kind](io.BytesIO(data))
            columns, rows = picture.size
    except Exception as error:  # the reader's own errors are of many types
        raise bad_input(path, f"has a corrupt {kind.upper()} header ({_short(error)})", "export it again") from None
    wrong = too_many_pixels(rows, columns, max_pixels)
    if wrong:
        raise bad_input(path, *wrong)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            values, notes = _decoded(picture, data, kind)
            orientation = int(picture.getexif().get(_ORIENTATION_TAG, 1))
    except Exception as error:
        raise bad_input(path, f"is truncated or damaged ({_short(error)})", "copy it again from its source") from None
    if orientation in range(2, 9):
        notes = (*notes, "turned upright as its orientation tag says")
    return Stored(
        np.ascontiguousarray(upright(values, orientation=orientation)),
        notes,
        texts=_texts(picture),
        resolution=_resolution(picture, turned=orientation in range(5, 9)),
    )


def _bytes_of(path: Path) -> bytes:
    if path.stat().st_size > _MAX_FILE_BYTES:
        raise bad_input(path, "is larger than 4 GiB", "save it as TIFF")
    try:
        return path.read_bytes()
    except (OSError, MemoryError) as error:
        raise bad_input(path, f"cannot be read ({_short(error)})", "check the disk") from None


def _decoded(picture: Image.Image, data: bytes, kind: str) -> tuple[npt.NDArray, tuple[str, ...]]:
    """2-D samples in the file's depth, and notes."""
    mode = picture.mode
    picture.load()
    notes: tuple[str, ...] = ()
    if getattr(picture, "n_frames", 1) > 1:
        notes = ("animated: the first frame is measured",)
    if mode == "1":
        return np.asarray(picture, dtype=bool), notes
    if mode == "P":
        picture = picture.convert("RGBA" if "transparency" in picture.info else "RGB")
        notes = (*notes, "palette colours were looked up")
    values = np.asarray(picture)
    if kind == "png" and data[24] == 16 and mode not in ("I", "I;16", "I;16B"):
        values = imagecodecs.png_decode(data)  # Pillow cuts 16-bit colour to 8 bits
    if values.ndim == 2:
        return _sixteen_bits(values), notes
    model = "cmyk" if picture.mode == "CMYK" else "rgb" if values.shape[2] >= 3 else "grey"
    values, more = to_luminance(values, model=model)
    return values, notes + more


def _sixteen_bits(values: npt.NDArray) -> npt.NDArray:
    """16-bit grey that was handed over as 32-bit numbers, in its own depth."""
    return values.astype(np.uint16) if values.dtype.kind == "i" or values.dtype == np.dtype(">u2") else values


def _texts(picture: Image.Image) -> dict[str, str]:
    """Text chunks and comments."""
    texts = {}
    for key, value in picture.info.items():
        if isinstance(value, bytes) and key == "comment":
            value = value.decode("utf-8", "replace")
        if isinstance(value, str) and isinstance(key, str) and value.strip():
            texts[f"text {key}"] = f"{key}={value}"
    return texts


def _resolution(picture: Image.Image, *, turned: bool) -> Resolution | None:
    dpi = picture.info.get("dpi")
    try:
        x, y = (float(dpi[0]), float(dpi[1])) if dpi else (0.0, 0.0)
    except (TypeError, ValueError, ZeroDivisionError):
        return None
    if not (np.isfinite(x) and np.isfinite(y) and x > 0 and y > 0):
        return None
    x, y = (y, x) if turned else (x, y)
    return Resolution(25400 / x, 25400 / y, f"{x:.6g} pixels per inch")


def _short(error: BaseException) -> str:
    text = " ".join(str(error).split()) or type(error).__name__
    return text if len(text) <= 100 else text[:97] + "..."
