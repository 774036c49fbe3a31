"""Pictures drawn with a known banner, scale bar and label, in the forms that microscopes and people use."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from matplotlib import get_data_path
from PIL import Image, ImageDraw, ImageFont
from scipy import ndimage

FONTS = ("DejaVuSans.ttf", "DejaVuSans-Bold.ttf", "DejaVuSansMono.ttf", "DejaVuSerif.ttf")


@dataclass(frozen=True, eq=False)
class Drawn:
    """A picture (uint8) with the truth about it: rows of the banner, bar in pixels between its outer ends, what it stands for."""

    grey: np.ndarray
    banner_rows: int
    bar_px: float | None
    um: float | None


def font(size: int, name: str = "DejaVuSans.ttf") -> ImageFont.FreeTypeFont:
    return ImageFont.truetype(str(Path(get_data_path()) / "fonts" / "ttf" / name), size)


def texture(
    rows: int, columns: int, rng: np.random.Generator, *, kind: str = "porous", noise: float = 8.0
) -> np.ndarray:
    """A grey picture without marks: ``porous`` interior, ``disc`` of it on dark ground, ``black`` ground, ``flat`` grey."""
    smooth = ndimage.gaussian_filter(rng.normal(size=(rows, columns)), 5)
    porous = np.where(smooth < np.quantile(smooth, 0.35), 60.0, 150.0)
    y, x = np.mgrid[:rows, :columns]
    disc = (y - rows / 2) ** 2 + (x - columns / 2) ** 2 < (0.38 * min(rows, columns)) ** 2
    base = {
        "porous": porous,
        "disc": np.where(disc, porous, 30.0),
        "black": np.where(disc, porous, 0.0),
        "flat": np.full((rows, columns), 105.0),
    }[kind]
    noisy = ndimage.gaussian_filter(base, 0.8) + rng.normal(0, noise, base.shape) * (1.0 if kind != "black" else disc)
    return np.clip(noisy, 0, 255).astype(np.uint8)


def draw_bar(
    draw: ImageDraw.ImageDraw, left: int, row: int, length: int, *, kind: str, ink: int, thick: int = 3, gap=None
) -> None:
    """A bar whose outer ends are ``left`` and ``left + length``."""
    right = left + length - 1
    if kind == "dots":
        for k in range(11):
            x = left + round(k * length / 10)
            draw.rectangle((x - 1, row, x, row + thick), fill=ink)
        return
    pieces = [(left, right)] if gap is None else [(left, gap[0]), (gap[1], right)]
    for a, b in pieces:
        draw.rectangle((a, row, b, row + thick - 1), fill=ink)
    if kind in ("ticks", "broken", "ruler"):
        for x in (left, right - 1):
            draw.rectangle((x, row - 6, x + 1, row + thick + 5 if kind != "ruler" else row), fill=ink)
    if kind == "ruler":
        for k in range(1, 10):
            x = left + round(k * (length - 2) / 10)
            draw.rectangle((x, row - (9 if k == 5 else 5), x, row), fill=ink)


def with_banner(
    picture: np.ndarray,
    *,
    length: int,
    label: str,
    um: float,
    kind: str = "broken",
    size: int = 22,
    rows: int = 64,
    ground: int = 0,
    ink: int = 255,
    face: str = FONTS[0],
    line: bool = True,
) -> Drawn:
    """The picture with a banner of two lines of text and a bar on its right half."""
    columns = picture.shape[1]
    strip = Image.new("L", (columns, rows), ground)
    draw, letters = ImageDraw.Draw(strip), font(size, face)
    if line:
        draw.line((0, 0, columns, 0), fill=ink)
    draw.text((10, rows // 4), "HV 5.00 kV", font=letters, fill=ink, anchor="lm")
    draw.text((10, 3 * rows // 4), "WD 9.8 mm", font=letters, fill=ink, anchor="lm")
    draw.line((columns // 3, 0, columns // 3, rows), fill=ink)
    left, row = columns // 3 + 25, rows // 4 if kind != "ruler" else rows // 3
    width = int(letters.getlength(label))
    if kind == "broken":
        middle = left + length // 2
        draw_bar(draw, left, row, length, kind=kind, ink=ink, gap=(middle - width // 2 - 8, middle + width // 2 + 8))
        draw.text((middle, row + 1), label, font=letters, fill=ink, anchor="mm")
    else:
        draw_bar(draw, left, row, length, kind=kind, ink=ink)
        draw.text((left + length // 2, 3 * rows // 4), label, font=letters, fill=ink, anchor="mm")
    grey = np.vstack([picture, np.asarray(strip)])
    return Drawn(grey, rows, float(length), um)


def burnt_in(
    picture: np.ndarray,
    *,
    length: int,
    label: str,
    um: float,
    kind: str = "plain",
    size: int = 24,
    ink: int = 255,
    box: int | None = None,
    corner: str = "right",
    thick: int = 6,
    face: str = FONTS[0],
    below: bool = False,
) -> Drawn:
    """The picture with a bar and its label drawn on it, perhaps on a box of grey ``box``."""
    rows, columns = picture.shape
    drawn = Image.fromarray(picture.copy())
    draw, letters = ImageDraw.Draw(drawn), font(size, face)
    left = columns - length - 40 if corner == "right" else 40
    row = rows - 30 - (size + 14 if below else 0)
    if box is not None:
        draw.rectangle((left - 15, row - size - 22, left + length + 15, rows - 8), fill=box)
    draw_bar(draw, left, row, length, kind=kind, ink=ink, thick=thick)
    at = (left + length // 2, row + thick + 8 if below else row - 8)
    draw.text(at, label, font=letters, fill=ink, anchor="mt" if below else "mb")
    return Drawn(np.asarray(drawn), 0, float(length), um)
