"""A page of thumbnails: every particle of an atlas over its formulation, and by regime; it stands alone and opens without a network."""

from __future__ import annotations

import base64
import html
import io

import numpy as np
import numpy.typing as npt
from PIL import Image

from poroscan.atlas.space import AXES, NAMES
from poroscan.atlas.store import Atlas
from poroscan.demix.regime import REGIME_WORDS, REGIMES

_SIDE = 56
_COLUMNS, _ROWS = 20, 13
#: Maps drawn: horizontal and vertical axis.
_MAPS = (("polymer", "chi_sn"), ("polymer", "chi_pn"), ("bath_solvent", "chi_sn"))
#: Colours that stay apart for readers with colour-vision deficiency (Wong 2011).
COLOURS = {
    "undemixed": "#7f7f7f", "delayed": "#0072b2", "lean_nucleation": "#009e73", "spinodal": "#e69f00",
    "rich_nucleation": "#cc79a7",
}  # fmt: skip

_STYLE = """
body{font:15px/1.5 system-ui,sans-serif;margin:2rem auto;max-width:1220px;padding:0 1rem;color:#1b1b1b;background:#fff}
h1{font-size:1.5rem}h2{font-size:1.1rem;margin-top:2.2rem}svg{width:100%;height:auto}
.key span{display:inline-block;margin-right:1.2rem}.key i{display:inline-block;width:.8em;height:.8em;margin-right:.4em}
.note{color:#555}text{font:13px system-ui,sans-serif;fill:#333}
"""


def page(atlas: Atlas) -> str:
    """The page as HTML."""
    counts = atlas.counts()
    key = "".join(
        f'<span><i style="background:{COLOURS[r]}"></i>{html.escape(REGIME_WORDS[r])} ({counts[r]})</span>'
        for r in REGIMES
    )
    pictures = "".join(_symbol(atlas, i) for i in range(len(atlas.runs)))
    known = [i for i in range(len(atlas.runs)) if np.isfinite(atlas.runs.parameters[i]).all()]
    maps = "".join(_map(atlas, known, x, y) for x, y in _MAPS) if known else ""
    galleries = "".join(_gallery(atlas, r) for r in REGIMES)
    return (
        '<!doctype html><html lang="en"><head><meta charset="utf-8"><title>Atlas of simulated particles</title>'
        f"<style>{_STYLE}</style></head><body><h1>Atlas of simulated particles</h1>"
        f'<p>{len(atlas.runs)} particles. Polymer is bright. Point at a picture for its formulation.</p><p class="key">{key}</p>'
        f'<svg style="position:absolute;width:0;height:0" aria-hidden="true"><defs>{pictures}</defs></svg>'
        f'{maps}{galleries}<p class="note">A regime is an inference from simulations with stated assumptions, not a measurement.</p>'
        "</body></html>"
    )


def thumbnail(field: npt.NDArray[np.floating], *, side: int = 64) -> bytes:
    """A field (its middle plane, where it is a volume) as WebP of ``side`` pixels, polymer bright."""
    plane = field if field.ndim == 2 else field[field.shape[0] // 2]
    longest = max(plane.shape)
    square = np.zeros((longest, longest), dtype=np.float32)
    top, left = ((longest - n) // 2 for n in plane.shape)
    square[top : top + plane.shape[0], left : left + plane.shape[1]] = plane
    picture = Image.fromarray((np.clip(square, 0, 1) * 255).astype(np.uint8)).resize((side, side), Image.Resampling.BOX)
    sink = io.BytesIO()
    picture.save(sink, "WEBP", quality=60)
    return sink.getvalue()


def _symbol(atlas: Atlas, index: int) -> str:
    data = base64.b64encode(thumbnail(atlas.run(atlas.runs.name[index]).field)).decode()
    return (
        f'<symbol id="p{index}" viewBox="0 0 64 64"><image href="data:image/webp;base64,{data}" width="64" height="64"/>'
        f'<rect x="1.5" y="1.5" width="61" height="61" fill="none" stroke="{COLOURS[atlas.runs.regime[index]]}" '
        'stroke-width="3"/></symbol>'
    )


def _use(atlas: Atlas, index: int, x: float, y: float) -> str:
    return (
        f'<use href="#p{index}" x="{x:.0f}" y="{y:.0f}" width="{_SIDE}" height="{_SIDE}">'
        f"<title>{html.escape(_words(atlas, index))}</title></use>"
    )


def _words(atlas: Atlas, index: int) -> str:
    values = atlas.runs.parameters[index]
    listed = [f"{a.label} {v:.3g}" for a, v in zip(AXES, values, strict=True) if np.isfinite(v)]
    return "\n".join([f"{atlas.runs.name[index]}: {REGIME_WORDS[atlas.runs.regime[index]]}", *listed])


def _map(atlas: Atlas, known: list[int], x_name: str, y_name: str) -> str:
    """Thumbnails at their place over two axes, each moved to the nearest free cell; those without a free one near are left out."""
    x_axis, y_axis = (AXES[NAMES.index(n)] for n in (x_name, y_name))
    free = np.ones((_ROWS, _COLUMNS), dtype=bool)
    rows, columns = np.indices(free.shape)
    drawn = []
    for i in known:
        values = atlas.runs.parameters[i]
        x = np.clip(x_axis.share(values[NAMES.index(x_name)]), 0, 1) * (_COLUMNS - 1)
        y = (1 - np.clip(y_axis.share(values[NAMES.index(y_name)]), 0, 1)) * (_ROWS - 1)
        gap = np.where(free, np.hypot(rows - y, columns - x), np.inf)
        row, column = divmod(int(gap.argmin()), _COLUMNS)
        if gap[row, column] > 1.5:
            continue
        free[row, column] = False
        drawn.append(_use(atlas, i, 40 + column * _SIDE, row * _SIDE))
    width, height = 40 + _COLUMNS * _SIDE, _ROWS * _SIDE + 40
    ends = (
        f'<text x="40" y="{height - 22}">{x_axis.low:g}</text><text x="{width}" y="{height - 22}" text-anchor="end">{x_axis.high:g}</text>'
        f'<text x="{40 + (width - 40) / 2}" y="{height - 22}" text-anchor="middle">{html.escape(x_axis.label)}</text>'
        f'<text x="34" y="{_ROWS * _SIDE}" text-anchor="end">{y_axis.low:g}</text><text x="34" y="14" text-anchor="end">{y_axis.high:g}</text>'
    )
    title = html.escape(f"{y_axis.label} (upwards) over {x_axis.label} (to the right)")
    note = f"{len(drawn)} of {len(known)} particles find a free place within one and a half cells of their own; the other axes vary."
    return f'<h2>{title}</h2><p class="note">{note}</p><svg viewBox="0 0 {width} {height}">{"".join(drawn)}{ends}</svg>'


def _gallery(atlas: Atlas, regime: str) -> str:
    mine = [i for i, r in enumerate(atlas.runs.regime) if r == regime]
    if not mine:
        return ""
    per_row = 20
    uses = "".join(_use(atlas, i, (k % per_row) * _SIDE, (k // per_row) * _SIDE) for k, i in enumerate(mine))
    height = -(-len(mine) // per_row) * _SIDE
    return f'<h2>{html.escape(REGIME_WORDS[regime])}</h2><svg viewBox="0 0 {per_row * _SIDE} {height}">{uses}</svg>'
