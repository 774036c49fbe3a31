"""Lines of letters in a flat strip or around a scale bar: where they are, not what they say."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import ndimage

#: Heights of letters in pixels that are looked for.
LETTER_HEIGHTS = (5, 90)


@dataclass(frozen=True)
class Box:
    """Rows ``top`` to ``bottom`` and columns ``left`` to ``right``, ends excluded."""

    top: int
    bottom: int
    left: int
    right: int

    @property
    def height(self) -> int:
        """Rows."""
        return self.bottom - self.top

    @property
    def width(self) -> int:
        """Columns."""
        return self.right - self.left

    def moved(self, rows: int, columns: int) -> Box:
        """The box further down and to the right."""
        return Box(self.top + rows, self.bottom + rows, self.left + columns, self.right + columns)


def ink_boxes(ink: npt.NDArray[np.bool_]) -> list[Box]:
    """Bounding boxes of the 8-connected pieces of a mask, from left to right."""
    labels, _ = ndimage.label(ink, structure=np.ones((3, 3), dtype=bool))
    boxes = [Box(r.start, r.stop, c.start, c.stop) for r, c in ndimage.find_objects(labels)]
    return sorted(boxes, key=lambda b: (b.left, b.top))


def letters(boxes: list[Box], *, rows: int) -> list[Box]:
    """Boxes that may be letters: neither specks, nor lines, nor as high as the strip of ``rows`` rows."""
    low, high = LETTER_HEIGHTS
    return [b for b in boxes if low <= b.height <= min(high, 0.9 * rows) and 0.08 * b.height <= b.width <= 4 * b.height]


def text_lines(boxes: list[Box], *, gap: float) -> list[Box]:
    """Letters joined to lines: side by side and of similar height.

    Parameters
    ----------
    boxes
        Letters, from left to right.
    gap
        Widest gap within a line, in heights of its letters.

    Returns
    -------
    list of Box
        One box per line, in the order of their left ends.
    """
    lines: list[Box] = []
    for box in boxes:
        for index in range(len(lines) - 1, -1, -1):
            if _continues(lines[index], box, gap):
                lines[index] = _joined(lines[index], box)
                break
        else:
            lines.append(box)
    return lines


def _continues(line: Box, box: Box, gap: float) -> bool:
    height = max(line.height, box.height)
    overlap = min(line.bottom, box.bottom) - max(line.top, box.top)
    return (
        box.left - line.right <= gap * height
        and overlap >= 0.5 * min(line.height, box.height)
        and (height <= 2.2 * min(line.height, box.height))
    )


def _joined(a: Box, b: Box) -> Box:
    return Box(min(a.top, b.top), max(a.bottom, b.bottom), min(a.left, b.left), max(a.right, b.right))


def longest_line(boxes: list[Box]) -> int:
    """Largest number of letters that stand side by side on one line with similar heights."""
    best = 0
    for seed in boxes:
        middle = (seed.top + seed.bottom) / 2
        near = [
            b
            for b in boxes
            if abs((b.top + b.bottom) / 2 - middle) <= 0.4 * seed.height and 0.55 <= b.height / seed.height <= 1.8
        ]
        best = max(best, _side_by_side(near))
    return best


def _side_by_side(boxes: list[Box]) -> int:
    count, right = 0, -1
    for box in sorted(boxes, key=lambda b: b.left):
        if box.left >= right - 1:
            count, right = count + 1, box.right
    return count
