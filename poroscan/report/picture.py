"""Pictures with outline and pores drawn on them.

Outlines are orange, pore edges light blue: a pair that people with any common colour blindness tell apart, and that differs
in lightness, so that it survives a black-and-white printer.
"""

from __future__ import annotations

import struct
import zlib

import imagecodecs
import numpy as np
import numpy.typing as npt
from scipy.ndimage import find_objects
from skimage.transform import resize

from poroscan.section import BoolArray

OUTLINE_RGB = (255, 140, 0)
PORE_RGB = (110, 205, 255)
NUMBER_RGB = (255, 255, 255)

_GREYS = 240
_WASH = 0.5
_GROUND, _DOT = 1, 2
ORANGE_INDEX, PORE_INDEX, _NUMBER, _BACK = 250, 251, 252, 0
_DIGITS = {  # 3 × 5 dots, row by row
    "0": "111101101101111",
    "1": "010110010010111",
    "2": "111001111100111",
    "3": "111001111001111",
    "4": "101101111001001",
    "5": "111100111001111",
    "6": "111100111101111",
    "7": "111001010010010",
    "8": "111101111101111",
    "9": "111101111001111",
}


def draw(
    grey: npt.NDArray[np.float32], labels: npt.NDArray[np.integer], pores: BoolArray, *, numbers: bool = False
) -> npt.NDArray[np.uint8]:
    """Palette indices of a picture with its particles' outlines and pore edges drawn on it.

    Parameters
    ----------
    grey
        Picture (row, column), 0…1.
    labels
        0 for surroundings, k for the k-th particle; same shape.
    pores
        Pore mask; same shape.
    numbers
        Whether each particle carries its number.

    Returns
    -------
    numpy.ndarray
        uint8 of the same shape; ``palette()`` gives the colours.
    """
    index = (np.clip(_stretched(grey), 0.0, 1.0) * (_GREYS - 1)).astype(np.uint8)
    index[_inner_edge(pores)] = PORE_INDEX
    index[_outline(labels, thickness=1 + max(grey.shape) // 900)] = ORANGE_INDEX
    if numbers:
        marks = _numbers(labels)
        index[marks > 0] = np.where(marks == _DOT, _NUMBER, _BACK)[marks > 0]
    return index


def palette() -> npt.NDArray[np.uint8]:
    """Colours of the indices that ``draw`` gives, shape (256, 3)."""
    colours = np.zeros((256, 3), dtype=np.uint8)
    colours[:_GREYS] = np.linspace(0, 255, _GREYS).round().astype(np.uint8)[:, None]
    colours[ORANGE_INDEX], colours[PORE_INDEX], colours[_NUMBER] = OUTLINE_RGB, PORE_RGB, NUMBER_RGB
    return colours


def indexed_png(index: npt.NDArray[np.uint8]) -> bytes:
    """A palette picture as PNG: a third of the bytes and the time of the same picture in true colour.

    Parameters
    ----------
    index
        Palette indices (row, column).
    """
    rows, columns = index.shape
    lines = np.zeros((rows, columns + 1), dtype=np.uint8)  # each line begins with its filter type, 0 for none
    lines[:, 1:] = index
    header = struct.pack(">IIBBBBB", columns, rows, 8, 3, 0, 0, 0)
    chunks = (
        (b"IHDR", header),
        (b"PLTE", palette().tobytes()),
        (b"IDAT", zlib.compress(lines.tobytes(), 1)),
        (b"IEND", b""),
    )
    return b"\x89PNG\r\n\x1a\n" + b"".join(
        struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body)) for kind, body in chunks
    )


