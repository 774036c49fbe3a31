"""Scale bar and data banner: drawn here, with invented words and a layout of our own."""

from __future__ import annotations

import functools
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
from PIL import Image, ImageDraw, ImageFont

GreyImage = npt.NDArray[np.uint8]

_STEPS = (1.0, 2.0, 5.0)


@dataclass(frozen=True)
class Bar:
    """A scale bar: its length in pixels (drawn), in micrometres (said) and its label."""

    length_px: int
    length_um: float
    label: str


def choose_bar(width: int, *, pixel_size_um: float, share: float = 0.22) -> Bar:
    """The bar of a round length (1, 2, 5 times a power of ten) nearest under a share of the picture's width.

    Parameters
    ----------
    width
        Width of the picture, px.
    pixel_size_um
        Micrometres per pixel.
    share
        Largest share of the width.

    Returns
    -------
    Bar
        Rounding to whole pixels changes the length by at most half a pixel.
    """
    limit = width * share * pixel_size_um
    exponent = int(np.floor(np.log10(limit)))
    um = max(step * 10.0**e for e in (exponent - 1, exponent) for step in _STEPS if step * 10.0**e <= limit)
    return Bar(max(1, round(um / pixel_size_um)), um, _label(um))


def _label(um: float) -> str:
    if um >= 1000:
        return f"{um / 1000:g} mm"
    return f"{um:g} µm" if um >= 1 else f"{um * 1000:g} nm"


@functools.lru_cache(maxsize=8)
def _font(size: int) -> ImageFont.FreeTypeFont:
    import matplotlib

    path = Path(matplotlib.get_data_path()) / "fonts" / "ttf" / "DejaVuSans.ttf"
    # Basic layout: the same pixels whether or not a shaping library is installed.
    return ImageFont.truetype(str(path), size, layout_engine=ImageFont.Layout.BASIC)


def burn_bar(grey: GreyImage, *, pixel_size_um: float) -> GreyImage:
    """A copy of the picture with a white scale bar and its label on a dark plate, bottom right.

    Parameters
    ----------
    grey
        uint8 picture.
    pixel_size_um
        Micrometres per pixel.
    """
    rows, columns = grey.shape
    bar = choose_bar(columns, pixel_size_um=pixel_size_um)
    size = max(14, rows // 30)
    thick, pad = max(4, rows // 140), max(6, rows // 70)
    plate_rows = size + thick + 3 * pad
    plate_columns = bar.length_px + 2 * pad + 8
    image = Image.fromarray(grey.copy())
    draw = ImageDraw.Draw(image)
    left, top = columns - plate_columns - pad, rows - plate_rows - pad
    draw.rectangle([left, top, left + plate_columns - 1, top + plate_rows - 1], fill=12)
    start = left + (plate_columns - bar.length_px) // 2
    base = top + plate_rows - pad - thick
    draw.rectangle([start, base, start + bar.length_px - 1, base + thick - 1], fill=255)
    draw.text((left + plate_columns / 2, top + pad / 2), bar.label, font=_font(size), fill=255, anchor="ma")
    return np.asarray(image)


def add_banner(grey: GreyImage, *, pixel_size_um: float, words: tuple[str, ...]) -> GreyImage:
    """The picture with a data banner under it: scale bar with its label on the left, words to the right.

    Parameters
    ----------
    grey
        uint8 picture.
    pixel_size_um
        Micrometres per pixel.
    words
        Fields of the banner, in order; those that do not fit are left out.

    Returns
    -------
    ndarray of uint8
        Taller by the height of the banner.
    """
    rows, columns = grey.shape
    size = max(14, rows // 42)
    height = 3 * size + 4
    bar = choose_bar(columns, pixel_size_um=pixel_size_um, share=0.25)
    image = Image.new("L", (columns, height), 0)
    draw = ImageDraw.Draw(image)
    draw.line([0, 0, columns - 1, 0], fill=200, width=2)
    left = _draw_ruler(draw, bar, size=size, height=height)
    _draw_words(draw, words, left=left, columns=columns, size=size, height=height)
    return np.vstack([grey, np.asarray(image)])


def _draw_ruler(draw: ImageDraw.ImageDraw, bar: Bar, *, size: int, height: int) -> int:
    """Bar with end ticks under its label; returns the column where the words may begin."""
    start, base, tick = size, height - size + 2, max(3, size // 4)
    draw.rectangle([start, base - 1, start + bar.length_px - 1, base + 1], fill=255)
    for column in (start, start + bar.length_px - 3):
        draw.rectangle([column, base - tick, column + 2, base + tick], fill=255)
    draw.text((start + bar.length_px / 2, base - tick - 3), bar.label, font=_font(size), fill=255, anchor="md")
    return start + bar.length_px + size


def _draw_words(
    draw: ImageDraw.ImageDraw, words: tuple[str, ...], *, left: int, columns: int, size: int, height: int
) -> None:
    font = _font(size)
    for word in words:
        width = int(np.ceil(font.getlength(word)))
        if left + width + size > columns:
            return
        draw.line([left, 8, left, height - 8], fill=110, width=1)
        draw.text((left + size // 2 + 2, height / 2 + 1), word, font=font, fill=230, anchor="lm")
        left += width + size + 6
