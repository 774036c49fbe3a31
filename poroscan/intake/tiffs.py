"""TIFF in its many kinds, OME-TIFF and BigTIFF included."""

from __future__ import annotations

import logging
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import tifffile

from poroscan.errors import InputError
from poroscan.intake.files import bad_input
from poroscan.intake.grey import to_luminance
from poroscan.intake.stored import Resolution, Stored, too_many_pixels, upright

#: Private tags that hold pictures, colour profiles or geography, never a pixel size in words.
_NOT_TEXT = frozenset({33550, 33922, 34377, 34675, 34735, 34736, 34737, 33723, 37724, 50838, 50839})
_FIRST_PRIVATE = 32768
_MAX_TEXT_BYTES = 4 * 2**20
_UM_PER_UNIT = {2: 25400.0, 3: 10000.0}
_WORD_UNITS = {"micron": 1.0, "microns": 1.0, "um": 1.0, "µm": 1.0, "\\u00b5m": 1.0, "nm": 1e-3, "mm": 1e3, "cm": 1e4}
_HEADER_TAGS = {271: "maker", 272: "model", 305: "software", 306: "date", 315: "operator"}


def read_tiff(path: Path, *, page: int, max_pixels: int) -> Stored:
    """Read one page of a TIFF file.

    Parameters
    ----------
    path
        File.
    page
        Page that is read; 1 is the first.
    max_pixels
        Larger pictures are refused before they are decoded.

    Raises
    ------
    InputError
        If the file is corrupt or truncated, has no such page, is too large, or holds samples that are not grey or colour.
    """
    with quiet():
        try:
            file = tifffile.TiffFile(path)
        except Exception as error:  # the reader's own errors are of many types
            raise bad_input(path, f"has a corrupt TIFF header ({_short(error)})", "export it again") from None
        with file:
            try:
                return _read(file, path, page, max_pixels)
            except InputError:
                raise
            except Exception as error:  # tags of a corrupt file may be of any type
                raise bad_input(path, f"has corrupt TIFF tags ({_short(error)})", "export it again") from None


def _read(file: Any, path: Path, number: int, max_pixels: int) -> Stored:
    page, pages = _page(file, path, number)
    wrong = too_many_pixels(page.imagelength, page.imagewidth, max_pixels)
    if wrong:
        raise bad_input(path, *wrong)
    if page.imagedepth * page.samplesperpixel > 64:
        raise bad_input(path, f"has {page.samplesperpixel} samples per pixel", "export it as grey or colour")
    refuse_truncated(page, path)
    try:
        samples = page.asarray()
    except MemoryError:
        raise bad_input(path, "needs more memory than there is", "crop or scale it") from None
    except Exception as error:
        raise bad_input(path, f"is truncated or damaged ({_short(error)})", "copy it again from its source") from None
    values, notes = _one_channel(samples, page, path)
    if pages > 1:
        notes = (f"page {number} of {pages} is measured", *notes)
    orientation = _number(page, 274, 1)
    if orientation in range(2, 9):
        notes = (*notes, "turned upright as its orientation tag says")
    return Stored(
        np.ascontiguousarray(upright(values, orientation=orientation)),
        notes,
        ome=_ome(file),
        texts=_texts(file, page),
        resolution=_resolution(page),
        header=_header(page),
    )


def _page(file: Any, path: Path, number: int) -> tuple[Any, int]:
    try:
        pages = len(file.pages)
        if number <= pages:
            page = file.pages[number - 1]
            page = page if isinstance(page, tifffile.TiffPage) else page.aspage()
            return page, pages
    except Exception as error:
        raise bad_input(path, f"has a corrupt TIFF directory ({_short(error)})", "export it again") from None
    if pages == 0:
        raise bad_input(path, "is a TIFF file without a picture", "export it again")
    raise bad_input(path, f"has {pages} pages, so no page {number}", "set another page")


def refuse_truncated(page: Any, path: Path) -> None:
    """Refuse a page whose strips or tiles are missing or reach beyond the end of the file.

    The decoder fills such gaps with zeros, and a truncated picture must not be measured as if whole.

    Raises
    ------
    InputError
        If data are missing.
    """
    size = path.stat().st_size
    ends = [o + n if n > 0 else size + 1 for o, n in zip(page.dataoffsets, page.databytecounts, strict=False)]
    if not ends:
        raise bad_input(path, "holds no picture data", "export it again")
    missing = sum(end > size for end in ends)
    if missing:
        raise bad_input(
            path,
            f"is truncated ({missing} of {len(ends)} strips or tiles are missing)",
            "copy it again from its source",
        )


def _one_channel(samples: npt.NDArray, page: Any, path: Path) -> tuple[npt.NDArray, tuple[str, ...]]:
    photometric = int(page.photometric)
    notes: tuple[str, ...] = ()
    samples = np.asarray(samples)
    if samples.dtype.kind not in "buif":
        raise bad_input(path, f"holds samples of type {samples.dtype}", "export it as grey or colour")
    if page.imagedepth > 1:
        samples = samples.reshape(page.shaped)[0]
        samples = samples[0]
        notes = (f"plane 1 of {page.imagedepth} is measured",)
    if samples.ndim > 2 and page.planarconfig == 2 and samples.shape[0] == page.samplesperpixel:
        samples = np.moveaxis(samples, 0, -1)
    if samples.ndim == 2:
        return _grey_page(samples, page, photometric, notes)
    if samples.ndim != 3:
        raise bad_input(path, f"has samples of shape {samples.shape}", "export it as grey or colour")
    model = "cmyk" if photometric == 5 else "rgb" if photometric in (2, 6) and samples.shape[2] >= 3 else "grey"
    values, more = to_luminance(samples, model=model)
    return _inverted(values, photometric), notes + more