def thumbnail(
    grey: npt.NDArray[np.float32],
    labels: npt.NDArray[np.integer],
    pores: BoolArray,
    *,
    longest: int,
    quality: int,
    numbers: bool = False,
) -> bytes:
    """A small compressed picture (WebP): outlines drawn after it was made small, so that they stay sharp, pores tinted.

    Parameters
    ----------
    grey, labels, pores
        As in ``draw``.
    longest
        Longest side in pixels; smaller pictures keep their size.
    quality
        Quality of the compression, 1…100.
    numbers
        Whether each particle carries its number.
    """
    shares = pores.astype(np.float32)
    if longest < max(grey.shape):
        shape = tuple(max(1, round(side * longest / max(grey.shape))) for side in grey.shape)
        labels = labels[_nearest(labels.shape[0], shape[0])][:, _nearest(labels.shape[1], shape[1])]
        grey, shares = (_smaller(array, shape, by=max(array.shape) // longest) for array in (grey, shares))
    pores = shares > 0.5
    rgb = _tinted(palette()[draw(grey, labels, np.zeros_like(pores))], pores)
    if numbers:
        marks = _numbers(labels)
        rgb[marks == _GROUND], rgb[marks == _DOT] = 0, NUMBER_RGB
    return bytes(imagecodecs.webp_encode(rgb, level=quality, lossless=False, method=5))


def _smaller(array: npt.NDArray[np.float32], shape: tuple[int, ...], *, by: int) -> npt.NDArray[np.float32]:
    """Means of whole blocks first, which is fast, then the rest of the way."""
    if by > 1:
        rows, columns = (side // by for side in array.shape)
        array = array[: rows * by, : columns * by].reshape(rows, by, columns, by).mean(axis=(1, 3))
    return resize(array, shape, order=1, anti_aliasing=True, preserve_range=True).astype(np.float32)


def _tinted(rgb: npt.NDArray[np.uint8], pores: BoolArray) -> npt.NDArray[np.uint8]:
    """Pores in a wash of blue: on a small picture edges of one pixel would hide the boundary that is to be checked."""
    plain = pores & (rgb[..., 0] == rgb[..., 1])  # not where an outline is drawn
    rgb[plain] = ((1 - _WASH) * rgb[plain] + _WASH * np.array(PORE_RGB)).astype(np.uint8)
    return rgb


def _nearest(old: int, new: int) -> npt.NDArray[np.intp]:
    return np.minimum(((np.arange(new) + 0.5) * old / new).astype(np.intp), old - 1)


def _stretched(grey: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """Grey values spread between the 0.5th and 99.5th percentile: a dim picture is still seen."""
    sample = grey[:: max(1, grey.shape[0] // 400), :: max(1, grey.shape[1] // 400)]
    low, high = np.percentile(sample, [0.5, 99.5])
    return (grey - low) / (high - low) if high > low else np.full_like(grey, 0.5)


def _inner_edge(mask: BoolArray) -> BoolArray:
    """Pixels of a mask that have one outside it among their four neighbours."""
    inside = mask.copy()
    inside[1:] &= mask[:-1]
    inside[:-1] &= mask[1:]
    inside[:, 1:] &= mask[:, :-1]
    inside[:, :-1] &= mask[:, 1:]
    return mask & ~inside


def _outline(labels: npt.NDArray[np.integer], *, thickness: int) -> BoolArray:
    edge = np.zeros(labels.shape, dtype=bool)
    down, right = labels[1:] != labels[:-1], labels[:, 1:] != labels[:, :-1]
    edge[1:] |= down
    edge[:, 1:] |= right
    for _ in range(thickness - 1):
        wider = edge.copy()
        wider[:-1] |= edge[1:]
        wider[:, :-1] |= edge[:, 1:]
        edge = wider
    return edge


def _numbers(labels: npt.NDArray[np.integer]) -> npt.NDArray[np.uint8]:
    """Where the number of each particle is drawn, in its middle: ``_DOT`` for the digits, ``_GROUND`` around them."""
    marks = np.zeros(labels.shape, dtype=np.uint8)
    size = max(2, max(labels.shape) // 150)
    for number, place in enumerate(find_objects(labels), start=1):
        if place is not None:
            row, column = ((side.start + side.stop) // 2 for side in place)
            _stamp(marks, str(number), row, column, size)
    return marks


def _stamp(marks: npt.NDArray[np.uint8], text: str, row: int, column: int, size: int) -> None:
    glyphs = [np.array([int(d) for d in _DIGITS[c]], dtype=np.uint8).reshape(5, 3) for c in text]
    dots = np.concatenate([np.pad(g, ((2, 2), (1, 1))) for g in glyphs], axis=1)
    dots = np.kron(_GROUND + np.pad(dots, ((0, 0), (1, 1))), np.ones((size, size), dtype=np.uint8))
    top, left = max(0, row - dots.shape[0] // 2), max(0, column - dots.shape[1] // 2)
    place = marks[top : top + dots.shape[0], left : left + dots.shape[1]]
    place[...] = dots[: place.shape[0], : place.shape[1]]
