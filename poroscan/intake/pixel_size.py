"""Which source of the pixel size counts, and whether the others agree.

Priority: option or recipe, sidecar table, OME ``PhysicalSizeX``, microscope header, resolution tags that make sense for a
microscope, scale bar.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from poroscan.intake.stored import Resolution
from poroscan.section import PixelSize

#: Sources in the order in which they count.
PRIORITY = ("option", "sidecar", "ome", "header", "resolution_tag", "scale_bar")

#: Two sources that differ by more than this share of the smaller one are in conflict.
CONFLICT = 0.02

#: Pixels whose sides differ by more than this are not square.
NOT_SQUARE = 0.01

#: Micrometres per pixel that a resolution tag of a microscope picture may state: 0.1 nm to 20 µm.
SENSIBLE_UM = (1e-4, 20.0)

#: Printers and scanners state multiples of 300 pixels per inch; such a tag up to 9600 is none of a microscope.
_PRINTER_STEP, _PRINTER_MOST = 300.0, 9600.0


@dataclass(frozen=True)
class Candidate:
    """One statement of the pixel size.

    Parameters
    ----------
    um
        Micrometres per pixel along a row.
    source
        One of ``PRIORITY``.
    words
        Where it stands, for people.
    y_um
        Micrometres per pixel along a column, or None where it is not stated apart.
    relative_uncertainty
        Relative standard uncertainty.
    doubtful
        True where it may confirm but must not contradict (a scale-bar label too small to be read with certainty).
    """

    um: float
    source: str
    words: str
    y_um: float | None = None
    relative_uncertainty: float = 0.0
    doubtful: bool = False


@dataclass(frozen=True)
class Chosen:
    """The pixel size that counts, with notes and flags."""

    size: PixelSize
    notes: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()


def choose(candidates: Sequence[Candidate]) -> Chosen:
    """The candidate of highest priority; the others are compared with it.

    Returns
    -------
    Chosen
        Flag ``no_pixel_size`` where there is no candidate, ``pixel_size_conflict`` where another source differs by more than
        2 %.

    Raises
    ------
    ValueError
        If the pixels of the source that counts are not square (sides differ by more than 1 %).
    """
    usable = sorted((c for c in candidates if math.isfinite(c.um) and c.um > 0), key=lambda c: PRIORITY.index(c.source))
    if not usable:
        return Chosen(PixelSize(None), (), ("no_pixel_size",))
    best = usable[0]
    if best.y_um is not None and _difference(best.um, best.y_um) > NOT_SQUARE:
        raise ValueError(
            f"pixels are {best.um:.6g} µm wide and {best.y_um:.6g} µm high ({best.words}), and only square pixels are "
            "measured; scale the picture to square pixels, or give the pixel size if the header is wrong"
        )
    notes = [f"pixel size {best.um:.6g} µm from {best.words}"]
    flags = []
    for other in usable[1:]:
        if _difference(best.um, other.um) <= CONFLICT:
            continue
        against = f"{other.um:.6g} µm from {other.words} against {best.um:.6g} µm from {best.words}"
        if other.doubtful:
            notes.append(f"not certain: pixel size {against}")
            continue
        notes.append(f"pixel sizes disagree: {against}")
        flags.append("pixel_size_conflict")
    size = PixelSize(best.um, best.source, best.relative_uncertainty)
    return Chosen(size, tuple(notes), tuple(dict.fromkeys(flags)))


def _difference(a: float, b: float) -> float:
    return abs(a - b) / min(a, b) if a > 0 and b > 0 else math.inf


def resolution_candidate(resolution: Resolution | None) -> Candidate | None:
    """Resolution tags as a candidate; None where they make no sense for a microscope.

    Sensible are 0.1 nm to 20 µm per pixel, and no multiple of 300 pixels per inch up to 9600. A unit that the file states in
    words is believed up to 10 mm.
    """
    if resolution is None:
        return None
    low, high = SENSIBLE_UM
    x = resolution.x_um
    if not (low <= x <= (1e4 if resolution.stated_in_words else high)):
        return None
    if not resolution.stated_in_words and _of_a_printer(25400 / x):
        return None
    return Candidate(x, "resolution_tag", f"resolution tags ({resolution.words})", y_um=resolution.y_um)


def _of_a_printer(per_inch: float) -> bool:
    nearest = round(per_inch / _PRINTER_STEP) * _PRINTER_STEP
    return per_inch <= _PRINTER_MOST and abs(per_inch - nearest) < 0.5
