"""The scale bar: found on the banner or burnt into the picture, and measured between its outer ends.

A bar is a straight horizontal stroke of one grey value with background above and below. It may be plain, have ticks at its
ends, carry a ruler of ticks, or be broken in the middle by its label. Its ends are placed between pixels by the
share of its own grey in the pixels around them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from poroscan.intake.banner import stretched
from poroscan.intake.lettering import Box, ink_boxes

#: Standard uncertainty of a bar's length in pixels: each end is drawn on a whole pixel (JCGM 100:2008, 4.3.7).
LENGTH_SD = float(np.sqrt(2 / 12))

_LEAST_LENGTH = 0.02  # of the picture's width
_LEAST_IN_PICTURE = 0.035  # likewise, for bars that do not lie on a banner
_MOST_LENGTH = 0.98
_EVEN = 0.06  # standard deviation of the grey along a drawn stroke
_MOST_THICKNESS = 0.25  # of the bar's length
_SHARES = (0.5, 0.75, 0.3)  # of the strip's contrast at which strokes are cut out


@dataclass(frozen=True)
class ScaleBar:
    """One stroke that may be the scale bar.

    Parameters
    ----------
    length
        Pixels between the outer ends.
    box
        Where it lies, ticks left out.
    kind
        ``plain``, ``ticks``, ``ruler``, ``broken`` or ``dots``.
    gap
        Columns of the gap that a label breaks into the bar, or None.
    level
        Its grey value on 0…1 of the picture's own range.
    score
        How much speaks for it; more is better.
    tick
        Width of the ticks at its ends in pixels; 0 where there are none.
    """

    length: float
    box: Box
    kind: str
    level: float
    gap: tuple[int, int] | None = None
    score: float = 0.0
    tick: int = 0

    @property
    def length_sd(self) -> float:
        """Standard uncertainty of the length in pixels. Ticks leave open whether their outer sides or their middles count;
        their width enters as the half-width of a rectangular distribution."""
        return float(np.hypot(LENGTH_SD, self.tick / np.sqrt(3)))


def find_scale_bars(grey: npt.NDArray[np.float32], *, banner_rows: int, most: int = 6) -> list[ScaleBar]:
    """Strokes that may be the scale bar, the likeliest first.

    Parameters
    ----------
    grey
        The whole picture, banner included.
    banner_rows
        Rows of the banner at its bottom; bars on it are preferred to bars in the picture.
    most
        How many are returned at most.

    Returns
    -------
    list of ScaleBar
        Boxes count rows and columns of the whole picture.
    """
    values = stretched(grey)
    top = values.shape[0] - banner_rows
    found: list[ScaleBar] = []
    if banner_rows:
        found = [_moved(bar, top) for bar in _on_strip(values[top:])]
    if not found:
        found = _in_picture(values[:top])
    return sorted(_distinct(found), key=lambda bar: -bar.score)[:most]


def _moved(bar: ScaleBar, rows: int) -> ScaleBar:
    return replace(bar, box=bar.box.moved(rows, 0))


def _distinct(bars: list[ScaleBar]) -> list[ScaleBar]:
    """Without the halves and doubles of better ones."""
    kept: list[ScaleBar] = []
    for bar in sorted(bars, key=lambda b: -b.score):
        if not any(_overlap(bar.box, other.box) for other in kept):
            kept.append(bar)
    return kept


def _overlap(a: Box, b: Box) -> bool:
    rows = min(a.bottom, b.bottom) - max(a.top, b.top)
    return rows > 0 and min(a.right, b.right) - max(a.left, b.left) > 0.5 * min(a.width, b.width)


def _on_strip(strip: npt.NDArray[np.float32]) -> list[ScaleBar]:
    background = float(np.median(strip))
    bars: list[ScaleBar] = []
    for sign in (1.0, -1.0):
        contrast = float((sign * (strip - background)).max())
        if contrast < 0.15:
            continue
        for share in _SHARES:
            ink = sign * (strip - background) > share * contrast
            bars += [replace(bar, score=bar.score + share) for bar in _bars(strip, ink, strip.shape)]
        bars += _dotted(strip, sign * (strip - background) > 0.5 * contrast)
    return bars


def _in_picture(values: npt.NDArray[np.float32]) -> list[ScaleBar]:
    bars: list[ScaleBar] = []
    for ink in (values >= 0.9, values <= 0.08, values >= 0.75, values <= 0.16):
        bars += _bars(values, ink, values.shape)
    return [bar for bar in bars if bar.box.width >= _LEAST_IN_PICTURE * values.shape[1] and _is_drawn(values, bar)]


def _is_drawn(values: npt.NDArray[np.float32], bar: ScaleBar) -> bool:
    """One even grey along the stroke, and another one above and below: what a specimen hardly ever shows."""
    box, pieces = bar.box, [(bar.box.left, bar.box.right)]
    if bar.gap is not None:
        pieces = [(box.left, bar.gap[0]), (bar.gap[1], box.right)]
    for left, right in pieces:
        inner = slice(left + 2, right - 2)
        if values[(box.top + box.bottom - 1) // 2, inner].std() > _EVEN:
            return False
        if bar.kind in ("ticks", "ruler", "broken"):
            inner = slice(left + 8, max(left + 9, right - 8))
        outside = [values[row, inner] for row in (box.top - 3, box.bottom + 2) if 0 <= row < values.shape[0]]
        if len(outside) < 2 or min(float(np.mean(np.abs(o - bar.level) > 0.2)) for o in outside) < 0.7:
            return False
    return True


def _bars(values: npt.NDArray[np.float32], ink: npt.NDArray[np.bool_], shape: tuple[int, ...]) -> list[ScaleBar]:
    strokes = _free(ink, _strokes(ink))
    whole = [s for s in strokes if s.width >= max(15, _LEAST_LENGTH * shape[1]) and not _is_rule(ink, s)]
    whole = [s for s in whole if not _in_frame(ink, s, strokes) and not _is_letter(ink, s)]
    bars = [_measured(values, ink, s) for s in whole]
    for left, right in _halves(strokes, ink):
        bars.append(_broken(values, ink, left, right))
    return [b for b in bars if b.length <= _MOST_LENGTH * shape[1] and b.level >= 0]


def _strokes(ink: npt.NDArray[np.bool_]) -> list[Box]:
    """Rectangles of ink: runs of one row after the other with the same ends to two pixels."""
    boxes = []
    before: dict[int, list[int]] = {}  # strokes that reach the row above, by their left end
    now: dict[int, list[int]] = {}
    current = -1
    for row, start, end in _runs(ink, least=max(8, int(0.008 * ink.shape[1]))):
        if row != current:
            before, now, current = now if row == current + 1 else {}, {}, row
        # Runs of a row are more than eight columns apart, so that at most one stroke is near.
        for left in range(start - 2, start + 3):
            if left in before and -2 <= before[left][3] - end <= 2:
                now[left] = before[left]
                now[left][1] = row + 1
                break
        else:
            now[start] = [row, row + 1, start, end]
            boxes.append(now[start])
    found = [Box(*b) for b in boxes]
    return [b for b in found if b.height <= max(2, _MOST_THICKNESS * b.width)]


def _runs(ink: npt.NDArray[np.bool_], *, least: int) -> Iterator[tuple[int, int, int]]:
    """Row, first column and column after the last of every horizontal run of at least so many pixels, in reading order."""
    padded = np.zeros((ink.shape[0], ink.shape[1] + 1), dtype=bool)
    padded[:, :-1] = ink
    flat = padded.ravel()  # the column of background keeps the rows apart
    changes = np.flatnonzero(flat[1:] != flat[:-1]) + 1
    if flat.size and flat[0]:
        changes = np.concatenate([[0], changes])
    starts, ends = changes[::2], changes[1::2]
    long = ends - starts >= least
    rows, columns = np.divmod(starts[long], padded.shape[1])
    return zip(rows.tolist(), columns.tolist(), (columns + (ends - starts)[long]).tolist(), strict=True)


def _free(ink: npt.NDArray[np.bool_], strokes: list[Box]) -> list[Box]:
    """Those with background above and below, apart from ticks, that do not touch the picture's sides."""
    rows, columns = ink.shape
    inner = [s for s in strokes if s.left > 0 and s.right < columns]
    if not inner:
        return []
    sums = np.zeros((rows, columns + 1), dtype=np.int32)
    np.cumsum(ink, axis=1, out=sums[:, 1:])
    top, bottom, left, right = np.array([(s.top, s.bottom, s.left, s.right) for s in inner]).T
    free = np.ones(len(inner), dtype=bool)
    for row in (top - 2, bottom + 1):
        near = np.clip(row, 0, rows - 1)
        share = (sums[near, right - 1] - sums[near, left + 1]) / np.maximum(right - left - 2, 1)
        free &= (row != near) | (share <= 0.35)
    return [s for s, kept in zip(inner, free.tolist(), strict=True) if kept]


