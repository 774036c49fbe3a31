"""What a burnt-in scale bar covers: its stroke, its label and the plate behind them."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.intake.lettering import Box

#: A plate is this even (standard deviation on 0…1 of the picture's range), and at most this share of the picture.
EVEN, LARGEST = 0.03, 0.2


def covered(values: npt.NDArray[np.float32], stroke: Box, label: Box | None) -> tuple[tuple[int, int, int, int], ...]:
    """Boxes that the scale bar and its label cover in the picture.

    Parameters
    ----------
    values
        Grey values, banner cut off, on 0…1 of their own range.
    stroke
        The bar, ticks left out.
    label
        Its label, or None where it was not found.

    Returns
    -------
    tuple of (row0, column0, row1, column1)
        Half open, within the picture; one box where bar and label lie on one plate.
    """
    parts = [_widened(stroke, max(4, 2 * stroke.height))]
    if label is not None:
        parts.append(_widened(label, max(3, round(0.3 * label.height))))
    plate = _plate(values, stroke)
    if plate is not None:
        parts = [plate, *(p for p in parts if not _within(p, plate))]
    rows, columns = values.shape
    boxes = ((max(b.top, 0), max(b.left, 0), min(b.bottom, rows), min(b.right, columns)) for b in parts)
    return tuple(b for b in boxes if b[0] < b[2] and b[1] < b[3])


def _widened(box: Box, margin: int) -> Box:
    return Box(box.top - margin, box.bottom + margin, box.left - margin, box.right + margin)


def _within(box: Box, other: Box) -> bool:
    return box.top >= other.top and box.bottom <= other.bottom and box.left >= other.left and box.right <= other.right


def _plate(values: npt.NDArray[np.float32], stroke: Box) -> Box | None:
    """The even rectangle on which the stroke lies, with a pixel of margin for its blurred border; None where there is none."""
    lines = [r for r in (stroke.top - 3, stroke.bottom + 2) if 0 <= r < values.shape[0]]
    beside = values[lines, stroke.left : stroke.right]
    if beside.size == 0 or float(beside.std()) > EVEN:
        return None
    level = float(np.median(beside))
    like, _ = ndimage.label(np.abs(values - level) < 2.0 * EVEN)
    near = like[lines, stroke.left : stroke.right]
    number = int(np.bincount(near[near > 0]).argmax()) if (near > 0).any() else 0
    if number == 0:
        return None
    down, across = ndimage.find_objects(like, number)[number - 1]
    box = Box(down.start, down.stop, across.start, across.stop)
    if box.height * box.width > LARGEST * values.size:
        return None
    # a plate is a rectangle with some ink on it; a plain piece of the specimen is ragged
    inside = float((like[down, across] == number).mean())
    edges = np.concatenate([like[down.start, across], like[down.stop - 1, across]])
    if inside < 0.4 or float((edges == number).mean()) < 0.7:
        return None
    return _widened(box, 2)
