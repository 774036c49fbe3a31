"""The contact sheet: every picture of a folder, small, with what was found written below it."""

from __future__ import annotations

import base64
import html
import io
import os
from pathlib import Path

import numpy as np
import numpy.typing as npt

from poroscan.errors import SettingsError
from poroscan.intake.files import shown
from poroscan.intake.inspection import THUMBNAIL, Inspected, InspectedRow
from poroscan.quantities import FLAGS

_COLUMNS = 4
_MOST_ON_PNG = 400
_LINE = 17
_CAPTION_LINES = 5

_STYLE = """
body{font:15px/1.45 system-ui,sans-serif;margin:1.5rem;color:#1b1b1b;background:#fff}
h1{font-size:1.4rem} h2{font-size:1.1rem;margin-top:2rem;border-bottom:1px solid #bbb}
main{max-width:1300px;margin:auto} .sheet{display:grid;gap:1rem;grid-template-columns:repeat(auto-fill,minmax(240px,1fr))}
figure{margin:0;padding:.6rem;border:1px solid #ccc;border-radius:4px;overflow-wrap:anywhere}
figure.bad{border-color:#a33a00;background:#fff6f1} img{max-width:100%;display:block;margin:0 auto .4rem;image-rendering:auto}
figcaption b{display:block} ul{margin:.3rem 0 0;padding-left:1.1rem} .key{color:#444}
"""


def write_sheet(found: Inspected, path: Path) -> None:
    """Write the contact sheet as PNG or, by the ending ``.html``, as a page that stands alone.

    Parameters
    ----------
    found
        A folder looked over with thumbnails.
    path
        File that is written; it appears whole or not at all.

    Raises
    ------
    SettingsError
        If the file cannot be written there.
    """
    data = sheet_html(found).encode() if path.suffix.lower() == ".html" else sheet_png(found)
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(data)
        os.replace(part, path)
    except OSError as error:
        raise SettingsError(f"{shown(path)}: cannot be written ({error.strerror}); choose another place") from None


def caption(row: InspectedRow) -> list[str]:
    """Lines that stand below a thumbnail."""
    if row.problem:
        return [row.image, row.problem]
    size = "pixel size unknown" if row.pixel_size_um is None else f"{row.pixel_size_um:.5g} µm per pixel"
    source = "" if row.pixel_size_um is None else f" ({row.pixel_size_source.replace('_', ' ')})"
    lines = [row.image, f"{row.rows} × {row.columns} pixels, {row.depth}", size + source]
    if row.banner_rows:
        lines.append(f"banner of {row.banner_rows} rows cut off")
    return lines + [FLAGS[flag].words for flag in row.flags if flag in FLAGS]


def sheet_html(found: Inspected) -> str:
    """The contact sheet as one HTML page; every text from outside is escaped."""
    parts = [
        "<!doctype html><html lang='en'><head><meta charset='utf-8'><title>Contact sheet</title>",
        "<meta name='viewport' content='width=device-width, initial-scale=1'>",
        f"<style>{_STYLE}</style></head><body><main><h1>Contact sheet</h1>",
        f"<p>{len(found.rows)} pictures, {sum(bool(r.problem) for r in found.rows)} of them not readable. ",
        "<span class='key'>Blue: data banner that is cut off. Orange: scale bar.</span></p>",
    ]
    parts += [f"<p>{html.escape(line)}</p>" for line in (*found.problems, *found.notes)]
    batch = None
    for row in found.rows:
        if row.batch != batch:
            parts.append(("" if batch is None else "</div>") + f"<h2>{html.escape(row.batch)}</h2><div class='sheet'>")
            batch = row.batch
        parts.append(_figure(row))
    return "".join(parts) + ("</div>" if batch is not None else "") + "</main></body></html>\n"


def _figure(row: InspectedRow) -> str:
    name, *lines = (html.escape(line) for line in caption(row))
    image = ""
    if row.thumbnail is not None:
        data = base64.b64encode(_png(row.thumbnail)).decode("ascii")
        image = f"<img alt='{html.escape(row.image, quote=True)}' src='data:image/png;base64,{data}'>"
    listed = "".join(f"<li>{line}</li>" for line in lines)
    return f"<figure{' class=bad' if row.problem else ''}>{image}<figcaption><b>{name}</b><ul>{listed}</ul></figcaption></figure>"


def _png(pixels: npt.NDArray[np.uint8]) -> bytes:
    from PIL import Image

    stream = io.BytesIO()
    Image.fromarray(pixels).save(stream, "PNG")
    return stream.getvalue()


def sheet_png(found: Inspected) -> bytes:
    """The contact sheet as one PNG of four columns; at most 400 pictures, the page holds all."""
    from PIL import Image, ImageDraw

    rows = found.rows[:_MOST_ON_PNG]
    cell_width, cell_height = THUMBNAIL + 40, THUMBNAIL + _LINE * _CAPTION_LINES + 36
    lines = max(1, -(-len(rows) // _COLUMNS))
    sheet = Image.new("RGB", (_COLUMNS * cell_width, lines * cell_height + 40), "white")
    draw, font = ImageDraw.Draw(sheet), _font(13)
    title = f"{len(found.rows)} pictures" + (f", the first {len(rows)} shown" if len(rows) < len(found.rows) else "")
    draw.text((20, 12), f"{title}. Blue: banner, cut off. Orange: scale bar.", fill="black", font=font)
    for index, row in enumerate(rows):
        left, top = (index % _COLUMNS) * cell_width + 20, (index // _COLUMNS) * cell_height + 40
        if row.thumbnail is not None:
            sheet.paste(Image.fromarray(row.thumbnail), (left, top))
        else:
            draw.rectangle((left, top, left + THUMBNAIL, top + 60), outline="#a33a00", width=2)
            draw.text((left + 10, top + 20), "not readable", fill="#a33a00", font=font)
        wrapped = [part for line in caption(row) for part in _wrapped(line, draw, font, THUMBNAIL + 12)]
        y = top + (THUMBNAIL if row.thumbnail is not None else 60) + 6
        for number, line in enumerate(wrapped[: _CAPTION_LINES + 1]):
            draw.text((left, y + number * _LINE), line, fill="black" if number == 0 else "#444444", font=font)
    stream = io.BytesIO()
    sheet.save(stream, "PNG")
    return stream.getvalue()


def _font(size: int):  # type: ignore[no-untyped-def]
    """DejaVu Sans, which matplotlib ships, so that µ and × are there on every machine."""
    from matplotlib import get_data_path
    from PIL import ImageFont

    return ImageFont.truetype(str(Path(get_data_path()) / "fonts" / "ttf" / "DejaVuSans.ttf"), size)


def _wrapped(line: str, draw, font, width: int) -> list[str]:  # type: ignore[no-untyped-def]
    parts, current = [], ""
    for character in line:
        if draw.textlength(current + character, font=font) > width:
            space = current.rfind(" ")
            head, current = (current[:space], current[space + 1 :]) if space > 10 else (current, "")
            parts.append(head)
        current += character
    return [*parts, current]