def _reach(ink: npt.NDArray[np.bool_], s: Box, column: int) -> int:
    """Rows of the unbroken ink through the stroke near a column (the height of a tick)."""
    best = 0
    for c in range(max(0, column - 2), min(ink.shape[1], column + 3)):
        up, down = s.top, s.bottom
        while up > 0 and ink[up - 1, c]:
            up -= 1
        while down < ink.shape[0] and ink[down, c]:
            down += 1
        best = max(best, down - up)
    return best


def _is_rule(ink: npt.NDArray[np.bool_], s: Box) -> bool:
    """A line between the cells of a table: an end stands on a line that runs through the strip."""
    most = 0.85 * ink.shape[0]
    return ink.shape[0] > 8 and (_reach(ink, s, s.left) >= most or _reach(ink, s, s.right - 1) >= most)


def _is_letter(ink: npt.NDArray[np.bool_], s: Box) -> bool:
    """A stroke of a wide letter: what stands on its end is as high as the stroke is long."""
    return max(_reach(ink, s, s.left), _reach(ink, s, s.right - 1)) > max(0.5 * s.width, s.height)


def _in_frame(ink: npt.NDArray[np.bool_], s: Box, strokes: list[Box]) -> bool:
    """A side of a rectangle: another stroke with the same ends, joined to this one at both."""
    for other in strokes:
        if other is s or abs(other.left - s.left) > 2 or abs(other.right - s.right) > 2:
            continue
        height = max(other.bottom, s.bottom) - min(other.top, s.top)
        if _reach(ink, s, s.left) >= height - 2 and _reach(ink, s, s.right - 1) >= height - 2:
            return True
    return False


