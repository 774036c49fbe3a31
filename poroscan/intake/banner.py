"""The data banner: the strip of text that many microscopes print under the picture.

A banner is a strip at the bottom, (1) mostly of one or two flat grey values, (2) set off from the picture by an edge over
its full width or by a line, (3) with letters in it, (4) none of whose marks runs on into the picture. A dark featureless
bottom of a picture has no letters, so it stays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.intake.lettering import Box, ink_boxes, letters, longest_line

#: Largest share of the picture's rows, and most rows, that a banner may take.
MAX_SHARE, MAX_ROWS = 0.3, 1200

_MIN_ROWS = 10
_TOLERANCE = (1.5 / 255, 14.0 / 255)
_MIN_LETTERS = 4
_FLAT = 0.45  # share of flat pixels in a row of dense text
_QUIET = 0.65  # share of flat pixels in the first rows of a banner
_EQUAL = 0.45  # share of neighbours in a row that are equal; noise leaves far fewer
_MAX_GAP = 6  # rows with few flat pixels that may interrupt a banner (rules, thick lines, JPEG rings)


@dataclass(frozen=True, eq=False)
class Strip:
    """The flat strip at the bottom of a picture.

    Parameters
    ----------
    levels
        Its one or two flat grey values, on 0…1 of the picture's own range; the first is the background.
    tolerance
        How far a flat pixel may lie from its level.
    flat
        Share of flat pixels in every row of the picture.
    ground
        Share of pixels of the background's level in every row.
    calm
        Share of neighbours in every row that are equal to one and a half grey steps of 255.
    """

    levels: tuple[float, ...]
    tolerance: float
    flat: npt.NDArray[np.float64]
    ground: npt.NDArray[np.float64]
    calm: npt.NDArray[np.float64]


def stretched(grey: npt.NDArray) -> npt.NDArray[np.float32]:
    """Grey values on 0…1 of their own minimum and maximum (zeros where they are all equal)."""
    low, high = float(grey.min()), float(grey.max())
    if high <= low:
        return np.zeros(grey.shape, np.float32)
    return ((grey - low) / (high - low)).astype(np.float32)


def find_banner(grey: npt.NDArray[np.float32]) -> int:
    """Rows of the data banner at the bottom of a picture; 0 where there is none.

    Parameters
    ----------
    grey
        2-D array of grey values on any linear scale.
    """
    rows, columns = grey.shape
    if rows < 3 * _MIN_ROWS or columns < 40:
        return 0
    deepest = min(rows - _MIN_ROWS, min(MAX_ROWS, max(int(MAX_SHARE * rows), 2 * _MIN_ROWS)))
    bottom = stretched(grey)[rows - deepest :]
    strip = _strip(bottom)
    start = _flat_from(strip.flat)
    for top in _edges(bottom, strip, start):
        if deepest - top >= _MIN_ROWS and _is_banner(bottom[top:], strip, closed=True):
            return deepest - top
    return _banner_without_edge(bottom, strip, start)


def _strip(bottom: npt.NDArray[np.float32]) -> Strip:
    """Levels of the flat strip, from the lowest rows."""
    lowest = bottom[-12:-1] if bottom.shape[0] > 12 else bottom
    background, tolerance = _level(lowest)
    rest = bottom[-_MIN_ROWS:]
    rest = rest[np.abs(rest - background) > 0.15]
    levels = [background]
    if rest.size > 0.02 * _MIN_ROWS * bottom.shape[1]:
        levels.append(_level(rest)[0])
    near = np.abs(bottom - background) <= tolerance
    ground = near.mean(axis=1)
    calm = (np.abs(np.diff(bottom, axis=1)) < 1.5 / 255).mean(axis=1)
    for level in levels[1:]:
        near |= np.abs(bottom - level) <= tolerance
    return Strip(tuple(levels), tolerance, near.mean(axis=1), ground, calm)


def _level(values: npt.NDArray[np.float32]) -> tuple[float, float]:
    """Most frequent grey value and the spread of the values near it."""
    counts = np.bincount(np.clip((values * 255 + 0.5).astype(np.int64), 0, 255).ravel(), minlength=256)
    smooth = np.convolve(counts, (0.5, 1.0, 0.5), mode="same")
    mode = float(np.argmax(smooth)) / 255
    near = values[np.abs(values - mode) <= _TOLERANCE[1]]
    if near.size == 0:
        return mode, _TOLERANCE[0]
    level = float(np.median(near))
    spread = float(np.quantile(np.abs(near - level), 0.8))
    return level, float(np.clip(2.0 * spread, *_TOLERANCE))


def _flat_from(flat: npt.NDArray[np.float64]) -> int:
    """Topmost row from which everything down to the bottom is flat, apart from short gaps."""
    start, gap = len(flat), 0
    for row in range(len(flat) - 1, -1, -1):
        if flat[row] >= _FLAT:
            start, gap = row, 0
        else:
            gap += 1
            if gap > max(_MAX_GAP, min(40, 0.6 * (len(flat) - start))):  # bold letters fill several rows
                break
    return start


def _edges(bottom: npt.NDArray[np.float32], strip: Strip, start: int) -> list[int]:
    """Rows at which a banner may begin, from the top: a quiet row under rows that are not flat, or a line."""
    last = len(strip.flat) - _MIN_ROWS
    edges = []
    for row in range(max(1, start - _MAX_GAP - 3), last + 1):
        if any(_jumps(share, row) for share in (strip.flat, strip.ground, strip.calm)) or _is_line(bottom, strip, row):
            edges.append(row)
    return edges


def _jumps(share: npt.NDArray[np.float64], row: int) -> bool:
    """Few flat pixels in the rows above (in more of them than a thick bar takes), many from this row on."""
    if share[row] < 0.5 or share[row - 1] >= share[row] - 0.2:
        return False
    above = max(float(np.median(share[max(0, row - 4) : row])), float(np.quantile(share[max(0, row - 24) : row], 0.75)))
    quiet = float(np.median(share[row : row + 4]))
    return quiet >= _QUIET and above <= quiet - 0.35


def _is_line(bottom: npt.NDArray[np.float32], strip: Strip, row: int) -> bool:
    """A line over the full width: one grey value that is neither the background's nor that of the row above."""
    values = bottom[row]
    level = float(np.median(values))
    if abs(level - strip.levels[0]) < 0.12 or float(np.mean(np.abs(values - level) <= 0.1)) < 0.93:
        return False
    return (
        float(np.mean(np.abs(bottom[row - 1] - level) > 0.1)) > 0.6 and strip.flat[row + 1 : row + 10].max() >= _QUIET
    )


