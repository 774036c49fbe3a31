"""Where the label of a scale bar may stand: lines of letters around the bar, the likeliest first."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from poroscan.intake.banner import stretched
from poroscan.intake.lettering import Box, ink_boxes, letters, text_lines
from poroscan.intake.scale_bar import ScaleBar

#: How far the grey of letters may lie from the bar's; the strict values part letters from a textured ground.
_LETTER_TOLERANCES = (0.35, 0.2, 0.1)

#: Widest gap within a label, in heights: between letters, and between number and unit where these stand far apart.
_LETTER_GAPS = (1.0, 1.8)


def label_boxes(grey: npt.NDArray[np.float32], bar: ScaleBar, *, banner_rows: int) -> list[Box]:
    """Lines of letters around a bar, the nearest first.

    Parameters
    ----------
    grey
        The whole picture, banner included.
    bar
        From ``find_scale_bars``.
    banner_rows
        Rows of the banner at its bottom.
    """
    values = stretched(grey)
    rows, columns = values.shape
    on_banner = banner_rows and bar.box.top >= rows - banner_rows
    reach = banner_rows if on_banner else max(60, min(160, int(0.1 * rows)))
    first, last = (rows - banner_rows, rows) if on_banner else (0, rows - banner_rows)
    top, bottom = max(first, bar.box.top - reach), min(last, bar.box.bottom + reach)
    left, right = max(0, bar.box.left - reach - 40), min(columns, bar.box.right + 3 * reach)
    window = values[top:bottom, left:right]
    lines = _lines(window, bar, Box(top, bottom, left, right))
    moved = [line.moved(top, left) for line in lines if left == 0 or line.left > 1.3 * line.height]  # else perhaps cut
    return sorted(moved, key=lambda line: (_group_distance(line, moved, bar), -line.width))


def is_piece(line: Box, lines: list[Box]) -> bool:
    """True where more letters stand to the left on the same line, so that ``50 µm`` may be the end of ``2.50 µm``."""
    for other in lines:
        rows = min(line.bottom, other.bottom) - max(line.top, other.top)
        starts_before = other.left < line.left - 0.3 * line.height and other.right > line.left - 1.3 * line.height
        if starts_before and rows >= 0.5 * min(line.height, other.height):
            return True
    return False


def _group_distance(line: Box, lines: list[Box], bar: ScaleBar) -> float:
    """Distance of the nearest line that shares letters with this one, so that a whole label is tried before its pieces."""
    shared = [
        other
        for other in lines
        if min(line.right, other.right) > max(line.left, other.left)
        and min(line.bottom, other.bottom) - max(line.top, other.top) >= 0.5 * min(line.height, other.height)
    ]
    return min(_distance(other, bar) for other in shared)


def _lines(window: npt.NDArray[np.float32], bar: ScaleBar, frame: Box) -> list[Box]:
    """Lines of letters in a window, about as bright as the bar."""
    stroke = bar.box.moved(-frame.top, -frame.left)
    lines: list[Box] = []
    for tolerance in _LETTER_TOLERANCES:
        boxes = letters(ink_boxes(np.abs(window - bar.level) <= tolerance), rows=window.shape[0] + 40)
        boxes = [b for b in boxes if not _is_part(b, stroke, bar.gap is not None)]
        for gap in _LETTER_GAPS:
            joined = text_lines(boxes, gap=gap)
            lines += [line for line in joined if not any(_same(line, known) for known in lines)]
    return lines


def _same(a: Box, b: Box) -> bool:
    """Equal to two pixels on every side."""
    return max(abs(a.top - b.top), abs(a.bottom - b.bottom), abs(a.left - b.left), abs(a.right - b.right)) <= 2


def _is_part(box: Box, stroke: Box, broken: bool) -> bool:
    """A piece of the bar itself: its halves, its ticks."""
    meets = box.top < stroke.bottom + 1 and box.bottom > stroke.top - 1
    if not meets or box.right < stroke.left - 1 or box.left > stroke.right + 1:
        return False
    return not broken or box.left <= stroke.left + 2 or box.right >= stroke.right - 2 or box.width > 3 * box.height


def _distance(line: Box, bar: ScaleBar) -> float:
    """How far a line of letters lies from a bar; 0 in the gap of a broken one."""
    if bar.gap is not None and line.left >= bar.gap[0] - 2 and line.right <= bar.gap[1] + 2:
        return 0.0
    down = max(bar.box.top - line.bottom, line.top - bar.box.bottom, 0)
    aside = max(bar.box.left - line.right, line.left - bar.box.right, 0)
    middle = abs((line.left + line.right) / 2 - (bar.box.left + bar.box.right) / 2) / max(bar.box.width, 1)
    return 1.0 + down + 1.5 * aside + 3.0 * middle