def _halves(strokes: list[Box], ink: npt.NDArray[np.bool_]) -> list[tuple[Box, Box]]:
    """Pairs of strokes on one line with letters between them."""
    pairs = []
    for i, a in enumerate(strokes):
        for b in strokes[i + 1 :]:
            left, right = (a, b) if a.left < b.left else (b, a)
            gap = right.left - left.right
            if abs(a.top - b.top) > 1 or abs(a.bottom - b.bottom) > 1 or not 6 <= gap <= 3 * (a.width + b.width):
                continue
            if not 0.4 <= a.width / b.width <= 2.5 or a.width < 10 or b.width < 10:
                continue
            if _letters_between(ink, left, right):
                pairs.append((left, right))
    return pairs


def _letters_between(ink: npt.NDArray[np.bool_], left: Box, right: Box) -> bool:
    """Ink in the gap that is lower than each half is long, and no other line in the gap's place."""
    between = np.asarray(ink[max(0, left.top - 60) : left.bottom + 60, left.right + 1 : right.left - 1])
    middle = left.top - max(0, left.top - 60)
    filled = np.asarray(between.any(axis=1))
    if not between.size or not filled[max(0, middle - 6) : middle + 6].any():
        return False
    top = bottom = middle
    while top > 0 and filled[max(0, top - 3) : top].any():  # the dots of an i leave gaps of two rows
        top -= 1
    while bottom < len(filled) and filled[bottom : bottom + 3].any():
        bottom += 1
    height = bottom - top
    return 5 <= height <= 1.3 * min(left.width, right.width) and 0.03 <= float(between[top:bottom].mean()) <= 0.75


def _measured(values: npt.NDArray[np.float32], ink: npt.NDArray[np.bool_], s: Box) -> ScaleBar:
    level, length = _length(values, s.top, s.bottom, s.left, s.right)
    kind = _kind(ink, s)
    tick = _tick_width(ink, s) if kind != "plain" else 0
    score = {"plain": 1.0, "ticks": 2.5, "ruler": 2.5}[kind] + _shape_score(s, ink.shape[1])
    if kind == "plain" and min(_reach(ink, s, c) for c in (s.left + 1, s.right - 2)) > s.height + 3:
        score -= 1.0  # ends that run on up or down: the margin of a box, or a letter
    return ScaleBar(length, s, kind, level, score=score, tick=tick)


