"""Scale bar and label together: one candidate for the pixel size."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from poroscan.errors import MissingExtraError
from poroscan.intake import ocr
from poroscan.intake.banner import stretched
from poroscan.intake.label_place import is_piece, label_boxes
from poroscan.intake.lettering import Box
from poroscan.intake.pixel_size import Candidate
from poroscan.intake.scale_bar import ScaleBar, find_scale_bars
from poroscan.intake.scale_label import parse_label, plausible

#: Letters lower than this are not read with certainty.
LEAST_LETTER_HEIGHT = 14

_LEAST_CONFIDENCE = 0.5
_MOST_LINES = 8  # read around one bar
_MOST_READS = 16  # read in one picture, at some 30 ms each


@dataclass(frozen=True)
class BarReading:
    """What a scale bar says.

    Parameters
    ----------
    bar
        The bar, or None where none was found.
    um
        Length that its label states, or None where it was not read.
    label
        The label as read.
    candidate
        Pixel size from it, or None.
    flags, notes
        ``scale_label_unread`` where a bar was found without a length; words for people.
    label_box
        Where the label stands, or None where it was not read.
    """

    bar: ScaleBar | None = None
    um: float | None = None
    label: str = ""
    candidate: Candidate | None = None
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    label_box: Box | None = None


def read_scale_bar(
    grey: npt.NDArray[np.float32], *, banner_rows: int, stated_um: float | None = None, use_ocr: bool = True
) -> BarReading:
    """Find the scale bar, measure it, and read its label.

    Parameters
    ----------
    grey
        The whole picture, banner included.
    banner_rows
        Rows of the banner at its bottom.
    stated_um
        Length that the bar stands for, where the user says so; a label that says the same tells which stroke is the bar.
    use_ocr
        Whether the label is read.
    """
    bars = find_scale_bars(grey, banner_rows=banner_rows)
    if not bars:
        return BarReading()
    found = _read_labels(stretched(grey), bars, banner_rows) if use_ocr and ocr.available() else {}
    if stated_um is not None:
        labelled = next(
            (bar for bar in bars if bar in found and math.isclose(found[bar][0], stated_um, rel_tol=0.02)), None
        )
        return _reading(labelled or bars[0], stated_um, "", doubtful=False)
    for bar, (um, text, box) in found.items():
        return replace(_reading(bar, um, text, doubtful=box.height < LEAST_LETTER_HEIGHT), label_box=box)
    bar = bars[0]
    note = f"a scale bar of {bar.length:.1f} pixels was found, but its label was not read"
    return BarReading(bar, flags=("scale_label_unread",), notes=(note,))


def _read_labels(
    values: npt.NDArray[np.float32], bars: list[ScaleBar], banner_rows: int
) -> dict[ScaleBar, tuple[float, str, Box]]:
    """Labels by bar, the likeliest bar first: length, text, place. Reading ends at the first label."""
    reads = 0
    for bar in bars:
        boxes = _possible_labels(values, bar, banner_rows)[: max(0, _MOST_READS - reads)]
        reads += len(boxes)
        found = _label_of(values, bar, boxes)
        if found is not None:
            return {bar: found}
    return {}


def _possible_labels(values: npt.NDArray[np.float32], bar: ScaleBar, banner_rows: int) -> list[Box]:
    """Lines of letters that may be the label of a bar: whole lines, and in the gap of a broken bar only what stands there."""
    lines = boxes = label_boxes(values, bar, banner_rows=banner_rows)
    if bar.gap is not None:  # what breaks the bar is its label, or it is no bar
        boxes = [b for b in boxes if b.left >= bar.gap[0] - 2 and b.right <= bar.gap[1] + 2]
    return [b for b in boxes if b.width >= b.height and not is_piece(b, lines)][:_MOST_LINES]


def _label_of(values: npt.NDArray[np.float32], bar: ScaleBar, boxes: list[Box]) -> tuple[float, str, Box] | None:
    for box in boxes:
        try:
            text, confidence = ocr.read_line(_crop(values, box, bar))
        except MissingExtraError:
            return None
        um = parse_label(text)
        if um is not None and confidence >= _LEAST_CONFIDENCE and plausible(um):
            return um, text.strip(), box
    return None


def _crop(values: npt.NDArray[np.float32], box: Box, bar: ScaleBar) -> npt.NDArray[np.float32]:
    """A line of letters with a margin, without the halves of a broken bar."""
    margin = max(3, round(0.3 * box.height))
    left, right = box.left - margin, box.right + margin
    if bar.gap is not None and box.left >= bar.gap[0] - 2 and box.right <= bar.gap[1] + 2:
        left, right = max(left, bar.gap[0] + 1), min(right, bar.gap[1] - 1)
    rows, columns = values.shape
    return values[max(0, box.top - margin) : min(rows, box.bottom + margin), max(0, left) : min(columns, right)]


def _reading(bar: ScaleBar, um: float, text: str, *, doubtful: bool) -> BarReading:
    size = um / bar.length
    said = f"label {text!r} = {um:g} µm" if text else f"stated as {um:g} µm"
    words = f"scale bar ({bar.length:.1f} pixels, {said})"
    candidate = Candidate(size, "scale_bar", words, relative_uncertainty=bar.length_sd / bar.length, doubtful=doubtful)
    notes = () if not doubtful else ("the letters of the scale bar are under 14 pixels high; check the length",)
    if not math.isfinite(size):
        return BarReading(bar, flags=("scale_label_unread",))
    return BarReading(bar, um, text, candidate, notes=notes)