def _is_banner(strip_values: npt.NDArray[np.float32], strip: Strip, *, closed: bool) -> bool:
    """Letters are there, and (where ``closed``) nothing but letters, lines and a logo lies in the strip."""
    rows = strip_values.shape[0]
    background = strip.levels[0]
    contrast = float(np.abs(strip_values - background).max())
    if contrast < 0.15 or float(np.median(strip.flat[-rows:])) < _FLAT or _equal(strip_values, strip) < _EQUAL:
        return False
    boxes = ink_boxes(np.abs(strip_values - background) > 0.5 * contrast)
    if longest_line(letters(boxes, rows=rows)) >= _MIN_LETTERS:
        return closed or not any(_foreign(b, rows) for b in boxes)
    return False


def _equal(values: npt.NDArray[np.float32], strip: Strip) -> float:
    """Share of neighbours of the background's level that are equal: drawn grey has no noise."""
    ground = np.abs(values - strip.levels[0]) <= strip.tolerance
    pairs = ground[:, 1:] & ground[:, :-1]
    count = int(np.count_nonzero(pairs))
    equal = np.abs(np.diff(values, axis=1)) < 0.5 / 255
    return float(np.count_nonzero(equal & pairs)) / count if count else 0.0


def _foreign(box: Box, rows: int) -> bool:
    """A mark that is no letter and no thin line: a piece of the picture."""
    line = box.height <= 4 or box.width <= 4
    return not line and (box.height > 0.8 * rows or (box.top == 0 and box.width > 6))


def _banner_without_edge(bottom: npt.NDArray[np.float32], strip: Strip, start: int) -> int:
    """A banner under a picture whose own bottom is just as flat: the lowest group of marks, if these are letters and lines.

    The group ends upwards where as many rows are empty as its letters are high; the banner begins as far above the group as
    the group ends above the bottom, at most half the empty rows.
    """
    values = bottom[start:]
    contrast = float(np.abs(values - strip.levels[0]).max()) if values.size else 0.0
    if values.shape[0] <= _MIN_ROWS or contrast < 0.3 or _equal(values[-_MIN_ROWS:], strip) < _EQUAL:
        return 0
    ink = np.abs(values - strip.levels[0]) > 0.5 * contrast
    text = letters(ink_boxes(ink), rows=values.shape[0])
    if not text:
        return 0
    gap = max(b.height for b in text[-_MIN_LETTERS:])
    filled = np.flatnonzero(ink.any(axis=1))
    breaks = np.flatnonzero(np.diff(filled) > gap)
    first = int(filled[breaks[-1] + 1]) if breaks.size else int(filled[0])
    empty = first - (int(filled[breaks[-1]]) + 1 if breaks.size else 0)
    top = first - min(max(2, values.shape[0] - 1 - int(filled[-1])), empty // 2 + 1)
    if top <= 0 and start > 0:
        return 0
    top = max(top, 0)
    group = ink_boxes(ink[top:])
    text = letters(group, rows=values.shape[0] - top)
    if longest_line(text) < _MIN_LETTERS or len(text) < max(2 * _MIN_LETTERS, 0.5 * len(group)):
        return 0
    return values.shape[0] - top if _is_banner(values[top:], strip, closed=False) else 0