def _broken(values: npt.NDArray[np.float32], ink: npt.NDArray[np.bool_], left: Box, right: Box) -> ScaleBar:
    box = Box(min(left.top, right.top), max(left.bottom, right.bottom), left.left, right.right)
    level, length = _length(values, box.top, box.bottom, box.left, box.right)
    balanced = 1.0 - abs(left.width - right.width) / (left.width + right.width)
    score = 2.5 + balanced + _shape_score(box, ink.shape[1])
    return ScaleBar(length, box, "broken", level, gap=(left.right, right.left), score=score, tick=_tick_width(ink, box))


def _shape_score(s: Box, columns: int) -> float:
    share = s.width / columns
    return min(share, 0.3) + (0.5 if 0.05 <= share <= 0.6 else 0.0) + (0.3 if s.height <= 0.1 * s.width else 0.0)


def _kind(ink: npt.NDArray[np.bool_], s: Box) -> str:
    """Whether ticks stand at the ends, or along the stroke as on a ruler."""
    ends = [_reach(ink, s, c) for c in (s.left, s.right - 1)]
    if _tick_width(ink, s) > 6:
        return "plain"
    least = max(s.height + 3, 1.5 * s.height)
    if min(ends) < least or max(ends) > 2.0 * min(ends):
        return "plain"
    for row in (s.top - 3, s.bottom + 2):
        if 0 <= row < ink.shape[0]:
            ticks = int(np.count_nonzero(np.diff(ink[row, s.left : s.right].astype(np.int8)) == 1))
            if ticks >= 3:
                return "ruler"
    return "ticks"


def _tick_width(ink: npt.NDArray[np.bool_], s: Box) -> int:
    """Columns of the left tick just above or below the stroke; 0 where none stands there."""
    widths = []
    for row in (s.top - 2, s.bottom + 1):
        if 0 <= row < ink.shape[0]:
            near = ink[row, s.left : s.left + 12]
            widths.append((len(near) if near.all() else int(np.argmin(near))) if near[:2].any() else 0)
    return max(widths, default=0)


def _length(values: npt.NDArray[np.float32], top: int, bottom: int, left: int, right: int) -> tuple[float, float]:
    """Grey value of a stroke and the distance of its ends; the level is −1 where an end cannot be placed."""
    profile = values[top:bottom].mean(axis=0)
    ends = []
    inside = min(6, max(1, (right - left) // 3))
    for edge, step in ((left, -1), (right - 1, 1)):
        inner = float(np.median(profile[edge - step * np.arange(inside)]))
        outer_columns = edge + step * np.arange(2, 5)
        outer_columns = outer_columns[(outer_columns >= 0) & (outer_columns < len(profile))]
        if outer_columns.size == 0:
            return -1.0, 0.0
        outer = float(np.median(profile[outer_columns]))
        ends.append(_end(profile, edge, step, inner, outer))
    level = float(np.median(profile[left : left + inside]))
    return level, abs(ends[1] - ends[0])


def _end(profile: npt.NDArray[np.float32], edge: int, step: int, inner: float, outer: float) -> float:
    """Where a bar ends, in columns counted from the left side of pixel 0.

    The share of the bar's grey, summed over three pixels on either side: exact for an end sampled by area, and unmoved by a
    symmetric blur.
    """
    if inner == outer:
        return edge + 0.5 + 0.5 * step
    columns = edge + step * np.arange(-2, 4)
    columns = columns[(columns >= 0) & (columns < len(profile))]
    share = np.clip((profile[columns] - outer) / (inner - outer), -0.3, 1.3)
    start = edge - 2 * step + 0.5 - 0.5 * step
    return float(start + step * share.sum())


def _dotted(strip: npt.NDArray[np.float32], ink: npt.NDArray[np.bool_]) -> list[ScaleBar]:
    """Rows of at least six equal dots or ticks at equal distances; such a ruler counts from the first to the last one."""
    boxes = [b for b in ink_boxes(ink) if b.width <= 8 and b.height <= 0.5 * ink.shape[0]]
    by_middle: dict[int, list[Box]] = {}
    for b in boxes:
        by_middle.setdefault(b.bottom, []).append(b)
    bars = []
    for row in by_middle.values():
        if len(row) < 6:
            continue
        centres = np.array([(b.left + b.right) / 2 for b in row])
        spacing = np.diff(centres)
        if spacing.min() >= 4 and np.ptp(spacing) <= 2.01:
            box = Box(min(b.top for b in row), row[0].bottom, row[0].left, row[-1].right)
            level = float(np.median(strip[box.top : box.bottom][ink[box.top : box.bottom]]))
            bars.append(ScaleBar(float(centres[-1] - centres[0]), box, "dots", level, score=2.5))
    return bars