def _grey_page(
    samples: npt.NDArray, page: Any, photometric: int, notes: tuple[str, ...]
) -> tuple[npt.NDArray, tuple[str, ...]]:
    if photometric == 3 and page.colormap is not None:
        colours = np.moveaxis(np.asarray(page.colormap), 0, -1)[np.minimum(samples, page.colormap.shape[1] - 1)]
        values, more = to_luminance(colours.astype(np.uint16), model="rgb")
        return values, (*notes, "palette colours were looked up", *more)
    bits = int(page.bitspersample)
    if bits == 1:
        samples = samples.astype(bool)
    elif samples.dtype.kind == "u" and bits < 8 * samples.dtype.itemsize and bits in (2, 4, 6):
        samples = (samples * (255 // (2**bits - 1))).astype(np.uint8)
    return _inverted(samples, photometric), notes


def _inverted(values: npt.NDArray, photometric: int) -> npt.NDArray:
    if photometric != 0:
        return values
    if values.dtype.kind == "b":
        return ~values
    return np.iinfo(values.dtype).max - values if values.dtype.kind == "u" else -values


def _number(page: Any, code: int, default: int) -> int:
    tag = page.tags.get(code)
    try:
        return int(tag.value) if tag is not None else default
    except (TypeError, ValueError):
        return default


def _ome(file: Any) -> str:
    try:
        return (file.ome_metadata or "") if file.is_ome else ""
    except Exception:
        return ""


def _texts(file: Any, page: Any) -> dict[str, str]:
    """Readable text of the description and of private tags, by place. The raw bytes are read: no parser is trusted with them."""
    texts = {}
    for tag in page.tags.values():
        wanted = tag.code == 270 or (tag.code >= _FIRST_PRIVATE and tag.code not in _NOT_TEXT)
        if not wanted or int(tag.dtype) not in (1, 2, 7) or not 8 < tag.valuebytecount <= _MAX_TEXT_BYTES:
            continue
        text = _readable(_raw(file, tag))
        if text:
            texts["TIFF description" if tag.code == 270 else f"TIFF tag {tag.code}"] = text
    return texts


def _raw(file: Any, tag: Any) -> bytes:
    try:
        file.filehandle.seek(tag.valueoffset)
        return file.filehandle.read(tag.valuebytecount)
    except (OSError, ValueError):
        return b""


def _readable(raw: bytes) -> str:
    """Runs of at least four printable characters; UTF-16 text is recognised by its zero bytes."""
    if raw.count(0) * 3 > len(raw):
        raw = raw.replace(b"\x00", b"")
    text = raw.decode("utf-8", "replace") if b"\xb5" not in raw or b"\xc2\xb5" in raw else raw.decode("latin-1")
    runs, run = [], []
    for c in text + "\x00":
        if (c.isprintable() and c != "\ufffd") or c in "\r\n\t":
            run.append(c)
            continue
        if len(run) >= 4:
            runs.append("".join(run))
        run = []
    return "\n".join(runs).strip()


def _resolution(page: Any) -> Resolution | None:
    values = []
    for code in (282, 283):
        tag = page.tags.get(code)
        try:
            numerator, denominator = tag.value
            values.append(numerator / denominator)
        except (AttributeError, TypeError, ValueError, ZeroDivisionError):
            return None
    x, y = values
    if not (np.isfinite(x) and np.isfinite(y) and x > 0 and y > 0):
        return None
    unit = _number(page, 296, 2)
    worded = _unit_of_description(page)
    if worded is not None and unit not in (2, 3):
        return Resolution(worded / x, worded / y, f"{x:.6g} pixels per unit of the description", stated_in_words=True)
    um = _UM_PER_UNIT.get(unit)
    words = {2: "pixels per inch", 3: "pixels per cm"}.get(unit, "")
    return Resolution(um / x, um / y, f"{x:.6g} {words}") if um else None


def _unit_of_description(page: Any) -> float | None:
    """Unit of resolution tags without one, from a line ``unit=micron`` of the description."""
    for line in str(page.description or "").splitlines():
        key, _, value = line.partition("=")
        if key.strip().lower() == "unit":
            return _WORD_UNITS.get(value.strip().lower())
    return None


def _header(page: Any) -> dict[str, str]:
    header = {}
    for code, name in _HEADER_TAGS.items():
        tag = page.tags.get(code)
        if tag is not None and isinstance(tag.value, str) and tag.value.strip():
            header[name] = " ".join(tag.value.split())[:200]
    return header


@contextmanager
def quiet() -> Iterator[None]:
    """Keep the reader's log lines off the terminal; what matters is raised as an error or noted."""
    logger = logging.getLogger("tifffile")
    handler = logging.NullHandler()
    before = logger.propagate
    logger.addHandler(handler)
    logger.propagate = False
    try:
        yield
    finally:
        logger.removeHandler(handler)
        logger.propagate = before


def _short(error: BaseException) -> str:
    text = " ".join(str(error).split()) or type(error).__name__
    return text if len(text) <= 100 else text[:97] + "..."
